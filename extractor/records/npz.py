"""NPZ files: a zip archive with one NPY array per field, in either of two forms.

values   members x, y, a, b[, t] of shape (n,), bool, uint8 or int8; perhaps an integer member round of shape (n,)
packed   uint8 members x, y, a, b[, t] of shape (ceil(n / 8),), least significant bit first, bits beyond n zero,
         and the integer member rounds = n, a scalar

Members may be stored or deflated. Batches are handed out before the checksum of a member can be known, so they
count only once the iteration has ended without an error.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO

import numpy as np

from extractor.model import RoundBatch
from extractor.records.archive import END_MARK, LOCAL_MARK, open_members
from extractor.records.bits import packed_size
from extractor.records.columns import read_packed, read_values
from extractor.records.intake import Intake
from extractor.records.npyhead import NpyHeader, bit_dtype, check_size, number_dtype, read_header
from extractor.records.source import Source

NAME = "npz"


def matches(head: bytes) -> bool:
    """Whether a file that begins with `head` is of this format."""
    return head.startswith((END_MARK, LOCAL_MARK))


def read(file: BinaryIO, intake: Intake) -> Iterator[RoundBatch]:
    """The rounds of an NPZ file."""
    sources = open_members(file, intake)
    packed = "rounds" in sources
    fields = [name for name in sources if name != "rounds"]
    intake.check_fields(fields, numbered=not packed)
    headers = {name: read_header(source, intake, name) for name, source in sources.items()}
    if packed:
        rounds = _declared_rounds(sources.pop("rounds"), headers.pop("rounds"), intake)
    else:
        rounds = _length(headers["x"], "x", intake)
    intake.expect(rounds)
    length = packed_size(rounds) if packed else rounds
    dtypes: dict[str, np.dtype] = {}
    for field in fields:
        header = headers[field]
        found = _length(header, field, intake)
        if found != length:
            needed = f"rounds = {rounds} takes" if packed else "x has"
            raise intake.fault(f"has {found} values, but {needed} {length}", "unequal-lengths", field=field)
        dtype = (number_dtype if field == "round" else bit_dtype)(header.descr, intake, field)
        if packed and dtype.kind != "u":
            raise intake.fault("is not uint8, which packed planes are", "wrong-type", field=field)
        dtypes[field] = dtype
        check_size(sources[field], length * dtype.itemsize, intake, field)
    if packed:
        return read_packed(intake, sources, rounds)
    return read_values(intake, sources, dtypes, rounds)


def _length(header: NpyHeader, field: str, intake: Intake) -> int:
    if len(header.shape) != 1:
        raise intake.fault(f"has shape {header.shape}; one dimension is needed", "wrong-shape", field=field)
    return header.shape[0]


def _declared_rounds(source: Source, header: NpyHeader, intake: Intake) -> int:
    if header.shape not in ((), (1,)):
        raise intake.fault(f"has shape {header.shape}; one number is needed", "wrong-shape", field="rounds")
    dtype = number_dtype(header.descr, intake, "rounds")
    check_size(source, dtype.itemsize, intake, "rounds")
    data = source.read(dtype.itemsize)
    source.finish()
    return int(np.frombuffer(data, dtype)[0])
