"""Local boxes with memory: they never earn a small p-value more often than it says."""

import numpy as np
import pytest

from extractor.bell.memory import MemoryLocalRig
from extractor.bell.rigs import simulate, simulate_many
from extractor.bell.sampling import BLOCK_ROUNDS
from extractor.bell.score import score
from extractor.bell.strategies import POLICIES
from extractor.errors import Defect
from extractor.model import PLANES, Convention, Settings, Tally


def scores(rig: MemoryLocalRig, rounds: int, runs: int, **more):
    rows = simulate_many(rig, rounds, runs, seed=17)
    return [score(Tally(tuple(int(c) for c in row)), rig.convention, rig.settings, **more) for row in rows]


@pytest.mark.parametrize("policy", POLICIES)
@pytest.mark.parametrize("convention", [Convention(), Convention((0, 1), True)])
def test_p_values_hold_whatever_the_memory(policy, convention):
    """Over 300 runs of adaptive local boxes, p-values below 0.05 come in 5 per cent at most (four standard
    deviations granted)."""
    rig = MemoryLocalRig(policy, convention=convention, reacts_every=1)
    got = scores(rig, 400, 300, no_click=(0, int(convention.flip)))
    granted = 0.05 + 4 * np.sqrt(0.05 * 0.95 / 300)
    assert np.mean([s.p_value < 0.05 for s in got]) < granted
    assert np.mean([(s.decisive.memory_p_value or 1.0) < 0.05 for s in got]) < granted


def test_a_count_of_decisive_rounds_can_be_fooled_by_stopping_when_ahead():
    """Boxes that fall silent once ahead make the plain CH-conditioned p-value small far too often;
    the memory-robust one stays honest."""
    got = scores(MemoryLocalRig("stop-when-ahead", reacts_every=1), 2000, 500, no_click=(0, 0))
    assert np.mean([s.ch_p_value < 0.05 for s in got]) > 0.15
    assert np.mean([s.decisive.memory_p_value < 0.05 for s in got]) < 0.05


def test_betting_on_the_rarest_settings_uses_a_hidden_bias():
    """With a hidden settings bias the adaptive boxes win b of the rounds, which only a declared bias accounts for."""
    tau = 0.05
    rig = MemoryLocalRig("bet-on-rarest", setting_bias=(tau, tau), reacts_every=10)
    counts = simulate_many(rig, 20_000, 50, seed=2).sum(axis=0)
    told = score(Tally(tuple(int(c) for c in counts)), settings=Settings(bias=tau))
    assert told.wins / told.test_rounds == pytest.approx(0.75 + tau - tau**2, abs=3e-3)
    assert told.p_value > 1e-3


@pytest.mark.parametrize("reacts_every", [1, 7, 500])
def test_tallies_have_the_right_rounds(reacts_every):
    """Every run has exactly its rounds, with generation rounds at their settings, whatever the length of a stretch."""
    settings = Settings(test_probability=0.4, generation=(1, 0))
    rows = simulate_many(MemoryLocalRig(settings=settings, reacts_every=reacts_every), 1003, 20, seed=1)
    assert rows.shape == (20, 32) and (rows.sum(axis=1) == 1003).all()
    generation = rows[:, :16].reshape(20, 4, 4).sum(axis=(0, 2))
    assert generation[2] == pytest.approx(0.6 * 20 * 1003, rel=0.03) and generation[[0, 1, 3]].sum() == 0


def test_streamed_rounds_are_reproducible_and_a_prefix():
    """Rounds of boxes with memory depend on the seed only, and fewer rounds are the beginning of more,
    across blocks."""
    rig = MemoryLocalRig("switch-after-loss", reacts_every=4096)

    def bits(rounds):
        batches = list(simulate(rig, rounds, 9))
        return {p: np.concatenate([np.unpackbits(b.planes[p], count=b.rounds, bitorder="little") for b in batches])
                for p in PLANES}

    long, short = bits(BLOCK_ROUNDS + 50_000), bits(BLOCK_ROUNDS + 20_000)
    for plane in PLANES:
        assert np.array_equal(long[plane][:BLOCK_ROUNDS + 20_000], short[plane])
    won = (long["a"] ^ long["b"]) == (long["x"] & long["y"])
    assert won.mean() == pytest.approx(0.75, abs=0.002)


def test_own_policies_are_accepted_and_checked():
    """A function of the past may be the policy; one that answers nonsense is a defect."""
    rig = MemoryLocalRig(lambda past: np.full(past.runs, 5), reacts_every=3)
    assert simulate_many(rig, 10, 4, seed=0).sum() == 40
    with pytest.raises(Defect):
        simulate_many(MemoryLocalRig(lambda past: np.full(past.runs, 16)), 10, 4, seed=0)
