"""Fourier transforms of 0/1 data, in the two shapes the hash needs: many short ones, or one long one in pieces.

A spectrum is a complex128 array of `spectrum_shape`. Its order is private to the class: only products of
spectra of the same transform, and sums of those, mean anything.

Long transforms are split by hand. One monolithic real transform of 2^22 points leaves every cache and takes
two to three times as long per point as short ones, and scipy uses vector registers (and threads) only across several
transforms, never within one. With N = K·C points, index j = C·j1 + j2 and frequency k = k1 + K·k2,

    X[k1 + K·k2] = sum_j2  w_C^(j2·k2) · ( w_N^(j2·k1) · sum_j1  w_K^(j1·k1) x[C·j1 + j2] ),   w_M = exp(-2 pi i / M)

(Cooley and Tukey 1965, one step): C real transforms of K points down the columns, a table of factors, K/2 + 1 complex
transforms of C points along the rows. Real input makes rows k1 and K - k1 conjugate, so half of them suffice.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import scipy.fft

LONGEST_SHORT_POINTS = 1 << 18      # above it one split transform is faster than a monolithic one (measured)
_SLICE_POINTS = 1 << 15             # points worked on at a time, so that they stay in the second-level cache
_PAD = 8                            # extra columns: rows a power of two apart would share cache sets


def split_columns(points: int) -> int:
    """C of a long transform: rows short enough for the cache, columns not much longer than rows."""
    return 1 << 12 if points <= 1 << 21 else 1 << 13


def _slices(count: int, step: int) -> list[slice]:
    """0 … count - 1 cut into slices of `step`, the last one shorter."""
    return [slice(first, min(first + step, count)) for first in range(0, count, step)]


def keep_freed_memory() -> None:
    """Ask the allocator, by example, to reuse blocks up to about 31 MiB instead of returning them to the system.

    glibc raises its threshold for separate mappings to the size of the largest mapped block it has seen freed
    (at most 32 MiB). Without this every temporary array is fresh memory, and its page faults cost as much as a
    transform. Elsewhere it is an unused allocation.
    """
    np.empty(31 << 20, dtype=np.uint8)


class ShortTransform:
    """Real transforms of up to LONGEST_SHORT_POINTS points, several at a time."""

    def __init__(self, points: int, threads: int) -> None:
        self.points, self._threads = points, threads
        self.batch = max(2, (1 << 17) // points)
        self.spectrum_shape = (points // 2 + 1,)
        self._real = np.zeros((self.batch, points))

    def _forward(self, rows: np.ndarray) -> np.ndarray:
        count, width = rows.shape
        real = self._real[:count]
        real[:, :width] = rows
        real[:, width:] = 0.0
        return scipy.fft.rfft(real, axis=1, workers=self._threads)

    def forward(self, bits: np.ndarray, out: np.ndarray) -> None:
        """Spectrum of the bits, uint8 (w,), w <= points, zeros behind them, into `out`."""
        out[...] = self._forward(bits[np.newaxis])[0]

    def add_products(self, total: np.ndarray, left: np.ndarray, right: np.ndarray) -> None:
        """total += sum over rows of spectrum(left[r])·spectrum(right[r]); uint8 (r, w) arrays, r <= batch."""
        product = self._forward(left)
        product *= self._forward(right)
        for row in product:
            total += row

    def add_product(self, total: np.ndarray, left: np.ndarray, right: np.ndarray) -> None:
        """total += left·right for three spectra."""
        total += left * right

    def inverse(self, spectrum: np.ndarray) -> np.ndarray:
        """The real values, float64 (points,), whose spectrum this is; may destroy `spectrum`."""
        return scipy.fft.irfft(spectrum, self.points, overwrite_x=True)


class LongTransform:
    """One real transform at a time, split into K rows of C points as in the module docstring.

    columns  C, a multiple of 64 that leaves an even K; None = `split_columns`, other values serve tests
    """

    batch = 1

    def __init__(self, points: int, threads: int, columns: int | None = None) -> None:
        self.points, self._threads = points, threads
        self._columns = columns = columns or split_columns(points)
        self._rows = points // columns
        kept = self._rows // 2 + 1
        self.spectrum_shape = (kept, columns + _PAD)
        self._real = np.zeros((self._rows, columns + _PAD))
        self._spare: list[np.ndarray] = []
        self._pool = ThreadPoolExecutor(threads) if threads > 1 else None
        self._column_slices = _slices(columns, max(16, _SLICE_POINTS // self._rows))
        self._row_slices = _slices(kept, max(2, _SLICE_POINTS // 2 // columns))
        self._fill_slices = _slices(self._rows, max(1, _SLICE_POINTS // columns))
        # w_N^(k1·j2) with j2 = 64 h + l as the product of two short tables: error below 6 units in the last place
        k1 = np.arange(kept)[:, np.newaxis]
        coarse = np.exp(-2j * np.pi / points * (k1 * np.arange(0, columns, 64) % points))
        fine = np.exp(-2j * np.pi / points * (k1 * np.arange(64) % points))
        self._factors = (coarse[:, :, np.newaxis] * fine[:, np.newaxis, :]).reshape(kept, columns)

    def _each(self, work: Callable[[slice], None], slices: list[slice]) -> None:
        """Do `work` for every slice; the slices are independent, so each thread gets a contiguous share of them."""
        def run(share: list[slice]) -> None:
            for part in share:
                work(part)

        if self._pool is None:
            run(slices)
        else:
            size = -(-len(slices) // self._threads)
            for done in [self._pool.submit(run, slices[k:k + size]) for k in range(0, len(slices), size)]:
                done.result()

    def forward(self, bits: np.ndarray, out: np.ndarray) -> None:
        """Spectrum of the bits, uint8 (w,), w <= points, zeros behind them, into `out`."""
        real, columns = self._real, self._columns

        def fill(part: slice) -> None:
            here = bits[part.start * columns:part.stop * columns]
            full, rest = divmod(len(here), columns)
            rows = real[part, :columns]
            rows[:full] = here[:full * columns].reshape(full, columns)
            rows[full:] = 0.0
            if rest:
                rows[full, :rest] = here[full * columns:]

        def down_columns(part: slice) -> None:
            out[:, part] = scipy.fft.rfft(real[:, part], axis=0)

        def along_rows(part: slice) -> None:
            row = out[part, :columns] * self._factors[part]
            out[part, :columns] = scipy.fft.fft(row, axis=1, overwrite_x=True)

        self._each(fill, self._fill_slices)
        self._each(down_columns, self._column_slices)
        self._each(along_rows, self._row_slices)

    def add_products(self, total: np.ndarray, left: np.ndarray, right: np.ndarray) -> None:
        """total += spectrum(left[0])·spectrum(right[0]); uint8 (1, w) arrays."""
        if not self._spare:
            self._spare = [np.zeros(self.spectrum_shape, dtype=complex) for _ in range(2)]
        self.forward(left[0], self._spare[0])
        self.forward(right[0], self._spare[1])
        self.add_product(total, *self._spare)

    def add_product(self, total: np.ndarray, left: np.ndarray, right: np.ndarray) -> None:
        """total += left·right for three spectra."""
        def add(part: slice) -> None:
            total[part] += left[part] * right[part]

        self._each(add, self._row_slices)

    def inverse(self, spectrum: np.ndarray) -> np.ndarray:
        """The real values, float64 (points,), whose spectrum this is; destroys `spectrum`."""
        real, columns = self._real, self._columns

        def along_rows(part: slice) -> None:
            row = scipy.fft.ifft(spectrum[part, :columns], axis=1)
            np.multiply(row, np.conj(self._factors[part]), out=spectrum[part, :columns])

        def down_columns(part: slice) -> None:
            real[:, part] = scipy.fft.irfft(spectrum[:, part], self._rows, axis=0)

        self._each(along_rows, self._row_slices)
        self._each(down_columns, self._column_slices)
        return real[:, :columns].reshape(self.points)


def make_transform(points: int, threads: int = 1) -> ShortTransform | LongTransform:
    """A transform of `points` points, a power of two >= 2; buffers are kept inside, so use it from one thread."""
    return (ShortTransform if points <= LONGEST_SHORT_POINTS else LongTransform)(points, threads)
