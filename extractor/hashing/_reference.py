"""The definition, slow: every faster backend must equal it bit by bit."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from extractor.hashing.packing import byte_count, unpack
from extractor.hashing.seeds import SeedReader


def hash_bits(seed: Sequence[int], raw: Sequence[int], output_bits: int) -> list[int]:
    """The hash as it is defined, one term at a time: bits are integers 0/1, cost n·m.

    y_i = XOR_j T[i, j] x_j with T[i, j] = s[i - j + n - 1], 0 <= i < m, 0 <= j < n; len(seed) = n + m - 1.
    """
    n = len(raw)
    return [sum(seed[i - j + n - 1] & raw[j] for j in range(n)) & 1 for i in range(output_bits)]


class DefinitionEngine:
    """Column by column: column j of the matrix is the seed window s[n-1-j … n-1-j+m-1], XORed in where x_j = 1."""

    def __init__(self, raw_bits: int, output_bits: int, seed: SeedReader, start: int) -> None:
        self._n, self._m, self._seed, self._position = raw_bits, output_bits, seed, start
        self._sum = np.zeros(byte_count(output_bits), dtype=np.uint8)

    def push(self, packed: np.ndarray, bits: int) -> None:
        for k in np.flatnonzero(unpack(packed, bits)):
            self._sum ^= self._seed.read(self._n - 1 - self._position - int(k), self._m)
        self._position += bits

    def partial(self) -> bytes:
        out = self._sum.tobytes()
        self._sum[:] = 0
        return out


class DefinitionBackend:
    """The definition as a backend: for tests and for an auditor who trusts nothing else."""

    name = "definition"

    def available(self) -> bool:
        return True

    def make(self, raw_bits: int, output_bits: int, seed: SeedReader, start: int, threads: int = 1) -> DefinitionEngine:
        return DefinitionEngine(raw_bits, output_bits, seed, start)
