"""Counts per cell against counting one by one."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.model import CELLS, PLANES, RoundBatch, RoundRules, Tally, cells
from extractor.tally import tally_batch, tally_batches
from tests.extractor.records.samples import ALL_TESTS, SPOT_CHECKS, batch_of, columns_of


def _counted(columns: dict[str, np.ndarray]) -> tuple[int, ...]:
    index = sum(weight * columns[name].astype(np.int64) for name, weight in zip(PLANES, (16, 8, 4, 2, 1)))
    return tuple(np.bincount(index, minlength=CELLS).tolist())


@settings(derandomize=True, deadline=None, max_examples=60, database=None)
@given(rounds=st.integers(1, 700), seed=st.integers(0, 2**32), all_tests=st.booleans())
def test_counts_equal_counting_one_by_one(rounds, seed, all_tests):
    """Popcounts and the transform give the count of every cell, with and without generation rounds."""
    columns = columns_of(rounds, seed, ALL_TESTS if all_tests else SPOT_CHECKS)
    assert tally_batch(batch_of(columns)).counts == _counted(columns)


@pytest.mark.parametrize("rounds", [2**20 - 1, 2**20, 2**20 + 1, 2**21 + 64, 2**21 + 72])
def test_sizes_around_slices(rounds):
    """Sizes at the edges of words and slices are counted right."""
    for rules in (ALL_TESTS, RoundRules(0.1, (0, 1))):
        columns = columns_of(rounds, 5, rules)
        assert tally_batch(batch_of(columns)).counts == _counted(columns)


def test_tests_in_some_slices_only():
    """A run whose generation rounds all lie in one slice is counted right."""
    columns = columns_of(3 * 2**20, 6, ALL_TESTS)
    columns["t"][2**20 + 5 : 2**20 + 900] = 0
    assert tally_batch(batch_of(columns)).counts == _counted(columns)


def test_one_round_of_each_cell():
    """Each cell alone is counted in its own place."""
    for index, values in cells():
        batch = batch_of({name: np.array([value], np.uint8) for name, value in zip(PLANES, values)})
        assert tally_batch(batch).counts == tuple(int(k == index) for k in range(CELLS))


def test_planes_that_do_not_start_at_a_word():
    """Planes that are views from an odd address are counted right."""
    columns = columns_of(1_000, 8)
    batch = batch_of(columns)
    views = {}
    for name, plane in batch.planes.items():
        room = np.zeros(plane.size + 1, np.uint8)
        room[1:] = plane
        views[name] = room[1:]
    assert tally_batch(RoundBatch(1_000, views)).counts == _counted(columns)


def test_tallies_of_parts_add():
    """The tally of several batches is the sum, and that of none is empty."""
    parts = [columns_of(n, n) for n in (1, 100, 65)]
    total = tuple(map(sum, zip(*(_counted(part) for part in parts))))
    assert tally_batches(map(batch_of, parts)).counts == total
    assert tally_batches([]) == Tally.empty()
