"""Rounds, and files that hold them, for the tests of `extractor.records`."""

from __future__ import annotations

import io
from collections.abc import Callable, Iterable

import numpy as np
import pytest

from extractor.errors import InputError
from extractor.model import PLANES, RoundBatch, RoundRules
from extractor.records import writers
from extractor.records.rounds import RoundFile, open_rounds

ALL_TESTS = RoundRules()
SPOT_CHECKS = RoundRules(0.5, (1, 0))


def columns_of(rounds: int, seed: int = 1, rules: RoundRules = SPOT_CHECKS) -> dict[str, np.ndarray]:
    """Random rounds that obey the rules, uint8 arrays of shape (rounds,)."""
    rng = np.random.default_rng(seed)
    columns = {name: rng.integers(0, 2, rounds, dtype=np.uint8) for name in PLANES}
    if rules.test_probability == 1.0:
        columns["t"][:] = 1
    for name, value in zip("xy", rules.generation_settings):
        columns[name][columns["t"] == 0] = value
    return columns


def batch_of(columns: dict[str, np.ndarray]) -> RoundBatch:
    return RoundBatch(len(columns["x"]), {name: np.packbits(columns[name], bitorder="little") for name in PLANES})


def joined(batches: Iterable[RoundBatch]) -> dict[str, np.ndarray]:
    """All rounds of the batches, one byte per value."""
    parts = list(batches)
    return {
        name: np.concatenate([np.unpackbits(b.planes[name], count=b.rounds, bitorder="little") for b in parts])
        for name in PLANES
    }


def same(left: dict[str, np.ndarray], right: dict[str, np.ndarray]) -> bool:
    return all(np.array_equal(left[name], right[name]) for name in PLANES)


def opened(data: bytes, rules: RoundRules = SPOT_CHECKS, name: str = "night.dat", **keywords) -> RoundFile:
    return open_rounds(io.BytesIO(data), name, rules, **keywords)


def fault(data: bytes, rules: RoundRules = SPOT_CHECKS, **keywords) -> InputError:
    """The error a file gives; it must name the file."""
    with pytest.raises(InputError) as caught:
        for _ in opened(data, rules, **keywords):
            pass
    assert caught.value.file == "night.dat"
    assert str(caught.value).startswith("file night.dat")
    return caught.value


def written(writer: Callable, batches: Iterable[RoundBatch], **keywords) -> bytes:
    file = io.BytesIO()
    writer(file, batches, **keywords)
    return file.getvalue()


def savez(compressed: bool = False, **arrays: np.ndarray) -> bytes:
    """What numpy itself writes."""
    file = io.BytesIO()
    (np.savez_compressed if compressed else np.savez)(file, **arrays)
    return file.getvalue()


def save(array: np.ndarray) -> bytes:
    """What numpy itself writes."""
    file = io.BytesIO()
    np.save(file, array, allow_pickle=True)
    return file.getvalue()


def every_format(columns: dict[str, np.ndarray]) -> dict[str, bytes]:
    """The same rounds as every kind of file that can hold them."""
    batches = [batch_of(columns)]
    files = {
        "npz packed": written(writers.write_npz, batches),
        "npz packed deflated": written(writers.write_npz, batches, compressed=True),
        "npz values": written(writers.write_npz, batches, packed=False),
        "npz values numbered": written(writers.write_npz, batches, packed=False, first_round=97),
        "npz bool by numpy": savez(**{name: column.astype(bool) for name, column in columns.items()}),
        "npz int8 deflated by numpy": savez(True, **{name: column.astype(np.int8) for name, column in columns.items()}),
        "npy rows": written(writers.write_npy, batches),
        "npy numbered": written(writers.write_npy, batches, first_round=0),
        "npy columns first": save(np.asfortranarray(
            np.stack([columns[name] for name in "xyabt"], axis=1).astype(bool))),
        "csv": written(writers.write_csv, batches),
        "csv numbered crlf": written(writers.write_csv, batches, first_round=97, crlf=True),
        "csv numbered reordered": written(writers.write_csv, batches, first_round=9_990,
                                          columns=("b", "a", "t", "round", "y", "x")),
    }
    if len(columns["x"]) % 8 == 0 and len(columns["x"]) > 40:
        files["npy packed"] = written(writers.write_npy, batches, packed=True)
        planes = np.stack([np.packbits(columns[name], bitorder="little") for name in "xyabt"])
        files["npy packed columns first"] = save(np.asfortranarray(planes))
    if len(columns["x"]) in (4, 5):
        del files["npy rows"]          # uint8 of shape (4, 5) or (5, 5): refused on purpose
    return files
