"""How S falls with the efficiency of the detectors when a no-click counts as an outcome."""

import math

import pytest

from extractor.bell.rigs import Rig, optimal_rig

# Largest S over cos t |00> + sin t |11> and real measurements, no-click counted as +1, and t in degrees;
# computed independently.
TABLE = [
    (1.0, 2.828427, 45.0), (0.95, 2.569746, 41.0), (0.90, 2.359631, 36.5), (0.85, 2.198761, 31.3),
    (0.8284, 2.144666, 28.7), (0.80, 2.087640, 24.9), (0.78, 2.056901, 22.1), (0.75, 2.024604, 17.3),
    (0.70, 2.001814, 7.8), (0.68, 2.000123, 3.3),
]
MAXIMALLY_ENTANGLED = [(1.0, 2.828427), (0.95, 2.557655), (0.90, 2.311026), (0.85, 2.088539)]


@pytest.mark.parametrize("efficiency, chsh, degrees", TABLE)
def test_largest_chsh_for_an_efficiency(efficiency, chsh, degrees):
    """The optimal rig reaches the independently computed S and state angle (problem of Eberhard, PRA 47,
    R747 (1993))."""
    rig = optimal_rig(efficiency)
    assert rig.chsh == pytest.approx(chsh, abs=1.1e-6)
    assert math.degrees(rig.state_angle) == pytest.approx(degrees, abs=0.06)


@pytest.mark.parametrize("efficiency, chsh", MAXIMALLY_ENTANGLED)
def test_maximally_entangled_state(efficiency, chsh):
    """The maximally entangled state has S = 2 sqrt 2 eta^2 + 2 (1 - eta)^2."""
    rig = Rig(efficiency=(efficiency, efficiency))
    assert rig.chsh == pytest.approx(2 * math.sqrt(2) * efficiency**2 + 2 * (1 - efficiency)**2, abs=1e-12)
    assert rig.chsh == pytest.approx(chsh, abs=5e-7)


def test_threshold_of_the_maximally_entangled_state():
    """Garg, Mermin, PRD 35, 3831 (1987): S = 2 at eta = 2 (sqrt 2 - 1) = 0.82843."""
    threshold = 2 * (math.sqrt(2) - 1)
    assert threshold == pytest.approx(0.82843, abs=5e-6)
    assert Rig(efficiency=(threshold, threshold)).chsh == pytest.approx(2.0, abs=1e-12)
    assert Rig(efficiency=(threshold + 1e-6,) * 2).chsh > 2 > Rig(efficiency=(threshold - 1e-6,) * 2).chsh


def test_threshold_of_the_best_states():
    """Eberhard 1993: above eta = 2/3 some state still violates, at and below it none does."""
    assert optimal_rig(0.675).chsh > 2 + 1e-6
    for efficiency in (2 / 3, 0.66, 0.5):
        assert optimal_rig(efficiency).chsh <= 2 + 1e-9


def test_the_best_state_violates_where_the_maximally_entangled_one_cannot():
    """At eta = 0.75 the best state has S > 2 and the maximally entangled one S < 2 at any angles."""
    assert optimal_rig(0.75).chsh > 2.02
    assert Rig(efficiency=(0.75, 0.75)).chsh < 2


def test_discarding_no_clicks_hides_any_efficiency():
    """The detection loophole: if all rounds with a no-click vanish, S is 2 sqrt 2 at any efficiency (Pearle, PRD 2,
    1418 (1970))."""
    assert Rig(efficiency=(0.3, 0.4), dropped_no_clicks=1.0).chsh == pytest.approx(2 * math.sqrt(2), abs=1e-12)
