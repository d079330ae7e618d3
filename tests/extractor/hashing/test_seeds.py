"""Seed readers give any window of bits, and refuse a seed that is not exactly as long as it should be."""

from __future__ import annotations

import io

import numpy as np
import pytest

from extractor.errors import Defect, InputError
from extractor.hashing.packing import clear_tail, pack, put, take, unpack
from extractor.hashing.seeds import SeedBytes, SeedFile
from tests.extractor.hashing.cases import random_bits


class _ByteByByte(io.BytesIO):
    """A file that returns one byte per read, as a raw file may."""

    def read(self, size: int = -1) -> bytes:
        return super().read(min(size, 1))


@pytest.mark.parametrize("bits", [1, 7, 8, 9, 40, 43])
def test_every_window(bits):
    """Every window of a seed, at every bit offset, comes packed from bit 0 with a clear tail."""
    values = random_bits(bits, 1)
    packed = pack(values)
    readers = [SeedBytes(packed, bits), SeedBytes(packed.tobytes(), bits), SeedFile(io.BytesIO(packed.tobytes()), bits),
               SeedFile(_ByteByByte(packed.tobytes()), bits)]
    for first in range(bits):
        for count in range(1, bits - first + 1):
            for reader in readers:
                assert np.array_equal(reader.read(first, count), pack(values[first:first + count]))


def test_windows_beyond_the_seed_are_a_defect():
    """Asking for bits a seed does not have is our own mistake and is never padded."""
    for reader in (SeedBytes(bytes(2), 12), SeedFile(io.BytesIO(bytes(2)), 12)):
        for first, count in ((-1, 2), (0, 13), (12, 1), (3, 0)):
            with pytest.raises(Defect):
                reader.read(first, count)
    with pytest.raises(Defect):
        SeedBytes(np.zeros(2, dtype=np.int64), 12)


@pytest.mark.parametrize(("data", "code"), [(bytes(1), "seed-length"), (bytes(3), "seed-length"), (b"", "seed-length"),
                                            (b"\0\x10", "seed-tail"), (b"\0\x80", "seed-tail")])
def test_wrong_seeds_are_refused(data, code):
    """Too short, too long, or bits set beyond the last: refused, and the file is named."""
    with pytest.raises(InputError) as caught:
        SeedFile(io.BytesIO(data), 12, name="night-run.seed")
    assert caught.value.code == code and "night-run.seed" in str(caught.value)
    with pytest.raises(InputError) as caught:
        SeedBytes(data, 12)
    assert caught.value.code == code


def test_seed_that_shrinks_is_noticed():
    """A file cut after it was opened is an input error, not a short window."""
    file = io.BytesIO(bytes(range(10)))
    reader = SeedFile(file, 80)
    file.truncate(5)
    with pytest.raises(InputError) as caught:
        reader.read(24, 40)
    assert caught.value.code == "seed-truncated"


def test_moving_bits():
    """`take` and `put` agree with plain indexing at all offsets modulo a byte, and `put` touches nothing else."""
    values = random_bits(64, 2)
    for first in range(20):
        for count in range(0, 40):
            taken = take(pack(values), first, count)
            assert np.array_equal(taken, pack(values[first:first + count]))
            target = random_bits(64, 3)
            wanted = target.copy()
            wanted[first:first + count] ^= values[first:first + count]
            packed = pack(target)
            put(packed, first, taken, count)
            assert np.array_equal(unpack(packed, 64), wanted)
    assert clear_tail(np.array([0xFF], dtype=np.uint8), 3)[0] == 7
