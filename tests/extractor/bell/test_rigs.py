"""Simulated rigs have the distribution they say, and simulations are reproducible."""

import math

import numpy as np
import pytest
from scipy import stats

from extractor.bell.rigs import LocalRig, MemoryLocalRig, Rig, optimal_rig, simulate, simulate_many, simulate_tally
from extractor.bell.sampling import BLOCK_ROUNDS, CellSampler, generator
from extractor.bell.wiring import settings_probabilities
from extractor.errors import Defect, InputError
from extractor.model import PLANES, SETTING_PAIRS, Convention, Settings, cell_index

WEIGHTED = Settings(test_probability=0.3, distribution=(0.4, 0.3, 0.2, 0.1), generation=(1, 0))
RIGS = {
    "ideal": Rig(),
    "weighted": Rig(visibility=0.9, efficiency=(0.9, 0.8), settings=WEIGHTED, no_click=(1, 0)),
    "photonic": optimal_rig(0.8, 0.02, 0.99, dark_counts=(1e-3, 1e-4)),
    "faulty": Rig(setting_bias=(0.05, -0.03), stuck=(None, 1), dropped_losses=0.3),
    "dropping": Rig(efficiency=(0.7, 0.7), dropped_no_clicks=0.8),
    "local": LocalRig(tuple(range(16)), settings=WEIGHTED),
}


def counts_of(rig, rounds: int, seed: int) -> np.ndarray:
    """Counts per cell from the planes themselves."""
    total = np.zeros(32, dtype=np.int64)
    for batch in simulate(rig, rounds, seed):
        cells = np.zeros(batch.rounds, dtype=np.int64)
        for name in PLANES:
            cells = 2 * cells + np.unpackbits(batch.planes[name], count=batch.rounds, bitorder="little")
        total += np.bincount(cells, minlength=32)
    return total


def fits(counts: np.ndarray, chances: np.ndarray) -> bool:
    """Chi-square of counts against chances, cells with few expected rounds pooled; impossible cells must be empty."""
    if counts[chances == 0].any():
        return False
    expected = chances * counts.sum()
    many = expected >= 10
    table, fitted = counts[many], expected[many]
    if expected[~many].sum() >= 1:
        table, fitted = np.append(table, counts[~many].sum()), np.append(fitted, expected[~many].sum())
    return stats.chisquare(table, fitted * table.sum() / fitted.sum()).pvalue > 1e-4


@pytest.mark.parametrize("name", RIGS)
def test_chances_add_up_and_respect_the_settings(name):
    """Cell chances add up to 1, and without lost rounds every setting has its declared or biased chance."""
    rig = RIGS[name]
    p = rig.cell_probabilities()
    assert p.shape == (2,) * 5 and p.min() >= 0 and p.sum() == pytest.approx(1.0, abs=1e-12)
    assert np.array_equal(rig.expected_tally_frequencies(), p.ravel())
    if not getattr(rig, "dropped_losses", 0) and not getattr(rig, "dropped_no_clicks", 0):
        assert p.sum(axis=(3, 4)) == pytest.approx(settings_probabilities(rig.settings), abs=1e-12)


@pytest.mark.parametrize("name", [n for n in RIGS if n not in ("faulty", "dropping")])
def test_rigs_in_order_do_not_signal(name):
    """Each side's outcome chances do not depend on the other side's setting."""
    p = RIGS[name].cell_probabilities()[1]
    given = p / p.sum(axis=(2, 3), keepdims=True)
    a, b = given.sum(axis=3), given.sum(axis=2)
    assert a[:, 0] == pytest.approx(a[:, 1], abs=1e-12) and b[0] == pytest.approx(b[1], abs=1e-12)


@pytest.mark.parametrize("name", RIGS)
def test_simulated_tallies_fit(name):
    """Simulated rounds, and tallies made without rounds, fit the rig's chances (chi-square)."""
    rig = RIGS[name]
    chances = rig.expected_tally_frequencies()
    assert fits(counts_of(rig, BLOCK_ROUNDS + 300_000, seed=1), chances)
    assert fits(np.array(simulate_tally(rig, 10**8, seed=1).counts), chances)


