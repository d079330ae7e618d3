"""NPY files: one array that holds all fields of the rounds.

shape (n, 4) or (n, 5), bool, uint8 or int8   one row per round, columns x, y, a, b[, t]; C or Fortran order
shape (4, m) or (5, m), uint8                 packed planes x, y, a, b[, t] in this order; 8 m rounds, least
                                              significant bit first; refused if no byte exceeds 1, because then it is
                                              surely an array of values that lies on its side
shape (n,), structured                        fields x, y, a, b[, t] of those types and, perhaps, an integer field round

A uint8 array of 4 or 5 rows and 4 or 5 columns could be either of the first two and is refused.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO

import numpy as np

from extractor.model import RoundBatch
from extractor.records.columns import read_packed, read_values
from extractor.records.intake import BATCH_ROUNDS, Intake
from extractor.records.npyhead import MAGIC, NpyHeader, bit_dtype, check_size, read_header, structured_dtype
from extractor.records.source import Span

NAME = "npy"
_ORDER = ("x", "y", "a", "b", "t")
_TELLING_ROUNDS = 64        # in fewer, honest packed planes may have no other byte by chance
_SHAPES = "(n, 4) or (n, 5) values, or (4, bytes) or (5, bytes) uint8 planes, are needed"


def matches(head: bytes) -> bool:
    """Whether a file that begins with `head` is of this format."""
    return head.startswith(MAGIC)


def read(file: BinaryIO, intake: Intake) -> Iterator[RoundBatch]:
    """The rounds of an NPY file."""
    size = file.seek(0, 2)
    source = Span(file, 0, size, intake.name)
    header = read_header(source, intake)
    start = size - source.left
    if type(header.descr) is tuple:
        return _structured(source, header, intake)
    dtype = bit_dtype(header.descr, intake, None)
    if len(header.shape) != 2:
        raise intake.fault(f"has shape {header.shape}; {_SHAPES}", "wrong-shape")
    rows, columns = header.shape
    packed = rows in (4, 5) and dtype.kind == "u"
    by_round = columns in (4, 5)
    if packed and by_round:
        raise intake.fault(f"has shape {header.shape}, which could be {rows} rounds or {rows} packed planes: "
                           "use NPZ, whose fields have names, or bool values", "ambiguous-shape")
    if not packed and not by_round:
        raise intake.fault(f"has shape {header.shape}; {_SHAPES}", "wrong-shape")
    width, length = (rows, columns) if packed else (columns, rows)
    names = _ORDER[:width]
    intake.check_fields(names)
    intake.expect(8 * length if packed else length)
    check_size(source, rows * columns, intake)
    if packed == header.fortran_order:
        batches = _interleaved(source, names, length, packed, dtype, intake)
        return _upright(batches, intake) if packed else batches
    sources = {name: Span(file, start + k * length, length, intake.name, name) for k, name in enumerate(names)}
    if packed:
        return _upright(read_packed(intake, sources, 8 * length), intake)
    return read_values(intake, sources, dict.fromkeys(names, dtype), length)


def _upright(batches: Iterator[RoundBatch], intake: Intake) -> Iterator[RoundBatch]:
    """The same batches; an error at the end if every byte was 0 or 1: read as planes, such a file would invent rounds."""
    seen, rounds = False, 0
    for batch in batches:
        seen = seen or any(int(batch.planes[name].max()) > 1 for name in ("x", "y", "a", "b"))
        rounds += batch.rounds
        yield batch
    if not seen and rounds >= _TELLING_ROUNDS:
        raise intake.fault("holds nothing but 0 and 1 in 4 or 5 long rows: that is an array of values on its side, not packed planes; "
                           "write it with one row per round (transpose it)", "transposed")


def _interleaved(source: Span, names: tuple[str, ...], length: int, packed: bool, dtype: np.dtype,
                 intake: Intake) -> Iterator[RoundBatch]:
    """Fields that alternate byte by byte."""
    kinds = dict.fromkeys(names, dtype.kind)
    step = BATCH_ROUNDS // 8 if packed else BATCH_ROUNDS
    for start in range(0, length, step):
        count = min(step, length - start)
        matrix = np.frombuffer(source.read(count * len(names)), np.uint8).reshape(count, len(names))
        columns = {name: np.ascontiguousarray(matrix[:, k]) for k, name in enumerate(names)}
        yield intake.planes(columns, 8 * count) if packed else intake.values(columns, None, kinds)


def _structured(source: Span, header: NpyHeader, intake: Intake) -> Iterator[RoundBatch]:
    dtype = structured_dtype(header.descr, intake)
    if len(header.shape) != 1:
        raise intake.fault(f"has shape {header.shape}; a structured array needs shape (n,)", "wrong-shape")
    length = header.shape[0]
    intake.expect(length)
    check_size(source, length * dtype.itemsize, intake)
    return _structured_rows(source, dtype, length, intake)


def _structured_rows(source: Span, dtype: np.dtype, length: int, intake: Intake) -> Iterator[RoundBatch]:
    fields = [name for name in dtype.names or () if name != "round"]
    kinds = {name: dtype[name].kind for name in fields}
    for start in range(0, length, BATCH_ROUNDS):
        count = min(BATCH_ROUNDS, length - start)
        rows = np.frombuffer(source.read(count * dtype.itemsize), dtype)
        numbers = rows["round"] if "round" in (dtype.names or ()) else None
        yield intake.values({name: rows[name].view(np.uint8) for name in fields}, numbers, kinds)
