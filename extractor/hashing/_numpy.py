"""FFT backend in float64 on numpy and scipy: exact, for every size, on any machine.

Binary convolutions are computed over the integers (counts), rounded, and reduced modulo 2. Block sizes and the
proof that rounding is exact are in `_plan`, the transforms in `_transform`. Memory does not depend on n: it is
`Plan.memory_bytes`, at most 0.8 GiB or, if more, min(16 bytes per output bit, 2 GiB) + 0.4 GiB and two bits per
output bit; about 0.25 GiB at m = 10^6.
"""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import as_strided

from extractor.errors import Defect
from extractor.hashing._plan import Plan, choose_plan
from extractor.hashing._transform import keep_freed_memory, make_transform
from extractor.hashing.packing import byte_count, clear_tail, pack, put, take, unpack
from extractor.hashing.seeds import SeedReader

LARGEST_DEVIATION = 0.125           # of a computed value from an integer
_ROUND_VALUES = 1 << 16             # values rounded at a time


def parities(values: np.ndarray) -> tuple[np.ndarray, float]:
    """Parity of the integer nearest to each value, uint8 (n,), and the largest distance met.

    Raises Defect if a value is more than 1/8 from an integer, or not a number.
    """
    out, largest = np.empty(len(values), dtype=np.uint8), 0.0
    for first in range(0, len(values), _ROUND_VALUES):
        part = values[first:first + _ROUND_VALUES]
        whole = np.rint(part)
        distance = float(np.abs(part - whole).max())
        if not distance <= LARGEST_DEVIATION:
            raise Defect(f"a count of the hash came out {distance} away from a whole number; no bits are given")
        largest = max(largest, distance)
        out[first:first + _ROUND_VALUES] = whole.astype(np.int64) & 1
    return out, largest


class FourierEngine:
    """Collects packed raw bits and works off a group of blocks whenever it is full.

    plan               sizes in use; another one may be handed in by tests and measurements
    largest_deviation  largest distance from an integer met so far
    """

    def __init__(self, raw_bits: int, output_bits: int, seed: SeedReader, start: int, threads: int = 1,
                 plan: Plan | None = None) -> None:
        keep_freed_memory()
        self.plan = plan = plan or choose_plan(raw_bits, output_bits)
        self.largest_deviation = 0.0
        self._n, self._m, self._seed = raw_bits, output_bits, seed
        self._transform = make_transform(plan.points, threads)
        self._group_start = start           # position in the raw string of the first collected bit
        self._collected = 0                 # bits
        self._capacity = plan.group_blocks * plan.block_bits
        self._raw = np.zeros(self._capacity // 8, dtype=np.uint8)
        self._sum = np.zeros(byte_count(plan.tiles * plan.tile_bits), dtype=np.uint8)

    def push(self, packed: np.ndarray, bits: int) -> None:
        done = 0
        while done < bits:
            count = min(bits - done, self._capacity - self._collected)
            put(self._raw, self._collected, take(packed, done, count), count)
            self._collected += count
            done += count
            if self._collected == self._capacity:
                self._work_off()

    def partial(self) -> bytes:
        self._work_off()
        out = clear_tail(self._sum[:byte_count(self._m)].copy(), self._m).tobytes()
        self._sum[:] = 0
        return out

    def _work_off(self) -> None:
        """Add the collected bits to the sum; the last block is padded with zeros."""
        if not self._collected:
            return
        blocks = -(-self._collected // self.plan.block_bits)
        if self.plan.tiles == 1:
            self._one_tile(blocks)
        else:
            self._many_tiles(blocks)
        self._group_start += self._collected
        self._collected = 0
        self._raw[:] = 0

    def _block(self, k: int, count: int = 1) -> np.ndarray:
        """Bits of blocks k … k + count - 1, uint8 (count, L)."""
        length = self.plan.block_bits
        packed = self._raw[k * length // 8:(k + count) * length // 8]
        return unpack(packed, count * length).reshape(count, length)

    def _seed_bits(self, first: int, count: int) -> np.ndarray:
        """Seed bits first … first + count - 1, uint8 (count,); zero outside the seed, where they meet only padding."""
        low, high = max(first, 0), min(first + count, self._n + self._m - 1)
        if low == first and high == first + count:
            return unpack(self._seed.read(first, count), count)
        out = np.zeros(count, dtype=np.uint8)
        if low < high:
            out[low - first:high - first] = unpack(self._seed.read(low, high - low), high - low)
        return out

    def _window_start(self, k: int, tile: int) -> int:
        """Seed bit that meets the last raw bit of block k in the first output bit of the tile.

        With j = p + j', i = q + i' the seed index i - j + n - 1 is (q - p + n - L) + (i' - j' + L - 1).
        """
        plan = self.plan
        return tile * plan.tile_bits - self._group_start - k * plan.block_bits + self._n - plan.block_bits

    def _add_tile(self, tile: int, spectrum: np.ndarray) -> None:
        """Round one tile and XOR it into the sum: output bit i' stands at place i' + L - 1 of the convolution."""
        plan = self.plan
        count = min(plan.tile_bits, self._m - tile * plan.tile_bits)
        first = plan.block_bits - 1
        bits, deviation = parities(self._transform.inverse(spectrum)[first:first + count])
        self.largest_deviation = max(self.largest_deviation, deviation)
        put(self._sum, tile * plan.tile_bits, pack(bits), count)

    def _one_tile(self, blocks: int) -> None:
        plan, transform = self.plan, self._transform
        width = plan.block_bits + plan.tile_bits - 1
        total = np.zeros(transform.spectrum_shape, dtype=complex)
        for k in range(0, blocks, transform.batch):
            count = min(transform.batch, blocks - k)
            # windows of successive blocks lie L further left each: one read serves them all
            span = self._seed_bits(self._window_start(k + count - 1, 0), (count - 1) * plan.block_bits + width)
            windows = as_strided(span[(count - 1) * plan.block_bits:], (count, width), (-plan.block_bits, 1))
            transform.add_products(total, self._block(k, count), windows)
        self._add_tile(0, total)

    def _many_tiles(self, blocks: int) -> None:
        plan, transform = self.plan, self._transform

        def spectrum(bits: np.ndarray) -> np.ndarray:
            out = np.zeros(transform.spectrum_shape, dtype=complex)    # the padding stays zero
            transform.forward(bits, out)
            return out

        blocks_seen = [spectrum(self._block(k)[0]) for k in range(blocks)]
        windows: dict[int, np.ndarray] = {}         # by tile - k: tile and block move the window by the same L bits
        for tile in range(plan.tiles):
            total = np.zeros(transform.spectrum_shape, dtype=complex)
            for k in range(blocks):
                if tile - k not in windows:
                    windows[tile - k] = spectrum(self._seed_bits(self._window_start(k, tile), 2 * plan.block_bits - 1))
                transform.add_product(total, blocks_seen[k], windows[tile - k])
            windows.pop(tile - blocks + 1)          # no later tile meets it
            self._add_tile(tile, total)


class FourierBackend:
    """The FFT backend; see the module docstring."""

    name = "numpy-fft"

    def available(self) -> bool:
        return True

    def make(self, raw_bits: int, output_bits: int, seed: SeedReader, start: int, threads: int = 1) -> FourierEngine:
        return FourierEngine(raw_bits, output_bits, seed, start, threads)