def test_simulation_is_reproducible_and_a_prefix_of_a_longer_one():
    """The same seed gives the same planes, another seed others, and fewer rounds are the beginning of more."""
    def bits(rounds, seed, name):
        return np.concatenate([np.unpackbits(batch.planes[name], count=batch.rounds, bitorder="little")
                               for batch in simulate(Rig(), rounds, seed)])

    long = bits(BLOCK_ROUNDS + 1000, 7, "a")
    assert np.array_equal(long, bits(BLOCK_ROUNDS + 1000, 7, "a"))
    assert np.array_equal(long[:BLOCK_ROUNDS + 13], bits(BLOCK_ROUNDS + 13, 7, "a"))
    assert np.array_equal(long[:4321], bits(4321, 7, "a"))
    assert not np.array_equal(long[:4321], bits(4321, 8, "a"))
    assert not np.array_equal(long[:1000], long[BLOCK_ROUNDS:])


def test_batches_are_bounded():
    """Batches hold 2^20 rounds, the last one the rest."""
    assert [b.rounds for b in simulate(LocalRig.always(3), 2 * BLOCK_ROUNDS + 9, 0)] == [BLOCK_ROUNDS, BLOCK_ROUNDS, 9]


@pytest.mark.parametrize("convention", [Convention(p, f) for p in SETTING_PAIRS for f in (False, True)])
def test_optimal_rig_under_each_convention(convention):
    """The largest S is the same under each convention, and empty rounds are won at three pairs,
    whatever the no-click outcomes chosen so."""
    assert optimal_rig(0.9, convention=convention).chsh == pytest.approx(2.359631, abs=1e-6)
    turned = optimal_rig(0.9, convention=convention, no_click=(1, 1 ^ int(convention.flip)))
    assert turned.chsh == pytest.approx(2.359631, abs=1e-6)
    empty = optimal_rig(0.9, pair_probability=0.0, convention=convention)
    assert empty.chsh == pytest.approx(2.0, abs=1e-12)


def test_pairs_in_few_rounds_dilute_the_violation():
    """With pairs in a share mu of the rounds, S = 2 + mu (S of a pair - 2)."""
    assert optimal_rig(0.9, 0.01).chsh == pytest.approx(2 + 0.01 * (optimal_rig(0.9).chsh - 2), abs=1e-12)


def test_optimal_angles_for_a_given_state():
    """For a pure state and perfect detectors the best angles reach 2 sqrt(1 + sin^2 2 theta) (Horodecki 1995)."""
    for theta in (0.1, 0.4, math.pi / 4):
        assert Rig(state_angle=theta).chsh == pytest.approx(2 * math.sqrt(1 + math.sin(2 * theta)**2), abs=1e-7)


def test_optimal_rig_beats_its_neighbours():
    """No small change of state or angles raises S of an unequal, noisy, dark-counting rig."""
    rig, random = optimal_rig((0.8, 0.9), 1.0, 0.98, dark_counts=(1e-3, 1e-2)), np.random.default_rng(2)
    for _ in range(200):
        step = random.normal(0, 0.01, 5)
        (a0, a1), (b0, b1) = rig.measured_angles
        angles = ((a0 + step[0], a1 + step[1]), (b0 + step[2], b1 + step[3]))
        near = Rig(rig.visibility, rig.efficiency, rig.state_angle + step[4], angles=angles,
                   dark_counts=rig.dark_counts)
        assert near.chsh <= rig.chsh + 1e-9


