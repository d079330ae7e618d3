"""A strict, bounded reader of zip archives: every byte of the file is a member, its header, or the directory.

A tolerant reader accepts archives that two programs read differently (bytes in front, behind or between, two members of
one name, local headers that disagree with the directory). Here they are refused, so an archive has one meaning.
Layout (PKWARE APPNOTE 6.3.10, sections 4.3 to 4.5): members (local header, data, perhaps a data descriptor) from
offset 0 without gaps, central directory, [zip64 end record and locator,] end record without comment.

Codes raised here: truncated-file, bytes-after-end, bad-archive, encrypted-file, unsupported-compression,
repeated-field, unknown-field, checksum-mismatch.
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass
from typing import BinaryIO

from extractor.errors import InputError
from extractor.records.intake import Intake
from extractor.records.source import Source, Span, read_up_to

LOCAL_MARK = b"PK\x03\x04"
END_MARK = b"PK\x05\x06"
_DIRECTORY_MARK = b"PK\x01\x02"
_END64_MARK, _LOCATOR64_MARK = b"PK\x06\x06", b"PK\x06\x07"
_LOCAL = struct.Struct("<4sHHHHHIIIHH")
_ENTRY = struct.Struct("<4sHHHHHHIIIHHHHHII")
_END = struct.Struct("<4sHHHHIIH")
_END64 = struct.Struct("<4sQHHIIQQQQ")
_LOCATOR64 = struct.Struct("<4sIQI")
_STORED, _DEFLATED = 0, 8
_ENCRYPTED, _DESCRIPTOR, _STRONG, _MASKED = 0x1, 0x8, 0x40, 0x2000
_PLAIN_FLAGS = 0x2 | 0x4 | _DESCRIPTOR | 0x800
_MEMBER_LIMIT = 16
_DIRECTORY_LIMIT = 2**16
_DEFLATE_RATIO = 1032               # deflate never expands more (zlib technical notes; from memory)
_INFLATE_STEP = 2**16


@dataclass(frozen=True)
class _Entry:
    name: str
    flags: int
    method: int
    crc: int
    packed_bytes: int
    bytes: int
    offset: int

    @property
    def field(self) -> str:
        return self.name.removesuffix(".npy")


def open_members(file: BinaryIO, intake: Intake) -> dict[str, Source]:
    """Field -> data of the member "<field>.npy", in the order of the file. Errors raised: InputError unless sound."""
    size = file.seek(0, 2)
    entries, directory_start = _directory(file, size, intake)
    members: dict[str, Source] = {}
    place = 0
    for number, entry in enumerate(entries):
        if not entry.name.endswith(".npy"):
            raise intake.fault("is a member that does not belong into a round file", "unknown-field", field=entry.name)
        if entry.field in members:
            raise intake.fault("stands twice in the archive", "repeated-field", field=entry.field)
        _check_entry(entry, intake)
        if entry.offset != place:
            raise intake.fault("does not begin where the member before it ends", "bad-archive", field=entry.field)
        following = entries[number + 1].offset if number + 1 < len(entries) else directory_start
        start = _data_start(file, entry, following, intake)
        place = _data_end(file, entry, start, following, intake)
        kind = _Stored if entry.method == _STORED else _Deflated
        members[entry.field] = kind(file, start, entry, intake)
    if place != directory_start:
        raise intake.fault("has bytes between its last member and its directory", "bad-archive")
    return members


def _bytes_at(file: BinaryIO, offset: int, count: int) -> bytes:
    file.seek(offset)
    return read_up_to(file, count)


def _directory(file: BinaryIO, size: int, intake: Intake) -> tuple[list[_Entry], int]:
    tail = _bytes_at(file, max(0, size - _END.size), _END.size)
    if len(tail) != _END.size or not tail.startswith(END_MARK):
        last = _bytes_at(file, max(0, size - 2**16 - _END.size), 2**16 + _END.size)
        if END_MARK in last[: -_END.size + len(END_MARK)]:
            raise intake.fault("has bytes, or a comment, after the end of the archive", "bytes-after-end")
        raise intake.fault("is a zip archive without its end: it was cut", "truncated-file")
    _, disk, start_disk, here, count, length, offset, comment = _END.unpack(tail)
    end = size - _END.size
    if disk or start_disk or here != count or comment:
        raise intake.fault("is an archive in several parts, or was cut within its comment", "bad-archive")
    locator = _bytes_at(file, end - _LOCATOR64.size, _LOCATOR64.size) if end >= _LOCATOR64.size else b""
    if locator.startswith(_LOCATOR64_MARK):
        end -= _LOCATOR64.size + _END64.size
        record = _bytes_at(file, end, _END64.size) if end >= 0 else b""
        _, _, place, _ = _LOCATOR64.unpack(locator)
        if len(record) != _END64.size or not record.startswith(_END64_MARK) or place != end:
            raise intake.fault("has a zip64 end record that is not where it is said to be", "bad-archive")
        _, record_bytes, _, _, disk, start_disk, here64, count64, length64, offset64 = _END64.unpack(record)
        short = ((count, 0xFFFF, count64), (length, 2**32 - 1, length64), (offset, 2**32 - 1, offset64))
        if record_bytes != _END64.size - 12 or disk or start_disk or here64 != count64 or any(
                value not in (escape, long) for value, escape, long in short):
            raise intake.fault("has two end records that disagree", "bad-archive")
        count, length, offset = count64, length64, offset64
    if offset + length != end:
        raise intake.fault("has a directory that is not where its end record says", "bad-archive")
    if count > _MEMBER_LIMIT or length > _DIRECTORY_LIMIT:
        raise intake.fault(f"has more than {_MEMBER_LIMIT} members, or a very long directory", "bad-archive")
    data, entries, position = _bytes_at(file, offset, length), [], 0
    for _ in range(count):
        entry, position = _entry(data, position, intake)
        entries.append(entry)
    if position != len(data):
        raise intake.fault("has a directory that does not end with its last entry", "bad-archive")
    return sorted(entries, key=lambda item: item.offset), offset


def _entry(data: bytes, position: int, intake: Intake) -> tuple[_Entry, int]:
    if len(data) - position < _ENTRY.size or not data.startswith(_DIRECTORY_MARK, position):
        raise intake.fault("has a damaged directory", "bad-archive")
    (_, _, _, flags, method, _, _, crc, packed_bytes, size, name_size, extra_size, comment_size, disk, _, _,
     offset) = _ENTRY.unpack_from(data, position)
    name_start = position + _ENTRY.size
    end = name_start + name_size + extra_size + comment_size
    if end > len(data) or disk or comment_size:
        raise intake.fault("has a damaged directory", "bad-archive")
    name = _name(data[name_start : name_start + name_size], intake)
    extra = data[name_start + name_size : name_start + name_size + extra_size]
    size, packed_bytes, offset = _long_values(extra, (size, packed_bytes, offset), name, intake)
    return _Entry(name, flags, method, crc, packed_bytes, size, offset), end


def _name(raw: bytes, intake: Intake) -> str:
    text = raw.decode("ascii", "replace")
    if not raw or len(raw) > 64 or not text.isascii() or not text.isprintable():
        raise intake.fault("has a member whose name is not short plain ASCII", "unknown-field", field=ascii(text[:40]))
    return text


def _long_values(extra: bytes, values: tuple[int, ...], name: str, intake: Intake) -> list[int]:
    """Replace the values that are all ones by those of the zip64 extra field, in order (APPNOTE 4.5.3)."""
    found, position = b"", 0
    while position < len(extra):
        if len(extra) - position < 4:
            raise intake.fault("has a damaged extra field", "bad-archive", field=name)
        kind, length = struct.unpack_from("<HH", extra, position)
        body = extra[position + 4 : position + 4 + length]
        if len(body) != length or (kind == 1 and found):
            raise intake.fault("has a damaged extra field", "bad-archive", field=name)
        found = body if kind == 1 else found
        position += 4 + length
    result = []
    for value in values:
        if value == 2**32 - 1 and len(found) >= 8:
            value, found = int.from_bytes(found[:8], "little"), found[8:]
        result.append(value)
    return result


def _check_entry(entry: _Entry, intake: Intake) -> None:
    if entry.flags & (_ENCRYPTED | _STRONG | _MASKED):
        raise intake.fault("is encrypted; upload it without a password", "encrypted-file", field=entry.field)
    if entry.flags & ~_PLAIN_FLAGS:
        raise intake.fault("uses an unknown feature of zip archives", "bad-archive", field=entry.field)
    if entry.method not in (_STORED, _DEFLATED):
        raise intake.fault(f"is compressed by method {entry.method}; stored and deflated members are read",
                           "unsupported-compression", field=entry.field)
    if entry.method == _STORED and entry.bytes != entry.packed_bytes:
        raise intake.fault("is stored, but has two different sizes", "bad-archive", field=entry.field)
    if entry.bytes > _DEFLATE_RATIO * entry.packed_bytes:
        raise intake.fault(f"declares {entry.bytes} bytes, more than its {entry.packed_bytes} compressed bytes "
                           "can hold", "bad-archive", field=entry.field)


def _data_start(file: BinaryIO, entry: _Entry, following: int, intake: Intake) -> int:
    """Where the data begin, after a local header that agrees with the directory."""
    raw = _bytes_at(file, entry.offset, _LOCAL.size)
    damaged = intake.fault("has a header that disagrees with the directory", "bad-archive", field=entry.field)
    if len(raw) != _LOCAL.size or not raw.startswith(LOCAL_MARK):
        raise damaged
    _, _, flags, method, _, _, crc, packed_bytes, size, name_size, extra_size = _LOCAL.unpack(raw)
    names = _bytes_at(file, entry.offset + _LOCAL.size, name_size + extra_size)
    start = entry.offset + _LOCAL.size + name_size + extra_size
    if start > following or names[:name_size] != entry.name.encode() or flags != entry.flags or method != entry.method:
        raise damaged
    size, packed_bytes = _long_values(names[name_size:], (size, packed_bytes), entry.name, intake)
    unknown_yet = flags & _DESCRIPTOR and not (crc or packed_bytes or size)
    escaped = flags & _DESCRIPTOR and not crc and packed_bytes == size == 2**32 - 1
    if not unknown_yet and not escaped and (crc, packed_bytes, size) != (entry.crc, entry.packed_bytes, entry.bytes):
        raise damaged
    return start


def _data_end(file: BinaryIO, entry: _Entry, start: int, following: int, intake: Intake) -> int:
    """Where the member ends, its data descriptor included."""
    end = start + entry.packed_bytes
    if end > following:
        raise intake.fault("reaches into what follows it", "bad-archive", field=entry.field)
    gap = following - end
    if entry.flags & _DESCRIPTOR and gap in (12, 16, 20, 24):
        sizes = "<4sIQQ" if gap in (20, 24) else "<4sIII"
        whole = struct.pack(sizes, b"PK\x07\x08", entry.crc, entry.packed_bytes, entry.bytes)
        if _bytes_at(file, end, gap) == whole[-gap:]:
            return following
        raise intake.fault("has a data descriptor that disagrees with the directory", "bad-archive", field=entry.field)
    return end


class _Stored(Span):
    """Data of a stored member, with its checksum."""

    def __init__(self, file: BinaryIO, start: int, entry: _Entry, intake: Intake) -> None:
        super().__init__(file, start, entry.bytes, intake.name, entry.field)
        self._crc, self._entry, self._intake = 0, entry, intake

    def read(self, count: int) -> bytes:
        data = super().read(count)
        self._crc = zlib.crc32(data, self._crc)
        return data

    def finish(self) -> None:
        if self._crc != self._entry.crc:
            raise _wrong_checksum(self._entry, self._intake)


class _Deflated:
    """Data of a deflated member: never more in memory than one request and one step of compressed bytes."""

    def __init__(self, file: BinaryIO, start: int, entry: _Entry, intake: Intake) -> None:
        self.left = entry.bytes
        self._packed = Span(file, start, entry.packed_bytes, intake.name, entry.field)
        self._inflate, self._waiting = zlib.decompressobj(-zlib.MAX_WBITS), b""
        self._crc, self._entry, self._intake = 0, entry, intake

    def read(self, count: int) -> bytes:
        parts, missing = [], count
        while missing:
            data = self._step(missing)
            if not data and (self._inflate.eof or not (self._waiting or self._packed.left)):
                raise self._fault("holds fewer bytes than the archive declares", "truncated-file")
            parts.append(data)
            missing -= len(data)
        whole = b"".join(parts)
        self._crc = zlib.crc32(whole, self._crc)
        self.left -= count
        return whole

    def _step(self, most: int) -> bytes:
        if not self._waiting and not self._inflate.eof:
            self._waiting = self._packed.read(min(_INFLATE_STEP, self._packed.left))
        try:
            data = self._inflate.decompress(self._waiting, most)
        except zlib.error:
            raise self._fault("has damaged compressed data", "bad-archive") from None
        self._waiting = self._inflate.unconsumed_tail
        return data

    def finish(self) -> None:
        # The end mark of the stream may still be to come; it must be there and be the last thing.
        while not self._inflate.eof:
            if self._step(1):
                raise self._fault("holds more bytes than the archive declares", "bytes-after-end")
            if not (self._inflate.eof or self._waiting or self._packed.left):
                raise self._fault("has compressed data without an end", "truncated-file")
        if self._waiting or self._inflate.unused_data or self._packed.left:
            raise self._fault("has bytes after its compressed data", "bytes-after-end")
        if self._crc != self._entry.crc:
            raise _wrong_checksum(self._entry, self._intake)

    def _fault(self, message: str, code: str) -> InputError:
        return self._intake.fault(message, code, field=self._entry.field)


def _wrong_checksum(entry: _Entry, intake: Intake) -> InputError:
    return intake.fault("does not have the checksum that the archive gives", "checksum-mismatch", field=entry.field)
