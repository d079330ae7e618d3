"""Fields that lie one after the other in a file (NPZ members, column-ordered NPY), read side by side in windows."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np

from extractor.model import RoundBatch
from extractor.records.bits import packed_size
from extractor.records.intake import BATCH_ROUNDS, Intake
from extractor.records.source import Source

# Packed planes are fetched 1 MiB at a time, so that a reader that decrypts whole segments is not asked
# for each of them many times over.
_PACKED_WINDOW = 8 * BATCH_ROUNDS


def read_values(intake: Intake, sources: Mapping[str, Source], dtypes: Mapping[str, np.dtype],
                rounds: int) -> Iterator[RoundBatch]:
    """Batches from one value per round and field; the field `round`, if present, holds integers, all others bytes."""
    kinds = {field: dtype.kind for field, dtype in dtypes.items()}
    for start in range(0, rounds, BATCH_ROUNDS):
        count = min(BATCH_ROUNDS, rounds - start)
        numbers, columns = None, {}
        for field, source in sources.items():
            data = source.read(count * dtypes[field].itemsize)
            if field == "round":
                numbers = np.frombuffer(data, dtypes[field])
            else:
                columns[field] = np.frombuffer(data, np.uint8)
        yield intake.values(columns, numbers, kinds)
    _finish(sources)


def read_packed(intake: Intake, sources: Mapping[str, Source], rounds: int) -> Iterator[RoundBatch]:
    """Batches from packed planes. Nothing is copied: the batches are views of what was read."""
    for start in range(0, rounds, _PACKED_WINDOW):
        window = min(_PACKED_WINDOW, rounds - start)
        planes = {field: np.frombuffer(source.read(packed_size(window)), np.uint8) for field, source in sources.items()}
        for offset in range(0, window, BATCH_ROUNDS):
            count = min(BATCH_ROUNDS, window - offset)
            part = slice(offset // 8, offset // 8 + packed_size(count))
            yield intake.planes({field: plane[part] for field, plane in planes.items()}, count)
    _finish(sources)


def _finish(sources: Mapping[str, Source]) -> None:
    for source in sources.values():
        source.finish()
