"""Boxes without any entanglement, with memory, with the best settings bias allowed: they may not get bits more often than declared."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from extractor.bell import rigs, strategies
from extractor.entropy import bound, planning
from extractor.model import Settings, Tally

RUNS = 20_000
SOUNDNESS = 1e-2        # large enough to see


def shares_with_bits(tallies: np.ndarray, declaration) -> int:
    """How many of the simulated runs end with at least one certified bit."""
    certified = {}
    for counts in map(tuple, tallies.tolist()):
        if counts not in certified:
            certified[counts] = bound.certify(declaration, Tally(counts)).certified_length > 0
    return sum(certified[counts] for counts in map(tuple, tallies.tolist()))


def fast_lengths(tallies: np.ndarray, declaration) -> np.ndarray:
    """Available bits of many tallies at once: the certificate of one tally plus the difference in credit (floats suffice here)."""
    credits = np.array(list(declaration.table.generation) * 4 + list(declaration.table.test))
    reference = Tally(tuple(int(n) for n in tallies[0]))
    base = bound.certify(declaration, reference)
    return base.available_bits + (tallies - tallies[0]) @ credits


@pytest.mark.parametrize("policy", sorted(strategies.POLICIES))
@pytest.mark.parametrize("settings", [Settings(), Settings(bias=0.02)])
def test_local_boxes_with_memory_hardly_ever_earn_bits(policy, settings):
    """Of 20 000 local runs with memory, credit enough for one bit turns up in no more than a share `soundness` allows."""
    rounds = 400
    declaration = planning.declare(rig="no entanglement", rounds=rounds, method="factor-closed", soundness=SOUNDNESS, score=0.83,
                                   output_bits=1, settings=settings, confidence=1e-9)
    rig = rigs.MemoryLocalRig(policy=policy, settings=settings, reacts_every=4, setting_bias=(settings.bias, settings.bias))
    tallies = rigs.simulate_many(rig, rounds, RUNS, seed=7)
    earned = int((fast_lengths(tallies, declaration) >= 1).sum())
    # One bit that is no bit at all is 1/2 away from uniform, so acceptance p costs p/2 <= soundness; demanded at 99.99 % confidence.
    assert stats.binom.sf(earned - 1, RUNS, 2 * SOUNDNESS) > 1e-4


def test_fast_lengths_agree_with_certificates():
    """The shortcut used above gives the same decision as the full certificate."""
    declaration = planning.declare(rig="no entanglement", rounds=300, method="factor-closed", soundness=0.2, score=0.8, output_bits=1, confidence=1e-9)
    tallies = rigs.simulate_many(rigs.LocalRig.always(0), 300, 100, seed=3)
    assert int((fast_lengths(tallies, declaration) >= 1).sum()) == shares_with_bits(tallies, declaration)


@pytest.mark.parametrize("strategy", range(16))
def test_deterministic_boxes_hardly_ever_earn_bits(strategy):
    """The same for each local deterministic strategy, spot-checking, over 5 000 runs."""
    settings = Settings(0.5)
    declaration = planning.declare(rig="no entanglement", rounds=500, method="factor-closed", soundness=SOUNDNESS, score=0.84,
                                   output_bits=1, settings=settings, confidence=1e-9)
    tallies = rigs.simulate_many(rigs.LocalRig.always(strategy, settings=settings), 500, 5000, seed=strategy)
    earned = int((fast_lengths(tallies, declaration) >= 1).sum())
    assert stats.binom.sf(earned - 1, 5000, 2 * SOUNDNESS) > 1e-4


@pytest.mark.parametrize("method", ["eat-2018", "eat-2019"])
def test_local_boxes_never_meet_an_accumulation_threshold(method):
    """20 000 local runs with memory at a size where the eat methods certify: none is accepted (the chance is below 1e-100)."""
    declaration = planning.declare(rig="no entanglement", rounds=100_000, method=method, soundness=SOUNDNESS, score=0.85)
    tallies = rigs.simulate_many(rigs.LocalRig.always(0), 100_000, RUNS, seed=1)
    assert shares_with_bits(tallies[:200], declaration) == 0
    limit = declaration.acceptance.limit
    wins = tallies[:, [i for i in range(16, 32) if declaration.convention.wins(i >> 3 & 1, i >> 2 & 1, i >> 1 & 1, i & 1)]].sum(axis=1)
    assert not ((wins >= limit) if method == "eat-2018" else (100_000 - wins <= limit)).any()


def test_stopping_at_the_best_moment_does_not_help_local_boxes():
    """Local boxes whose run is stopped the moment its credit suffices: still no more often than `soundness` allows (5 000 runs)."""
    rounds, runs = 1500, 5000
    declaration = planning.declare(rig="no entanglement", rounds=rounds, method="factor-closed", soundness=SOUNDNESS, score=0.83, output_bits=1, confidence=1e-9)
    won, lost = max(declaration.table.test), min(declaration.table.test)
    penalty = sum(t.bits for t in bound.certify(declaration, Tally.empty()).terms)       # no rounds: nothing but the penalty
    wins = np.random.default_rng(9).random((runs, rounds)) < 0.75
    credit = np.cumsum(np.where(wins, won, lost), axis=1) + penalty
    earned = int((credit.max(axis=1) >= 1).sum())
    assert stats.binom.sf(earned - 1, runs, 2 * SOUNDNESS) > 1e-4
