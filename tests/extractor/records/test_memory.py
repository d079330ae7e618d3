"""Memory stays bounded whatever a file declares or holds."""

from __future__ import annotations

import io
import struct
import tracemalloc
import zlib

import numpy as np

from extractor.model import PLANES, RoundBatch
from extractor.records import writers
from extractor.records.planes import read_planes, stored_rounds, write_planes
from extractor.records.rounds import open_rounds
from tests.extractor.records.samples import ALL_TESTS, fault, save

MEBIBYTE = 2**20


class Peak:
    """Highest traced memory within the block, in bytes."""

    def __enter__(self) -> Peak:
        tracemalloc.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.bytes = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()


def _header(descr: str, shape: str, order: bool = False) -> bytes:
    text = f"{{'descr': {descr}, 'fortran_order': {order}, 'shape': {shape}, }}\n".encode()
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text


def test_npy_that_declares_far_more_than_it_holds():
    """A short file that declares 10^12 rounds is refused at once, in every layout."""
    fields = str([(name, "|u1") for name in "xyab"])
    with Peak() as peak:
        for header in (_header("'|u1'", f"({10**12}, 4)"), _header("'|b1'", f"({10**12}, 4)", True),
                       _header("'|u1'", f"(4, {10**12})"), _header("'|u1'", f"(5, {10**12})", True),
                       _header(fields, f"({10**12},)")):
            error = fault(header + bytes(1_000), ALL_TESTS)
            assert error.code == "truncated-file" and "1000 are there" in str(error)
        assert fault(_header("'|u1'", f"({2**50}, 4)"), ALL_TESTS, limit=10**9).code == "too-many-rounds"
        assert fault(b"\x93NUMPY\x02\x00\xff\xff\xff\xff" + bytes(100), ALL_TESTS).code == "bad-header"
    assert peak.bytes < MEBIBYTE


def _bomb(rounds: int) -> bytes:
    """An archive of deflated members of `rounds` zero values each."""
    deflate = zlib.compressobj(9, zlib.DEFLATED, -15)
    head, crc = _header("'|u1'", f"({rounds},)"), 0
    parts = [deflate.compress(head)]
    crc = zlib.crc32(head)
    zeros = bytes(MEBIBYTE)
    for _ in range(rounds // MEBIBYTE):
        parts.append(deflate.compress(zeros))
        crc = zlib.crc32(zeros, crc)
    stream = b"".join([*parts, deflate.flush()])
    size, body, directory = len(head) + rounds, b"", b""
    for name in "xyab":
        raw, offset = f"{name}.npy".encode(), len(body)
        body += struct.pack("<4sHHHHHIIIHH", b"PK\3\4", 20, 0, 8, 0, 33, crc, len(stream), size, len(raw), 0)
        body += raw + stream
        directory += struct.pack("<4sHHHHHHIIIHHHHHII", b"PK\1\2", 20, 20, 0, 8, 0, 33, crc, len(stream), size,
                                 len(raw), 0, 0, 0, 0, 0, offset) + raw
    return body + directory + struct.pack("<4sHHHHIIH", b"PK\5\6", 0, 0, 4, 4, len(directory), len(body), 0)


def test_members_that_expand_a_thousandfold():
    """Deflated zeros, a thousand times as long as the file, pass through in windows."""
    rounds = 24 * MEBIBYTE
    data = _bomb(rounds)
    assert len(data) < rounds // 200
    with Peak() as peak:
        assert sum(batch.rounds for batch in open_rounds(io.BytesIO(data), "zeros", ALL_TESTS)) == rounds
    assert peak.bytes < 20 * MEBIBYTE


def test_csv_line_without_end():
    """A line of megabytes is refused after its first few hundred bytes."""
    for start in (b"", b"x,y,a,b\n", b"x,y,a,b\n0,1,1,0\n", b"round,x,y,a,b\n"):
        data = start + b"0" * (8 * MEBIBYTE)
        with Peak() as peak:
            assert fault(data, ALL_TESTS).code in ("bad-header", "column-count")
        assert peak.bytes < (8 + 12) * MEBIBYTE         # `fault` itself holds one copy of the file


class _Counter(io.RawIOBase):
    """A file that counts what is written and keeps nothing."""

    def __init__(self) -> None:
        self.place = self.size = 0

    def writable(self) -> bool:
        return True

    def write(self, data) -> int:
        self.place += len(data)
        self.size = max(self.size, self.place)
        return len(data)

    def seek(self, offset: int, whence: int = 0) -> int:
        self.place = offset if whence == 0 else self.place + offset if whence == 1 else self.size + offset
        return self.place

    def seekable(self) -> bool:
        return True

    def tell(self) -> int:
        return self.place


def _zeros(batches: int):
    planes = {name: np.zeros(2**17, np.uint8) for name in PLANES} | {"t": np.full(2**17, 255, np.uint8), "x": np.full(2**17, 85, np.uint8)}
    for _ in range(batches):
        yield RoundBatch(2**20, planes)


def test_writers_keep_little_in_memory():
    """A writer holds windows, not the run."""
    for writer, keywords in ((writers.write_npz, {}), (writers.write_npz, {"packed": False}), (writers.write_npy, {}),
                             (writers.write_npy, {"packed": True}), (writers.write_csv, {})):
        with Peak() as peak:
            assert writer(_Counter(), _zeros(16), **keywords) == 2**24
        assert peak.bytes < 48 * MEBIBYTE, writer
    with Peak() as peak:
        assert write_planes(_Counter(), _zeros(64)) == 2**26
    assert peak.bytes < 4 * MEBIBYTE


def test_readers_hold_a_window(tmp_path):
    """Reading a run from disk takes the memory of a window, not of the run."""
    path = tmp_path / "rounds"
    for writer, keywords, most in ((writers.write_npz, {}, 16), (writers.write_npy, {"packed": True}, 16)):
        writer(path, _zeros(128), **keywords)
        with path.open("rb") as file, Peak() as peak:
            assert sum(batch.rounds for batch in open_rounds(file, "rounds", ALL_TESTS)) == 2**27
        assert peak.bytes < most * MEBIBYTE
    with path.open("wb") as file:
        write_planes(file, _zeros(64))
    with path.open("rb") as file, Peak() as peak:
        assert stored_rounds(file) == 2**26
        assert sum(batch.rounds for batch in read_planes(file)) == 2**26
    assert peak.bytes < 4 * MEBIBYTE


def test_array_saved_by_numpy_with_a_pickle():
    """An array of objects is refused by its header; nothing of it is unpickled."""
    class Trap:
        def __reduce__(self):
            return exec, ("raise SystemExit",)
    assert fault(save(np.array([Trap()], dtype=object)), ALL_TESTS).code == "wrong-type"