def test_drift_changes_blocks_and_the_tally():
    """Visibility falls with the round number, in single blocks and in tallies made without rounds."""
    rig = Rig(visibility=0.9, visibility_drift=-0.05)
    assert rig.cell_probabilities(2 * 10**6) == pytest.approx(Rig(visibility=0.8).cell_probabilities(), abs=1e-12)
    assert rig.cell_probabilities(10**9) == pytest.approx(Rig(visibility=0.0).cell_probabilities(), abs=1e-12)
    last = list(simulate(rig, 3 * BLOCK_ROUNDS, 4))[-1]
    wins = np.unpackbits(~(last.planes["a"] ^ last.planes["b"] ^ (last.planes["x"] & last.planes["y"]))).mean()
    assert wins == pytest.approx(0.5 + math.sqrt(2) / 4 * (0.9 - 0.05 * 2.5 * BLOCK_ROUNDS / 1e6), abs=2e-3)
    early, late = simulate_many(rig, BLOCK_ROUNDS, 1, 1), simulate_many(rig, 8 * BLOCK_ROUNDS, 1, 1)
    winning = [cell_index(1, *cell) for cell in np.ndindex(2, 2, 2, 2) if Convention().wins(*cell)]
    won = [row[winning].sum() / row.sum() for row in (early[0], late[0])]
    assert won[1] < won[0] - 0.03


def test_alias_table_is_exact_for_multiples_of_its_step():
    """Chances that are multiples of 2^-32 are kept exactly: over all words each cell has its share."""
    chances = np.array([0.5, 0.25, 0.125, 0.125 - 2**-32, 2**-32, 0, 0, 0])
    table = CellSampler(chances)
    assert table.words == tuple(int(c * 2**32) for c in chances)
    height = 2**32 // 8
    share = np.zeros(8, dtype=np.int64)
    for column in range(8):
        share[table._pairs[2 * column + 1]] += int(table._keep[column])
        share[table._pairs[2 * column]] += height - int(table._keep[column])
    assert tuple(share) == table.words
    assert not np.isin(table.draw(generator(1, 0), 100_000), [5, 6, 7]).any()


def test_random_tables_keep_every_share():
    """For random chances the table's shares are the chances rounded to 2^-32 and add up exactly."""
    random = np.random.default_rng(3)
    for _ in range(50):
        chances = random.dirichlet(np.full(32, 0.2))
        table = CellSampler(chances)
        assert sum(table.words) == 2**32
        assert max(abs(w / 2**32 - c) for w, c in zip(table.words, chances)) <= 2**-32
        share = np.zeros(32, dtype=np.int64)
        np.add.at(share, table._pairs[1::2], table._keep.astype(np.int64))
        np.add.at(share, table._pairs[0::2], 2**27 - table._keep.astype(np.int64))
        assert tuple(share) == table.words


@pytest.mark.parametrize("build, field", [
    (lambda: Rig(visibility=1.1), "/visibility"),
    (lambda: Rig(efficiency=(0.5, -0.1)), "/efficiency"),
    (lambda: Rig(no_click=(0, 2)), "/no_click"),
    (lambda: Rig(angles="best"), "/angles"),
    (lambda: Rig(setting_bias=(0.6, 0.0)), "/setting_bias"),
    (lambda: LocalRig((1.0,) * 15), "/weights"),
    (lambda: LocalRig((0.0,) * 16), "/weights"),
    (lambda: MemoryLocalRig("guess"), "/policy"),
    (lambda: MemoryLocalRig(reacts_every=0), "/reacts_every"),
    (lambda: next(simulate(Rig(), 0, 1)), "/rounds"),
    (lambda: next(simulate(Rig(), 10, -1)), "/seed"),
    (lambda: optimal_rig(1.2), "/efficiency"),
])
def test_impossible_rigs_are_refused(build, field):
    """A rig or simulation that cannot be is an InputError naming the field."""
    with pytest.raises(InputError) as caught:
        build()
    assert caught.value.field == field


def test_a_bad_table_is_our_own_defect():
    """Chances that do not add up can only come from our own code."""
    with pytest.raises(Defect):
        CellSampler(np.array([0.5, 0.6]))
