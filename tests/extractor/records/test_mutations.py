"""Damaged files: either an InputError or valid batches, never any other exception."""

from __future__ import annotations

import numpy as np
import pytest

from extractor.errors import InputError
from extractor.model import RoundRules
from extractor.records.planes import digest_of
from tests.extractor.records.samples import batch_of, columns_of, every_format, opened

RULES = RoundRules(0.5, (1, 0), (0, 1))
COLUMNS = columns_of(104, seed=3)
DIGEST = digest_of([batch_of(COLUMNS)])
FILES = every_format(COLUMNS)
MUTATIONS = 300


def _digest(data: bytes) -> str | None:
    """Digest of the rounds, or None if the file is refused with a code and its name."""
    try:
        return digest_of(opened(data, RULES))
    except InputError as error:
        assert error.code and error.code != "bad-input" and error.file == "night.dat"
        assert error.row is None or 1 <= error.row <= 105
        return None


@pytest.mark.parametrize("kind", FILES)
def test_single_byte_mutations(kind):
    """A changed byte is refused or gives valid rounds; in an archive never other rounds than before."""
    data = FILES[kind]
    assert _digest(data) == DIGEST
    rng = np.random.default_rng(len(data))
    for _ in range(MUTATIONS):
        changed = bytearray(data)
        place = int(rng.integers(len(data)))
        changed[place] = int(rng.integers(256)) if rng.integers(2) else changed[place] ^ 1 << int(rng.integers(8))
        digest = _digest(bytes(changed))
        if kind.startswith("npz"):
            assert digest in (None, DIGEST)


@pytest.mark.parametrize("kind", FILES)
def test_truncations(kind):
    """A file cut at any byte is refused; only a CSV can end between two lines, or lack the last line end."""
    data = FILES[kind]
    step = max(1, len(data) // 300)
    for length in range(0, len(data), step):
        digest = _digest(data[:length])
        if not kind.startswith("csv"):
            assert digest is None
        elif digest is not None:
            assert data[length - 1 : length] == b"\n" or data[length : length + 1] in (b"\n", b"\r")


@pytest.mark.parametrize("kind", FILES)
def test_bytes_inserted_removed_and_swapped(kind):
    """Pieces that are doubled, taken out or exchanged never end in another exception."""
    data = FILES[kind]
    rng = np.random.default_rng(7 * len(data))
    for _ in range(MUTATIONS // 2):
        start, middle, stop = np.sort(rng.integers(0, len(data) + 1, 3)).tolist()
        for changed in (data[:start] + data[middle:], data[:middle] + data[start:],
                        data[:start] + data[middle:stop] + data[start:middle] + data[stop:]):
            if changed != data and _digest(changed) is not None:
                assert not kind.startswith("npz") or _digest(changed) == DIGEST


def test_noise():
    """Random bytes behind each of the marks are refused."""
    rng = np.random.default_rng(11)
    marks = (b"PK\x03\x04", b"PK\x05\x06", b"\x93NUMPY\x01\x00", b"\x93NUMPY", b"x,y,a,b,t\n",
             b"round,x,y,a,b,t\r\n", b"")
    for mark in marks:
        for length in (0, 1, 10, 100, 1_000):
            for _ in range(20):
                assert _digest(mark + rng.bytes(length)) is None
