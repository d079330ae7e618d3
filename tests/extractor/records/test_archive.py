"""Zip archives: one meaning or a refusal, and never more memory than a window."""

from __future__ import annotations

import io
import struct
import warnings
import zipfile
import zlib

import numpy as np
import pytest

from extractor.records import writers
from tests.extractor.records.samples import (
    ALL_TESTS, SPOT_CHECKS, batch_of, columns_of, fault, joined, opened, same, save, savez, written,
)

BITS = {name: np.arange(20, dtype=np.uint8) % 2 for name in "xyab"}


def _archive(members: list[tuple[str, bytes]], method: int = zipfile.ZIP_STORED) -> bytes:
    file = io.BytesIO()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")            # zipfile warns of the second member of one name
        with zipfile.ZipFile(file, "w", method) as archive:
            for name, data in members:
                archive.writestr(name, data)
    return file.getvalue()


MEMBERS = [(f"{name}.npy", save(column)) for name, column in BITS.items()]


def test_duplicate_and_foreign_members():
    """A second member of one name, and any member that is not an array of ours, is refused."""
    error = fault(_archive(MEMBERS + MEMBERS[2:3]), ALL_TESTS)
    assert (error.code, error.field) == ("repeated-field", "a")
    for name in ("notes.txt", "x", "x.npy.gz", "sub/", "time.npy", "../x.npy", "X.npy"):
        error = fault(_archive([*MEMBERS, (name, save(BITS["x"]))]), ALL_TESTS)
        assert error.code == "unknown-field" and error.field in (name, name.removesuffix(".npy"))
    for name in ("gr\u00fcn.npy", "n" * 99 + ".npy"):
        assert fault(_archive([*MEMBERS, (name, b"")]), ALL_TESTS).code == "unknown-field"


def test_missing_and_empty_members():
    """An archive without members, or with an empty one, is refused."""
    assert fault(_archive([]), ALL_TESTS).code == "missing-field"
    error = fault(_archive([("x.npy", b""), *MEMBERS[1:]]), ALL_TESTS)
    assert (error.code, error.field) == ("truncated-file", "x")


@pytest.mark.parametrize("method", [zipfile.ZIP_BZIP2, zipfile.ZIP_LZMA])
def test_other_compressions(method):
    """Only stored and deflated members are read."""
    error = fault(_archive(MEMBERS, method), ALL_TESTS)
    assert error.code == "unsupported-compression" and "deflated" in str(error)


@pytest.mark.parametrize("bit", [0x1, 0x40, 0x2000])
def test_encrypted_members(bit):
    """An encrypted member is refused as such."""
    data = bytearray(_archive(MEMBERS))
    start = data.index(b"PK\x01\x02")
    data[start + 8 : start + 10] = struct.pack("<H", bit)
    error = fault(bytes(data), ALL_TESTS)
    assert (error.code, error.field) == ("encrypted-file", "x") and "password" in str(error)


def test_bytes_around_the_archive():
    """Bytes in front, behind or between, and comments, are refused."""
    data = _archive(MEMBERS)
    assert fault(data + b"\0", ALL_TESTS).code == "bytes-after-end"
    assert fault(data + bytes(5_000), ALL_TESTS).code == "bytes-after-end"
    assert fault(data[:-2] + b"\x03\x00abc", ALL_TESTS).code == "bytes-after-end"
    assert fault(data[:-2] + b"\x03\x00", ALL_TESTS).code == "bad-archive"
    assert fault(data + data, ALL_TESTS).code == "bad-archive"
    assert fault(data[:100] + b"?" + data[100:], ALL_TESTS).code == "bad-archive"
    assert fault(b"PK\x03\x04" + data, ALL_TESTS).code == "bad-archive"
    directory = data.index(b"PK\x01\x02")
    between = bytearray(data[:directory] + bytes(7) + data[directory:])
    between[-6:-2] = struct.pack("<I", directory + 7)
    error = fault(bytes(between), ALL_TESTS)
    assert error.code == "bad-archive" and "between" in str(error)


def test_every_truncation_of_an_archive():
    """An archive cut anywhere is refused as cut."""
    for compressed in (False, True):
        data = written(writers.write_npz, [batch_of(columns_of(20))], compressed=compressed)
        for length in range(4, len(data)):
            assert fault(data[:length]).code == "truncated-file"


def test_checksums():
    """A changed bit of a stored or deflated member is noticed."""
    columns = columns_of(4_000)
    data = bytearray(written(writers.write_npz, [batch_of(columns)]))
    data[data.index(b"a.npy") + 600] ^= 4
    error = fault(bytes(data))
    assert (error.code, error.field) == ("checksum-mismatch", "a")
    deflated = savez(True, **columns)
    start = deflated.index(b"PK\x01\x02")
    changed = bytearray(deflated)
    for place in (start + 16, changed.index(b"t.npy") - 30 + 14):      # checksum in directory and local header
        changed[place] ^= 1
    error = fault(bytes(changed))
    assert (error.code, error.field) == ("checksum-mismatch", "t")


