"""The header of an NPY array, read without evaluating anything.

Layout (NumPy Enhancement Proposal 1): b"\\x93NUMPY", version (two bytes), header length (uint16, or uint32 from
version 2), then a Python dict literal with the keys descr, fortran_order and shape, padded with spaces and ended by a
newline. Only the element types that rounds can have are known here, so a pickled object never gets further.
"""

from __future__ import annotations

import ast
import re
from dataclasses import dataclass

import numpy as np

from extractor.model import MAXIMUM_ROUNDS
from extractor.records.intake import Intake
from extractor.records.source import Source

MAGIC = b"\x93NUMPY"
_HEADER_LIMIT = 10_000
_ALPHABET = re.compile(r"[A-Za-z0-9_'\"()\[\]{}:,.|<>= \n+-]*")
_BIT_TYPE = re.compile(r"[|<>]?[bui]1")
_NUMBER_TYPE = re.compile(r"[|<>]?[ui]1|[<>][ui][248]")
_PADDING_TYPE = re.compile(r"\|V[0-9]{1,2}")
_ITEM_LIMIT = 64


@dataclass(frozen=True)
class NpyHeader:
    """descr: a type text, or (name, type text) pairs of a structured element, padding included with an empty name."""

    descr: str | tuple[tuple[str, str], ...]
    fortran_order: bool
    shape: tuple[int, ...]

    @property
    def elements(self) -> int:
        count = 1
        for length in self.shape:
            count *= length
        return count


def read_header(source: Source, intake: Intake, field: str | None = None) -> NpyHeader:
    """The header at the start of `source`, which then stands at the data. Errors raised: InputError."""
    def bad(why: str):
        return intake.fault(f"the NPY header {why}", "bad-header", field=field)

    def take(count: int) -> bytes:
        if source.left < count:
            raise intake.fault("ends within the NPY header", "truncated-file", field=field)
        return source.read(count)

    start = take(8)
    if not start.startswith(MAGIC):
        raise bad("does not begin with the NPY mark")
    version = tuple(start[6:])
    if version not in ((1, 0), (2, 0), (3, 0)):
        raise bad(f"has the unknown version {version[0]}.{version[1]}")
    length = int.from_bytes(take(2 if version == (1, 0) else 4), "little")
    if length > _HEADER_LIMIT:
        raise bad(f"has {length} bytes, more than {_HEADER_LIMIT}")
    try:
        text = take(length).decode("ascii")
    except UnicodeDecodeError:
        raise bad("is not ASCII") from None
    # No backslash and few brackets: what is left cannot make the literal parser slow, deep or talkative.
    if not text.endswith("\n") or not _ALPHABET.fullmatch(text) or sum(map(text.count, "([{")) > 32:
        raise bad("is not a plain description of an array")
    try:
        value = ast.literal_eval(text.strip())
    except (ValueError, SyntaxError, TypeError, MemoryError, RecursionError):
        raise bad("is not a plain description of an array") from None
    if type(value) is not dict or set(value) != {"descr", "fortran_order", "shape"}:
        raise bad("does not have exactly the keys descr, fortran_order, shape")
    shape, order = value["shape"], value["fortran_order"]
    if type(order) is not bool:
        raise bad("has a fortran_order that is neither True nor False")
    if type(shape) is not tuple or len(shape) > 4 or any(
            type(n) is not int or not 0 <= n <= MAXIMUM_ROUNDS for n in shape):
        raise bad("has a shape that is not up to four whole numbers of at most 2^50")
    return NpyHeader(_descr(value["descr"], bad), order, shape)


def _descr(value: object, bad) -> str | tuple[tuple[str, str], ...]:
    if type(value) is str:
        return value
    if type(value) is list and 0 < len(value) <= 16 and all(
            type(item) is tuple and len(item) == 2 and all(type(part) is str for part in item) for item in value):
        return tuple(value)
    raise bad("has an element type that is neither a simple type nor a list of named simple types")


def bit_dtype(descr: object, intake: Intake, field: str | None) -> np.dtype:
    """The type of a field that holds bits. Errors raised: InputError unless it is bool, uint8 or int8."""
    if type(descr) is not str or not _BIT_TYPE.fullmatch(descr):
        raise intake.fault(f"has element type {_text(descr)}; bits are stored as bool, uint8 or int8",
                           "wrong-type", field=field)
    return np.dtype(descr)


def number_dtype(descr: object, intake: Intake, field: str) -> np.dtype:
    """The type of an integer field. Errors raised: InputError unless it is a signed or unsigned integer."""
    if type(descr) is not str or not _NUMBER_TYPE.fullmatch(descr):
        raise intake.fault(f"has element type {_text(descr)}; an integer type is needed", "wrong-type", field=field)
    return np.dtype(descr)


def structured_dtype(descr: tuple[tuple[str, str], ...], intake: Intake) -> np.dtype:
    """The element type of a structured array with the fields of a round file. Errors raised: InputError."""
    intake.check_fields([name for name, kind in descr if name or not _PADDING_TYPE.fullmatch(kind)])
    names, formats, offsets, offset = [], [], [], 0
    for name, kind in descr:
        if not name:
            offset += int(kind[2:])
            continue
        dtype = number_dtype(kind, intake, name) if name == "round" else bit_dtype(kind, intake, name)
        names.append(name)
        formats.append(dtype)
        offsets.append(offset)
        offset += dtype.itemsize
    if offset > _ITEM_LIMIT:
        raise intake.fault(f"has {offset} bytes per round, more than {_ITEM_LIMIT}", "wrong-type")
    return np.dtype({"names": names, "formats": formats, "offsets": offsets, "itemsize": offset})


def check_size(source: Source, expected: int, intake: Intake, field: str | None = None) -> None:
    """Refuse an array whose data are not exactly the `expected` bytes that its header declares."""
    if source.left < expected:
        raise intake.fault(f"the header declares {expected} bytes of data, but only {source.left} are there",
                           "truncated-file", field=field)
    if source.left > expected:
        raise intake.fault(f"{source.left - expected} bytes follow the end of the data", "bytes-after-end", field=field)


def _text(descr: object) -> str:
    return repr(descr)[:60]
