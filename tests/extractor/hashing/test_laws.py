"""Laws of the hash: linear in raw string and seed, and the same however the raw string arrives."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.hashing._numpy import FourierEngine
from extractor.hashing._plan import Plan, choose_plan
from extractor.hashing.packing import pack
from extractor.hashing.toeplitz import ToeplitzStream
from tests.extractor.hashing.cases import hash_with, random_bits, seed_of

SIZES = st.integers(1, 3000)
FEW = settings(max_examples=60, deadline=None, derandomize=True, database=None)


@FEW
@given(n=SIZES, m=SIZES, label=st.integers(0, 10**6))
def test_linear(n, m, label):
    """Hash of a sum is the sum of the hashes, for raw strings and for seeds."""
    one, two = random_bits(n, label), random_bits(n, label + 1)
    seed, other = random_bits(n + m - 1, label + 2), random_bits(n + m - 1, label + 3)
    def h(s, x):
        return hash_with("numpy-fft", s, x, m)
    assert np.array_equal(h(seed, one ^ two), h(seed, one) ^ h(seed, two))
    assert np.array_equal(h(seed ^ other, one), h(seed, one) ^ h(other, one))


@FEW
@given(data=st.data(), n=SIZES, m=st.integers(1, 300), backend=st.sampled_from(["numpy-fft", "definition"]))
def test_any_split(data, n, m, backend):
    """Pushes of any lengths, partials anywhere, and a second stream that starts anywhere XOR to the hash."""
    seed, raw = random_bits(n + m - 1, n), random_bits(n, m)
    cuts = sorted(data.draw(st.lists(st.integers(0, n), max_size=6))) + [n]
    breaks = set(data.draw(st.lists(st.integers(0, len(cuts) - 1), max_size=3)))
    handover = data.draw(st.integers(0, len(cuts) - 1))
    stream = ToeplitzStream(n, m, seed_of(seed), backend=backend)
    total, position = np.zeros((m + 7) // 8, dtype=np.uint8), 0
    for k, cut in enumerate(cuts):
        stream.push(pack(raw[position:cut]), cut - position)
        position = cut
        assert stream.position == position
        if k in breaks or k in (handover, len(cuts) - 1):
            total ^= np.frombuffer(stream.partial(), dtype=np.uint8)
        if k == handover:           # someone else carries on from here
            stream = ToeplitzStream(n, m, seed_of(seed), start=position, backend=backend)
    assert np.array_equal(total, pack(hash_with("definition", seed, raw, m)))


@FEW
@given(n=st.integers(1, 600), m=st.integers(1, 200), power=st.integers(4, 9), group=st.integers(1, 5),
       tiled=st.booleans(), start=st.integers(0, 600))
def test_any_plan(n, m, power, group, tiled, start):
    """Whatever the transform length, tiling, group size and start, the bits are those of the definition."""
    points, start = 1 << power, min(start, n)
    if tiled:
        plan = Plan(points, points // 2, points // 2, -(-m // (points // 2)), group)
    else:
        block = (points - m + 1) // 8 * 8
        if block < 8:
            return
        plan = Plan(points, block, m, 1, group)
    seed, raw = random_bits(n + m - 1, n), random_bits(n, m)
    raw[:start] = 0
    engine = FourierEngine(n, m, seed_of(seed), start, plan=plan)
    if start < n:
        engine.push(pack(raw[start:]), n - start)
    assert np.array_equal(np.frombuffer(engine.partial(), dtype=np.uint8), pack(hash_with("definition", seed, raw, m)))


def test_long_transforms_and_tiles_agree():
    """One tile, several tiles and short transforms give the same bits around 2^19 points, with one thread or two."""
    n, m = 900_001, 300_007
    seed, raw = random_bits(n + m - 1, 1), random_bits(n, 2)
    short = choose_plan(n, m, 1 << 16)
    one_tile = choose_plan(n, m, 1 << 19)
    tiles = Plan(1 << 19, 1 << 18, 1 << 18, 2, 3)
    assert short.tiles > 1 and one_tile.tiles == 1 and one_tile.group_blocks > 1
    answers = []
    for plan, threads in ((short, 1), (one_tile, 1), (one_tile, 2), (tiles, 2)):
        engine = FourierEngine(n, m, seed_of(seed), 0, threads, plan)
        engine.push(pack(raw), n)
        answers.append(engine.partial())
    assert len(set(answers)) == 1