def _built(payloads: dict[str, bytes], *, packed: dict[str, bytes] | None = None, descriptor: str = "",
           long: bool = False, claimed: dict[str, int] | None = None) -> bytes:
    """An archive put together by hand: data descriptors, zip64 numbers and false sizes on demand."""
    body, directory = b"", b""
    for name, data in payloads.items():
        stream = (packed or {}).get(name, data)
        method = 8 if packed and name in packed else 0
        size, crc = (claimed or {}).get(name, len(data)), zlib.crc32(data)
        flags, offset = 8 if descriptor else 0, len(body)
        raw = f"{name}.npy".encode()
        here = (0, 0, 0) if descriptor else (crc, len(stream), size)
        body += struct.pack("<4sHHHHHIIIHH", b"PK\3\4", 20, flags, method, 0, 33, *here, len(raw), 0) + raw + stream
        if descriptor:
            body += struct.pack("<4sIII" if "Q" not in descriptor else "<4sIQQ", b"PK\7\x08", crc, len(stream), size)[
                0 if "s" in descriptor else 4:]
        extra, numbers = b"", (len(stream), size, offset)
        if long:
            extra = struct.pack("<HHI", 0x7777, 4, 7) + struct.pack("<HHQQQ", 1, 24, size, len(stream), offset)
            numbers = (2**32 - 1,) * 3
        directory += struct.pack("<4sHHHHHHIIIHHHHHII", b"PK\1\2", 45, 45, flags, method, 0, 33, crc, *numbers[:2],
                                 len(raw), len(extra), 0, 0, 0, 0, numbers[2]) + raw + extra
    start = len(body)
    end = (len(payloads), len(directory), start)
    tail = b""
    if long:
        place = start + len(directory)
        tail = struct.pack("<4sQHHIIQQQQ", b"PK\6\6", 44, 45, 45, 0, 0, end[0], end[0], end[1], end[2])
        tail += struct.pack("<4sIQI", b"PK\6\7", 0, place, 1)
        end = (0xFFFF, 2**32 - 1, 2**32 - 1)
    return body + directory + tail + struct.pack("<4sHHHHIIH", b"PK\5\6", 0, 0, end[0], end[0], end[1], end[2], 0)


PAYLOADS = {name: save(column) for name, column in columns_of(100).items()}


def _deflate(data: bytes) -> bytes:
    stream = zlib.compressobj(9, zlib.DEFLATED, -15)
    return stream.compress(data) + stream.flush()


@pytest.mark.parametrize("descriptor", ["", "I", "sI", "Q", "sQ"])
@pytest.mark.parametrize("long", [False, True])
@pytest.mark.parametrize("deflated", [False, True])
def test_archives_of_streaming_and_large_file_writers(descriptor, long, deflated):
    """Data descriptors of all four forms and zip64 numbers are read, and every byte of them is checked."""
    packed = {name: _deflate(data) for name, data in PAYLOADS.items()} if deflated else None
    data = _built(PAYLOADS, packed=packed, descriptor=descriptor, long=long)
    assert same(joined(opened(data)), columns_of(100))
    if descriptor:
        at = data.index(b"PK\3\4", 4) - 5
        assert fault(data[:at] + bytes([data[at] ^ 1]) + data[at + 1 :]).code == "bad-archive"
    if long:
        at = data.index(b"PK\6\6")
        for place in (at, at + 4, at + 16, at + 24, at + 32, at + 40, at + 48, at + 56, at + 64):
            error = fault(data[:place] + bytes([data[place] ^ 1]) + data[place + 1 :])
            assert error.code in ("bad-archive", "truncated-file")


def test_false_sizes_of_deflated_members():
    """A deflated member that holds more or fewer bytes than declared, or goes on after its end, is refused."""
    packed = {name: _deflate(data) for name, data in PAYLOADS.items()}
    whole = len(PAYLOADS["x"])
    assert fault(_built(PAYLOADS, packed=packed, claimed={"x": whole + 1})).code == "bytes-after-end"
    assert fault(_built(PAYLOADS, packed=packed, claimed={"x": whole - 1})).code == "truncated-file"
    for payload, code in ((PAYLOADS["x"] + b"\0", "bytes-after-end"), (PAYLOADS["x"][:-1], "truncated-file")):
        error = fault(_built(PAYLOADS, packed=packed | {"x": _deflate(payload)}))
        assert (error.code, error.field) == (code, "x")
    error = fault(_built(PAYLOADS, packed=packed | {"b": packed["b"] + b"\0"}))
    assert (error.code, error.field) == ("bytes-after-end", "b")
    error = fault(_built(PAYLOADS, packed=packed | {"b": packed["b"][:-1]}))
    assert (error.code, error.field) == ("truncated-file", "b")
    error = fault(_built(PAYLOADS, packed=packed | {"y": b"\xff" * 40}))
    assert (error.code, error.field) == ("bad-archive", "y")
    error = fault(_built(PAYLOADS, packed=packed, claimed={"x": 2**31}))
    assert (error.code, error.field) == ("bad-archive", "x") and "can hold" in str(error)


def test_directory_and_local_headers_must_agree():
    """Each field of a local header that has a meaning is compared with the directory."""
    data = _built(PAYLOADS)
    for place in (0, 6, 8, 14, 18, 22, 26, 28, 30):
        changed = bytearray(data)
        changed[place] ^= 2
        with pytest.raises(Exception) as caught:
            list(opened(bytes(changed)))
        assert caught.value.code in ("bad-archive", "unknown-format")


def test_too_many_members_and_a_long_directory():
    """The directory is bounded, so an archive cannot make us read megabytes of it."""
    assert fault(_archive([(f"m{k}.npy", b"") for k in range(40)])).code == "bad-archive"
    data = bytearray(_built(PAYLOADS))
    assert fault(bytes(data[:-12]) + b"\x06\x00" + bytes(data[-10:])).code == "bad-archive"


def test_members_in_any_order():
    """The order of the members does not matter."""
    columns = columns_of(100)
    for names in ("baytx", "txyab"):
        assert same(joined(opened(savez(**{name: columns[name] for name in names}), SPOT_CHECKS)), columns)
