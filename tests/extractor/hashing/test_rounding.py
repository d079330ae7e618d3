"""The float64 path is exact: the bound holds, worst cases stay far below it, and a bad value stops the computation."""

from __future__ import annotations

import math

import numpy as np
import pytest

from extractor.errors import Defect
from extractor.hashing._numpy import FourierEngine, parities
from extractor.hashing._plan import ERROR_LIMIT, LARGEST_POINTS, choose_plan, error_bound
from extractor.hashing._transform import LongTransform, ShortTransform
from extractor.hashing.packing import pack, unpack
from tests.extractor.hashing.cases import WatchedSeed, random_bits, seed_of

UNIT = 2.0**-53


@pytest.mark.parametrize("m", [1, 1024, 10**5, 10**6, 10**7, 10**8, 2 * 10**9])
def test_plans_are_sound(m):
    """Every plan fits its transform, keeps the proven error below 1/4 and its memory within the stated constant."""
    for n in (1, 10**3, 10**6, 10**8, 10**12):
        plan = choose_plan(n, m)
        assert plan.error_bound < ERROR_LIMIT and plan.points <= LARGEST_POINTS and plan.block_bits % 8 == 0
        assert plan.block_bits + plan.tile_bits - 1 <= plan.points and plan.tiles * plan.tile_bits >= m
        assert plan.memory_bytes <= max(0.8 * 2**30, min(16 * m, 2**31) + 0.4 * 2**30 + m / 4)


def test_bound_exceeds_both_published_ones():
    """E(N, L, G) is larger than Percival's and Higham's bounds (from memory) summed over the group."""
    for levels in range(4, 24):
        points, block = 2**levels, 2**(levels - 1)
        norms = math.sqrt(points * block)
        percival = norms * math.expm1(3 * levels * math.log1p(UNIT) + (3 * levels + 1) * math.log1p(math.sqrt(5) * UNIT)
                                      + 3 * levels * math.log1p(UNIT))
        gamma = 4 * UNIT / (1 - 4 * UNIT)
        eta = UNIT + gamma * (math.sqrt(2) + UNIT)
        higham = norms * (3 * levels * eta / (1 - levels * eta) + 8 * UNIT)
        for group in (1, 7, 1000):
            assert error_bound(points, block, group) > 2 * group * max(percival, higham)


def _patterns(count: int) -> list[np.ndarray]:
    """Strings that make large or lopsided counts."""
    ramp = np.arange(count)
    return [np.ones(count, dtype=np.uint8), (ramp % 2).astype(np.uint8), (ramp < count // 2).astype(np.uint8),
            (ramp % 64 < 32).astype(np.uint8), (ramp * ramp >> 5 & 1).astype(np.uint8), random_bits(count, 9)]


@pytest.mark.parametrize("transform", [ShortTransform(1 << 12, 1), LongTransform(1 << 12, 1, 64),
                                       LongTransform(1 << 12, 2, 256), LongTransform(1 << 12, 1, 2048)],
                         ids=["short", "64 rows", "16 rows, 2 threads", "2 rows"])
def test_values_before_rounding(transform):
    """Values of a convolution lie within a hundredth of the bound of the exact counts, for lopsided inputs too."""
    points, block = 1 << 12, 1 << 11
    for data in _patterns(block):
        for window in _patterns(points):
            total = np.zeros(transform.spectrum_shape, dtype=complex)
            for _ in range(3):
                transform.add_products(total, data[np.newaxis], window[np.newaxis])
            exact = 3 * np.convolve(window.astype(np.int64), data.astype(np.int64))[block - 1:points]
            values = transform.inverse(total)[block - 1:]
            assert np.abs(values - exact).max() < error_bound(points, block, 3) / 100


@pytest.mark.parametrize(("n", "m"), [(3_000_001, 1), (3_000_001, 1025), (2_000_003, 40_000), (3_500_001, 1_000_000)])
def test_all_ones(n, m):
    """All raw and all seed bits set, the largest counts there can be: each equals n, rounding far below the bound."""
    seed = np.ones(n + m - 1, dtype=np.uint8)
    engine = FourierEngine(n, m, seed_of(seed), 0)
    engine.push(pack(np.ones(n, dtype=np.uint8)), n)
    assert unpack(np.frombuffer(engine.partial(), dtype=np.uint8), m).all() == bool(n & 1)
    assert engine.largest_deviation < max(engine.plan.error_bound / 100, 1e-9)


def test_half_ones_at_size():
    """Alternating raw bits against an all-ones seed: every output bit is the parity of the ones, in several blocks."""
    n, m = 1_500_000, 200_000
    raw = (np.arange(n) % 2).astype(np.uint8)
    raw[-1] ^= 1
    engine = FourierEngine(n, m, seed_of(np.ones(n + m - 1, dtype=np.uint8)), 0, plan=choose_plan(n, m, 1 << 19))
    engine.push(pack(raw), n)
    values = unpack(np.frombuffer(engine.partial(), dtype=np.uint8), m)
    assert (values == int(raw.sum()) & 1).all() and engine.plan.group_blocks > 1


def test_far_value_is_refused():
    """A value more than 1/8 from an integer, or no number at all, stops the computation."""
    values = np.arange(100_000, dtype=float)
    out, distance = parities(values + 0.1)
    assert np.array_equal(out, np.arange(100_000) & 1) and abs(distance - 0.1) < 1e-9
    for bad in (0.13, -0.2, 0.5, math.nan, math.inf):
        for place in (0, 65_536, 99_999):
            broken = values.copy()
            broken[place] += bad
            with pytest.raises(Defect), np.errstate(invalid="ignore"):
                parities(broken)


def test_seed_is_read_in_windows():
    """A long raw string reads the seed in windows no longer than a batch of transforms, never whole."""
    n, m = 3_000_000, 1000
    seed = WatchedSeed(seed_of(random_bits(n + m - 1, 1)))
    engine = FourierEngine(n, m, seed, 0)
    engine.push(pack(random_bits(n, 2)), n)
    engine.partial()
    assert 0 < seed.longest <= max(1 << 17, 2 * engine.plan.points)
