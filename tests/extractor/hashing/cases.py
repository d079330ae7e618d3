"""Inputs shared by the tests of the hash."""

from __future__ import annotations

import numpy as np

from extractor.hashing.packing import pack
from extractor.hashing.seeds import SeedBytes
from extractor.hashing.toeplitz import ToeplitzStream


def random_bits(count: int, label: int) -> np.ndarray:
    """`count` bits as uint8 0/1, the same for the same label."""
    return np.random.default_rng((20, label, count)).integers(0, 2, count, dtype=np.uint8)


def seed_of(bits: np.ndarray) -> SeedBytes:
    return SeedBytes(pack(bits), len(bits))


def hash_with(backend: str, seed: np.ndarray, raw: np.ndarray, output_bits: int) -> np.ndarray:
    """The hash by one push, as m values 0/1; also checks that the tail of the answer is zero."""
    stream = ToeplitzStream(len(raw), output_bits, seed_of(seed), backend=backend)
    stream.push(pack(raw), len(raw))
    packed = np.frombuffer(stream.partial(), dtype=np.uint8)
    values = np.unpackbits(packed, bitorder="little")
    assert len(packed) == (output_bits + 7) // 8 and not values[output_bits:].any()
    return values[:output_bits]


class WatchedSeed:
    """Passes reads on and remembers the longest one."""

    def __init__(self, inner: SeedBytes) -> None:
        self.inner, self.bits, self.longest = inner, inner.bits, 0

    def read(self, bit_offset: int, bits: int) -> np.ndarray:
        self.longest = max(self.longest, bits)
        return self.inner.read(bit_offset, bits)
