"""CSV files: a header line that names the columns, then one line per round.

Columns x, y, a, b and, perhaps, t and round, in any order, separated by commas; line ends LF or CRLF, the same
throughout; the last one may be absent. Values are 0 or 1, or 2 for a no-click in a, b. Round numbers count up by
one; if the first has leading zeros, all are written with that many digits at least.

As the round numbers are known beforehand, so is every byte of every line except the bits. A window of the file is
compared with the lines that must stand there, all at once; what differs anywhere but in the bits is a fault. The
line at fault is then read again, slowly, for the sole purpose of saying what is wrong with it.

Codes raised here: bad-header, column-count, bad-line-ending, not-a-bit, bad-round-number, truncated-file,
besides those of `intake`.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO, NoReturn

import numpy as np

from extractor.errors import Defect, InputError
from extractor.model import RoundBatch
from extractor.records.intake import ROUND_NUMBER_LIMIT, Intake
from extractor.records.source import read_up_to

NAME = "csv"
_LINE_LIMIT = 256
_WINDOW_ROWS = 2**16
_NUMBER_DIGITS = 18
_LOW = 10_000
# The last four digits of 0, 1, ..., 9999 as text: round numbers are made from slices of this.
_LOW_DIGITS = np.array([f"{n:04d}".encode() for n in range(_LOW)], dtype="S4").view(np.uint8).reshape(_LOW, 4)


def matches(head: bytes) -> bool:
    """Whether a file that begins with `head` is of this format: its first line is plain text."""
    line = head.split(b"\n", 1)[0].removeprefix(b"\xef\xbb\xbf").removesuffix(b"\r")
    return all(32 <= c < 127 or c == 9 for c in line)


def read(file: BinaryIO, intake: Intake) -> Iterator[RoundBatch]:
    """The rounds of a CSV file."""
    return _Reader(file, intake).batches()


class _Reader:
    def __init__(self, file: BinaryIO, intake: Intake) -> None:
        self._file, self._intake = file, intake
        self._size = file.seek(0, 2)
        self._place = 0
        self._fields, self._end = self._header()
        self._width = 1                       # least digits of a round number
        self._first: int | None = None        # round number of the first line
        self._next: int | None = None         # round number that must come next
        self._lines: np.ndarray | None = None  # the window of expected lines, kept where it does not change

    def batches(self) -> Iterator[RoundBatch]:
        bits = [name for name in self._fields if name != "round"]
        if "round" in self._fields and self._place < self._size:
            self._first_number()
        columns = np.empty((len(bits), _WINDOW_ROWS), np.uint8)
        while self._place < self._size:
            fill = 0
            while fill < _WINDOW_ROWS and self._place < self._size:
                fill += self._fill(columns, bits, fill)
            first = self._next
            numbers = None if first is None else np.arange(first - fill, first)
            yield self._intake.values({name: columns[k, :fill] for k, name in enumerate(bits)}, numbers)

    def _header(self) -> tuple[list[str], bytes]:
        self._file.seek(0)
        text = read_up_to(self._file, _LINE_LIMIT)
        line, newline, _ = text.partition(b"\n")
        if line.startswith(b"\xef\xbb\xbf"):
            raise self._intake.fault("begins with a byte order mark; save it as plain text without one", "bad-header")
        if not newline and len(text) == _LINE_LIMIT:
            raise self._intake.fault(f"the header line is longer than {_LINE_LIMIT} bytes", "bad-header")
        end = b"\r\n" if line.endswith(b"\r") and newline else b"\n"
        self._place = len(line) + len(newline)
        names = line.removesuffix(b"\r").decode("ascii", "replace")
        if names[:1].isdigit():
            raise self._intake.fault("the first line must name the columns, for example x,y,a,b", "bad-header")
        fields = names.split(",")
        self._intake.check_fields(fields)
        return fields, end

    def _first_number(self) -> None:
        """Learn from the first line at which number the rounds begin and how they are written."""
        line = self._line_at(self._place)
        parts = line.rstrip(b"\r\n").split(b",")
        column = self._fields.index("round")
        text = parts[column] if len(parts) == len(self._fields) else b""
        if not text.isdigit() or len(text) > _NUMBER_DIGITS:
            raise self._explain(self._place, 1)
        self._first = self._next = int(text)
        if text.startswith(b"0"):
            self._width = len(text)

    def _fill(self, columns: np.ndarray, bits: list[str], fill: int) -> int:
        """Read the next lines of equal length into `columns` from `fill` on; returns how many."""
        rows = _WINDOW_ROWS - fill
        digits = 0
        if self._next is not None:
            if self._next >= ROUND_NUMBER_LIMIT:
                self._stop(self._intake.fault("the round numbers go beyond 10^18 - 1", "bad-round-number",
                                              self._intake.rounds + fill + 1, "round"), columns, bits, fill)
            digits = max(self._width, len(str(self._next)))
            rows = min(rows, 10**digits - self._next)
        length = 2 * len(bits) - 1 + len(self._end) + (digits + 1 if digits else 0)
        left = self._size - self._place
        rows = min(rows, -(-left // length))
        self._file.seek(self._place)
        data = read_up_to(self._file, min(left, rows * length))
        if len(data) != min(left, rows * length):
            raise self._intake.fault("became shorter while it was read", "truncated-file")
        short = rows * length - len(data)
        if short == len(self._end):
            data += self._end                  # the last line end is absent
        elif short:
            rows -= 1                          # a line that is too short: looked at on its own next time
            if not rows:
                self._stop(self._explain(self._place, self._intake.rounds + fill + 1), columns, bits, fill)
        window = np.frombuffer(data, np.uint8, rows * length)
        expected, mask = self._expected(rows, length, digits)
        differs = window ^ expected
        wrong = differs & mask
        good = int(np.argmax(wrong != 0)) // length if wrong.any() else rows
        table = differs[: good * length].reshape(good, length)
        for k, name in enumerate(bits):
            columns[k, fill : fill + good] = table[:, self._offset(name, digits)]
        if good < rows:
            error = self._explain(self._place + good * length, self._intake.rounds + fill + good + 1, good)
            self._stop(error, columns, bits, fill + good)
        self._place = min(self._size, self._place + rows * length)
        if self._next is not None:
            self._next += rows
        return rows

    def _stop(self, error: InputError, columns: np.ndarray, bits: list[str], rows: int) -> NoReturn:
        """Raise `error`, unless one of the `rows` before it has a fault that only `intake` sees: that goes first."""
        if rows:
            self._intake.values({name: columns[k, :rows] for k, name in enumerate(bits)})
        raise error

    def _offset(self, field: str, digits: int) -> int:
        """Where the value of `field` begins within a line."""
        offset = 0
        for name in self._fields[: self._fields.index(field)]:
            offset += (digits if name == "round" else 1) + 1
        return offset

    def _expected(self, rows: int, length: int, digits: int) -> tuple[np.ndarray, np.ndarray]:
        """The text that must stand there with all bits 0, and a mask of what may not differ; shape (rows * length,)."""
        if self._lines is None or self._lines.shape[2] != length:
            texts = [b"0" * (digits if name == "round" else 1) for name in self._fields]
            line = np.frombuffer(b",".join(texts) + self._end, np.uint8)
            mask = np.full(length, 0xFF, np.uint8)
            for name in self._fields:
                if name != "round":
                    # "0" and "1" differ in the lowest bit, "2" from "0" in the second; "3" is left to `intake`
                    mask[self._offset(name, digits)] = 0xFC if name in ("a", "b") else 0xFE
            most = min(_WINDOW_ROWS, -(-(self._size - self._place) // length))
            self._lines = np.tile(np.stack((line, mask))[:, None, :], (1, most, 1))
        lines = self._lines[:, :rows]
        if digits and self._next is not None:
            start = self._offset("round", digits)
            write_numbers(lines[0, :, start : start + digits], self._next)
        return lines[0].reshape(-1), lines[1].reshape(-1)

    def _line_at(self, place: int) -> bytes:
        self._file.seek(place)
        text = read_up_to(self._file, _LINE_LIMIT)
        line, newline, _ = text.partition(b"\n")
        return line + newline

    def _explain(self, place: int, row: int, ahead: int = 0) -> InputError:
        """Why the line at `place` is not the one that must stand there; `ahead`: its number is _next + ahead."""
        fault, fields = self._intake.fault, self._fields
        line = self._line_at(place)
        cut = not line.endswith(b"\n")
        if cut and len(line) == _LINE_LIMIT:
            return fault(f"the line is longer than {_LINE_LIMIT} bytes", "column-count", row)
        body = line.removesuffix(b"\n")
        if not cut and body.endswith(b"\r") != (self._end == b"\r\n"):
            return fault("the line does not end like the header line: use LF or CRLF throughout",
                         "bad-line-ending", row)
        if cut and body.endswith(b"\r"):
            return fault("the file ends within the line end", "truncated-file", row)
        body = body.removesuffix(b"\r") if self._end == b"\r\n" else body
        parts = body.split(b",")
        if len(parts) != len(fields):
            if cut and len(parts) < len(fields):
                return fault(f"the file ends within this line, after {len(parts)} of {len(fields)} values",
                             "truncated-file", row)
            return fault(f"has {len(parts) if body else 0} values, but the header names {len(fields)}",
                         "column-count", row)
        for name, text in zip(fields, parts):
            if name == "round":
                if not text.isdigit() or len(text) > _NUMBER_DIGITS:
                    return fault(f"{_shown(text)} is not a round number of up to {_NUMBER_DIGITS} digits",
                                 "bad-round-number", row, "round")
                expected = None if self._next is None else self._next + ahead
                if expected is not None and int(text) != expected:
                    if cut and str(expected).startswith(text.decode()):
                        return fault("the file ends within this line", "truncated-file", row, name)
                    self._intake.first_round = self._first
                    return self._intake.number_fault(row, expected, int(text))
                if expected is not None and len(text) != max(self._width, len(str(expected))):
                    return fault(f"{_shown(text)} is not written with as many digits as the first round number",
                                 "bad-round-number", row, "round")
            elif text not in ((b"0", b"1", b"2") if name in ("a", "b") else (b"0", b"1")):
                allowed = "0, 1 or, for a no-click, 2" if name in ("a", "b") else "0 or 1"
                if cut and not text:
                    return fault("the file ends within this line", "truncated-file", row, name)
                return fault(f"{_shown(text)} is not {allowed}", "not-a-bit", row, name)
        raise Defect(f"row {row} was found wrong, but nothing is wrong with it")


def write_numbers(out: np.ndarray, first: int) -> None:
    """Write first, first + 1, ... as decimal text into the rows of `out`, uint8 array of shape (rows, digits)."""
    rows, digits = out.shape
    low = min(4, digits)
    row = 0
    while row < rows:
        high, start = divmod(first + row, _LOW)
        count = min(rows - row, _LOW - start)
        out[row : row + count, digits - low :] = _LOW_DIGITS[start : start + count, 4 - low :]
        if digits > low:
            out[row : row + count, : digits - low] = np.frombuffer(f"{high:0{digits - low}d}".encode(), np.uint8)
        row += count


def _shown(text: bytes) -> str:
    return ascii(text[:24].decode("latin-1"))
