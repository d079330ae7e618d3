"""Where the bytes of one array come from: a stretch of a seekable file, read in order, never beyond its end.

Several sources of one file may be read in turns; each keeps its own place. Memory is one request.
"""

from __future__ import annotations

from typing import BinaryIO, Protocol

from extractor.errors import InputError


def read_up_to(file: BinaryIO, count: int) -> bytes:
    """`count` bytes, or fewer at the end of the file only (a raw reader may hand out less at a time)."""
    data = file.read(count)
    if len(data) == count or not data:
        return data
    parts, missing = [data], count - len(data)
    while missing and (data := file.read(missing)):
        parts.append(data)
        missing -= len(data)
    return b"".join(parts)


class Source(Protocol):
    """Bytes in order: `left` of them are still to come."""

    left: int

    def read(self, count: int) -> bytes:
        """Exactly `count` <= left bytes. Errors raised: InputError if the file does not hold them."""

    def finish(self) -> None:
        """Check whatever can only be checked at the end. Errors raised: InputError."""


class Span:
    """A stretch of a file as a Source."""

    def __init__(self, file: BinaryIO, start: int, size: int, name: str, field: str | None = None) -> None:
        self.left = size
        self._file, self._place, self._name, self._field = file, start, name, field

    def read(self, count: int) -> bytes:
        self._file.seek(self._place)
        data = read_up_to(self._file, count)
        if len(data) != count:
            raise InputError(f"the file ends {count - len(data)} bytes early", code="truncated-file",
                             file=self._name, field=self._field)
        self._place += count
        self.left -= count
        return data

    def finish(self) -> None:
        """Nothing is left to check: the size was compared with the file before the first read."""
