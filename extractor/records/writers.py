"""Writers of the round files that `rounds` reads, streaming: for the simulator, for tests, and to hand rounds on.

Every writer takes a path or a seekable binary file, and batches of any sizes; it returns the number of rounds.
with_t leaves the t field out if False, which only a run of test rounds survives; first_round adds a field `round`
counting up from that number. The same rounds and arguments give the same bytes.
"""

from __future__ import annotations

import contextlib
import shutil
import tempfile
import zipfile
from collections.abc import Iterable, Iterator, Sequence
from os import PathLike
from typing import BinaryIO

import numpy as np

from extractor.errors import Defect, InputError
from extractor.model import RoundBatch
from extractor.records.csv import write_numbers
from extractor.records.planes import rebatch

_ORDER = ("x", "y", "a", "b", "t")
_NPY_HEADER_BYTES = 256         # holds the description of six fields and any number of rounds
_SPOOL_BYTES = 2**22
_CSV_ROWS = 2**16
Target = str | PathLike | BinaryIO


def write_npz(target: Target, batches: Iterable[RoundBatch], *, packed: bool = True, compressed: bool = False,
              with_t: bool = True, first_round: int | None = None) -> int:
    """An NPZ file of packed planes or of bytes. Errors raised: InputError for packed planes with first_round."""
    if packed and first_round is not None:
        raise InputError("packed NPZ files have no round field; write values", code="unknown-field", field="round")
    names = _names(with_t)
    rounds = 0
    with _open(target) as file, contextlib.ExitStack() as stack:
        # A member is whole before the next begins, but batches hold a piece of each: they wait in temporary files.
        spools = {name: stack.enter_context(tempfile.SpooledTemporaryFile(_SPOOL_BYTES)) for name in names}
        for batch in rebatch(batches):
            for name in names:
                spools[name].write((batch.planes[name] if packed else _values(batch, name)).tobytes())
            rounds += batch.rounds
        with zipfile.ZipFile(file, "w", zipfile.ZIP_DEFLATED if compressed else zipfile.ZIP_STORED) as archive:
            for name in names:
                length = spools[name].tell()
                spools[name].seek(0)
                with _member(archive, name, length) as member:
                    member.write(_npy_header("'|u1'", (length,)))
                    shutil.copyfileobj(spools[name], member, 2**20)
            if packed:
                with _member(archive, "rounds", 8) as member:
                    member.write(_npy_header("'<i8'", ()) + rounds.to_bytes(8, "little"))
            if first_round is not None:
                with _member(archive, "round", 8 * rounds) as member:
                    member.write(_npy_header("'<i8'", (rounds,)))
                    for start in range(0, rounds, 2**17):
                        numbers = np.arange(first_round + start, first_round + min(rounds, start + 2**17), dtype="<i8")
                        member.write(numbers.tobytes())
    return rounds


def write_npy(target: Target, batches: Iterable[RoundBatch], *, packed: bool = False, with_t: bool = True,
              first_round: int | None = None) -> int:
    """An NPY file: rows of bytes, packed planes, or (with first_round) a structured array.

    Errors raised: InputError for packed planes if the rounds are not a multiple of 8, or with first_round.
    """
    names = _names(with_t)
    if packed and first_round is not None:
        raise InputError("packed NPY files have no round field; write values", code="unknown-field", field="round")
    rounds = 0
    with _open(target) as file, contextlib.ExitStack() as stack:
        start = file.tell()
        file.write(bytes(_NPY_HEADER_BYTES))       # the shape is known at the end only
        if packed:
            spools = {name: stack.enter_context(tempfile.SpooledTemporaryFile(_SPOOL_BYTES)) for name in names}
            for batch in rebatch(batches):
                for name in names:
                    spools[name].write(batch.planes[name].tobytes())
                rounds += batch.rounds
            if rounds % 8:
                raise InputError(f"{rounds} rounds do not fill whole bytes; write NPZ, which stores their number",
                                 code="unequal-lengths")
            for name in names:
                spools[name].seek(0)
                shutil.copyfileobj(spools[name], file, 2**20)
            header = _npy_header("'|u1'", (len(names), rounds // 8))
        else:
            fields = [(name, "|u1") for name in names]
            dtype = np.dtype([("round", "<i8"), *fields] if first_round is not None else fields)
            for batch in rebatch(batches):
                rows = np.empty(batch.rounds, dtype)
                for name in names:
                    rows[name] = _values(batch, name)
                if first_round is not None:
                    rows["round"] = np.arange(first_round + rounds, first_round + rounds + batch.rounds)
                file.write(rows.tobytes())
                rounds += batch.rounds
            header = (_npy_header("'|u1'", (rounds, len(names))) if first_round is None
                      else _npy_header(str(dtype.descr), (rounds,)))
        end = file.tell()
        file.seek(start)
        file.write(header)
        file.seek(end)
    return rounds


def write_csv(target: Target, batches: Iterable[RoundBatch], *, with_t: bool = True, first_round: int | None = None,
              columns: Sequence[str] | None = None, crlf: bool = False) -> int:
    """A CSV file; `columns` gives the order of the fields, the default being round, x, y, a, b, t as far as present."""
    end = b"\r\n" if crlf else b"\n"
    names = list(columns or (("round",) if first_round is not None else ()) + _names(with_t))
    number = first_round or 0
    rounds = 0
    with _open(target) as file:
        file.write(",".join(names).encode() + end)
        for batch in rebatch(batches, _CSV_ROWS):
            values = {name: _values(batch, name) for name in names if name != "round"}
            done = 0
            while done < batch.rounds:
                digits = len(str(number))
                rows = min(batch.rounds - done, 10**digits - number) if "round" in names else batch.rounds
                line = b",".join(b"0" * (digits if name == "round" else 1) for name in names) + end
                table = np.tile(np.frombuffer(line, np.uint8), (rows, 1))
                offset = 0
                for name in names:
                    if name == "round":
                        write_numbers(table[:, offset : offset + digits], number)
                        offset += digits + 1
                    else:
                        table[:, offset] += values[name][done : done + rows]
                        offset += 2
                file.write(table.tobytes())
                done += rows
                number += rows
            rounds += batch.rounds
    return rounds


def _names(with_t: bool) -> tuple[str, ...]:
    return _ORDER if with_t else _ORDER[:4]


def _values(batch: RoundBatch, name: str) -> np.ndarray:
    return np.unpackbits(batch.planes[name], count=batch.rounds, bitorder="little")


def _npy_header(descr: str, shape: tuple[int, ...]) -> bytes:
    text = f"{{'descr': {descr}, 'fortran_order': False, 'shape': {shape}, }}"
    length = _NPY_HEADER_BYTES - 10
    if len(text) >= length:
        raise Defect(f"the NPY header takes more than {_NPY_HEADER_BYTES} bytes")
    return b"\x93NUMPY\x01\x00" + length.to_bytes(2, "little") + text.ljust(length - 1).encode() + b"\n"


def _member(archive: zipfile.ZipFile, name: str, length: int):
    # ZipInfo without a date is 1 January 1980: no clock enters the file.
    info = zipfile.ZipInfo(f"{name}.npy")
    info.compress_type = archive.compression
    return archive.open(info, "w", force_zip64=length > 2**31)


@contextlib.contextmanager
def _open(target: Target) -> Iterator[BinaryIO]:
    if isinstance(target, (str, PathLike)):
        with open(target, "wb") as file:
            yield file
    else:
        yield target
