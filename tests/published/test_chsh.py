"""Textbook values of the CHSH expression, from local strategies to the quantum maximum."""

import math

import numpy as np
import pytest

from extractor.bell.rigs import LocalRig, Rig, textbook_angles
from extractor.bell.score import TSIRELSON_BOUND
from extractor.bell.strategies import STRATEGIES, largest_chsh, losing_at, outcomes
from extractor.bell.two_qubits import pair_probabilities
from extractor.model import SETTING_PAIRS, Convention

CONVENTIONS = [Convention(pair, flip) for pair in SETTING_PAIRS for flip in (False, True)]


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_local_strategies_reach_2_and_no_more(convention):
    """Clauser, Horne, Shimony, Holt, PRL 23, 880 (1969): the 16 deterministic strategies have S = 2 or -2,
    w = 3/4 or 1/4."""
    scores = [LocalRig.always(s, convention=convention).chsh for s in range(STRATEGIES)]
    assert sorted(scores) == [-2.0] * 8 + [2.0] * 8
    assert largest_chsh(convention) == 2.0
    assert max(LocalRig.always(s, convention=convention).winning_probability for s in range(STRATEGIES)) == 0.75


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_a_strategy_loses_at_every_single_pair(convention):
    """For every setting pair some strategy loses there only, which is why the local win limit is 1 - min P(x, y)."""
    for pair, strategy in zip(SETTING_PAIRS, losing_at(convention)):
        assert [p for p in SETTING_PAIRS if not convention.wins(*p, *outcomes(strategy, *p))] == [pair]


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_quantum_maximum(convention):
    """Tsirelson, Lett. Math. Phys. 4, 93 (1980): S = 2 sqrt 2, w = (2 + sqrt 2)/4, under each convention."""
    rig = Rig(convention=convention)
    assert rig.chsh == pytest.approx(2 * math.sqrt(2), abs=1e-12)
    assert TSIRELSON_BOUND == 2 * math.sqrt(2)
    assert rig.winning_probability == pytest.approx((2 + math.sqrt(2)) / 4, abs=1e-12)
    assert rig.winning_probability == pytest.approx(0.853553, abs=5e-7)


def test_no_angles_beat_the_quantum_maximum():
    """Tsirelson 1980: random states and angles never exceed 2 sqrt 2."""
    random = np.random.default_rng(11)
    for _ in range(300):
        a0, a1, b0, b1, theta = random.uniform(0, math.pi, 5)
        assert abs(Rig(state_angle=theta, angles=((a0, a1), (b0, b1))).chsh) <= 2 * math.sqrt(2) + 1e-12


def _correlator(outcome: np.ndarray) -> float:
    return float(outcome[0, 0] + outcome[1, 1] - outcome[0, 1] - outcome[1, 0])


@pytest.mark.parametrize("degrees", [0, 22.5, 45, 90, 135, 180])
def test_singlet_correlator(degrees):
    """Common practice: spins along axes at angle theta have E = -cos theta in the singlet.

    The singlet is |00> - |11> (state angle -pi/4) with Bob's basis states swapped, which turns his half-angle b
    into pi/2 - b.
    """
    theta = math.radians(degrees)
    for turn in (0.0, 0.3, 1.1):        # only the angle between the axes matters
        alpha, beta = turn / 2, (turn + theta) / 2
        outcome = pair_probabilities(-math.pi / 4, 1.0, alpha, math.pi / 2 - beta)
        assert _correlator(outcome) == pytest.approx(-math.cos(theta), abs=1e-12)
        assert outcome.sum(axis=1) == pytest.approx([0.5, 0.5])


def test_the_45_45_45_135_layout():
    """Common practice: axes at 45, 45, 45 and 135 degrees reach |S| = 2 sqrt 2, with three equal correlators and
    one opposite."""
    (a0, a1), (b0, b1) = textbook_angles(Convention())
    between = [abs(2 * (a - b)) for a in (a0, a1) for b in (b0, b1)]       # angles of directions, twice the half-angles
    assert sorted(math.degrees(v) for v in between) == pytest.approx([45, 45, 45, 135])
    e = [-math.cos(v) for v in between]
    assert abs(e[0] + e[1] + e[2] - e[3]) == pytest.approx(2 * math.sqrt(2), abs=1e-12)


@pytest.mark.parametrize("visibility", [0.0, 0.5, 0.7071067811865475, 0.9, 1.0])
def test_werner_state(visibility):
    """Werner, PRA 40, 4277 (1989) state at the textbook angles: S = 2 sqrt 2 V."""
    assert Rig(visibility=visibility).chsh == pytest.approx(2 * math.sqrt(2) * visibility, abs=1e-12)


def test_werner_threshold():
    """S exceeds 2 exactly from V > 1/sqrt 2 = 0.7071 on."""
    threshold = 1 / math.sqrt(2)
    assert Rig(visibility=threshold + 1e-9).chsh > 2 > Rig(visibility=threshold - 1e-9).chsh
