"""Fast draws from a few cells, one 32-bit random word per round, and their packing into bit planes."""

from __future__ import annotations

import numpy as np

from extractor.errors import Defect, InputError
from extractor.model import PLANES, RoundBatch

BLOCK_ROUNDS = 2**20
_WORD = 1 << 32
_PLANE_BIT = {name: np.uint8(16 >> k) for k, name in enumerate(PLANES)}


def generator(seed: int, *path: int) -> np.random.Generator:
    """The random generator of block path[0] of a simulation: a stream of its own for every seed and block."""
    if isinstance(seed, bool) or not isinstance(seed, int) or seed < 0:
        raise InputError(f"{seed!r} is not a whole number >= 0", code="bad-seed", field="/seed")
    return np.random.Generator(np.random.SFC64(np.random.SeedSequence([seed, *path])))


class CellSampler:
    """Alias table over 2^k cells, exact for chances that are multiples of 2^-32 (others are rounded to those).

    chances  shape (2^k,), 1 <= k <= 8, non-negative, sum 1. A cell of chance 0 never comes up.
    Walker's alias method, in integers: each of the 2^k columns holds 2^(32-k) words and at most two cells.
    """

    def __init__(self, chances: np.ndarray) -> None:
        flat = np.asarray(chances, dtype=float).ravel()
        self._index_bits = flat.size.bit_length() - 1
        proper = flat.min() >= 0 and abs(flat.sum() - 1) <= 1e-9
        if flat.size != 1 << self._index_bits or not 2 <= flat.size <= 256 or not proper:
            raise Defect("an alias table needs 2^k non-negative chances that add up to 1")
        height = _WORD >> self._index_bits
        words = _rounded_words(flat)
        self.words = tuple(words)
        keep, alias = [height] * flat.size, list(range(flat.size))
        short = [i for i, w in enumerate(words) if w < height]
        tall = [i for i, w in enumerate(words) if w > height]
        while short:
            i, j = short.pop(), tall[-1]
            keep[i], alias[i] = words[i], j
            words[j] -= height - words[i]
            if words[j] <= height:
                tall.pop()
                if words[j] < height:
                    short.append(j)
        # Both candidates of column i in one table row: entry 2 i is its alias, entry 2 i + 1 itself.
        self._pairs = np.stack([np.array(alias), np.arange(flat.size)], axis=1).astype(np.uint8).ravel()
        self._keep = np.array(keep, dtype=np.uint32)

    def draw(self, random: np.random.Generator, rounds: int) -> np.ndarray:
        """Cells, uint8 (rounds,). From the same generator state a shorter draw is the beginning of a longer one."""
        word = random.integers(0, _WORD, size=rounds, dtype=np.uint32)
        column = (word >> np.uint32(32 - self._index_bits)).astype(np.uint8)
        height = word & np.uint32((_WORD >> self._index_bits) - 1)
        own = height < self._keep.take(column)
        pair = column.astype(np.uint16)
        pair <<= 1
        pair |= own
        return self._pairs.take(pair)


def _rounded_words(chances: np.ndarray) -> list[int]:
    """Chances in units of 2^-32 that add up to 2^32: rounded down, the rest to the largest remainders."""
    scaled = chances / chances.sum() * _WORD
    words = np.floor(scaled).astype(np.int64)
    left = _WORD - int(words.sum())
    order = np.argsort(words - scaled, kind="stable")
    words[order[:left]] += 1
    return [int(w) for w in words]


def pack_cells(cells: np.ndarray) -> RoundBatch:
    """Cells 0..31, uint8 (rounds,), as packed planes."""
    planes = {name: np.packbits(cells & bit, bitorder="little") for name, bit in _PLANE_BIT.items()}
    return RoundBatch(len(cells), planes)
