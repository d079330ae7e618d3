"""Diagnostics stay silent for rigs in order and speak up for the faults they are made for."""

import json

import numpy as np
import pytest

from extractor.bell.diagnostics import diagnose, diagnose_drift
from extractor.bell.rigs import LocalRig, Rig, optimal_rig, simulate_many, simulate_tally
from extractor.errors import InputError
from extractor.model import Convention, Settings, Tally, cell_index
from tests.published.counts import tally_of

GAMMA = Settings(test_probability=0.1)


def flags(tally, *more, **named) -> set[str]:
    return {d.name for d in diagnose(tally, *more, **named) if d.flag}


@pytest.mark.parametrize("rig", [Rig(visibility=0.95), Rig(visibility=0.95, settings=GAMMA), optimal_rig(0.8, 0.01),
                                 LocalRig((1.0,) * 16)], ids=["clean", "generation", "photonic", "local"])
def test_rigs_in_order_raise_no_flag(rig):
    """A hundred runs of each rig in order, with calibration, raise one flag at most."""
    rows = simulate_many(rig, 200_000, 101, seed=21)
    tallies = [Tally(tuple(int(c) for c in row)) for row in rows]
    raised = [flags(tally, Convention(), rig.settings, tallies[0]) for tally in tallies[1:]]
    assert sum(bool(f) for f in raised) <= 1


@pytest.mark.parametrize("rig, expected", [
    (Rig(setting_bias=(0.01, 0.0)), "settings-frequencies"),
    (Rig(efficiency=(0.9, 0.9), dropped_losses=0.9), "beyond-tsirelson"),
    (Rig(convention=Convention((0, 1))), "other-convention"),
    (Rig(convention=Convention((1, 1), True)), "other-convention"),
    (Rig(stuck=(None, 1)), "stuck-outcome"),
    (optimal_rig(0.8, 0.05), "calibration-outcomes"),
    (Rig(visibility=0.5), "calibration-score"),
])
def test_each_fault_raises_its_flag(rig, expected):
    """A fault raises the flag made for it, and its sentence says what to do."""
    tally = simulate_tally(rig, 10**6, seed=5)
    calibration = simulate_tally(Rig(visibility=0.95), 10**6, seed=6)
    found = {d.name: d for d in diagnose(tally, calibration=calibration)}
    assert found[expected].flag
    assert found[expected].sentence.count(".") >= 2


def test_signalling_is_noticed():
    """If b copies x, the no-signalling flag goes up."""
    counts = [0] * 32
    for x in (0, 1):
        for y in (0, 1):
            for a in (0, 1):
                counts[cell_index(1, x, y, a, x)] = 1000
    found = {d.name: d for d in diagnose(Tally(tuple(counts)))}
    assert found["no-signalling"].flag and "b at y" in found["no-signalling"].sentence
    assert found["no-signalling"].value == 1.0


def test_few_rounds_are_judged_exactly():
    """With a handful of rounds nothing divides by zero and nothing is flagged by accident."""
    for seed in range(50):
        assert not flags(simulate_tally(Rig(visibility=0.9), 12, seed=seed))


def test_test_fraction():
    """A test fraction off the declared gamma is flagged; generation rounds where none may occur are flagged too."""
    tally = simulate_tally(Rig(settings=GAMMA), 10**5, seed=4)
    assert "test-fraction" not in flags(tally, Convention(), GAMMA)
    assert "test-fraction" in flags(tally, Convention(), Settings(test_probability=0.12))
    assert "test-fraction" in flags(tally, Convention(), Settings())


def test_perfect_correlations_beyond_quantum_theory():
    """Boxes that win every round (S = 4) are far beyond 2 sqrt 2 although their estimated scatter is zero."""
    counts = [0] * 32
    for x in (0, 1):
        for y in (0, 1):
            for a in (0, 1):
                counts[cell_index(1, x, y, a, a ^ (x & y))] = 100
    assert "beyond-tsirelson" in flags(Tally(tuple(counts)))


def test_drift_over_segments():
    """A steady rig shows no drift over twenty segments, one whose visibility falls by a tenth does."""
    def segments(visibilities):
        return [simulate_tally(Rig(visibility=float(v)), 50_000, seed=i) for i, v in enumerate(visibilities)]

    assert not diagnose_drift(segments([0.95] * 20)).flag
    drifting = diagnose_drift(segments(np.linspace(0.95, 0.85, 20)))
    assert drifting.flag and drifting.value == pytest.approx(0.28, abs=0.05)
    assert diagnose_drift([]).p_value is None


def test_documents_are_json_and_order_is_fixed():
    """Documents survive JSON, and the names come in one order whatever the data."""
    tally = tally_of(((5, 1, 1, 5),) * 4)
    made = diagnose(tally, calibration=tally)
    assert [json.loads(json.dumps(d.document(), allow_nan=False))["name"] for d in made] == [
        "settings-frequencies", "test-fraction", "no-signalling", "beyond-tsirelson", "other-convention",
        "stuck-outcome",
        "calibration-score", "calibration-outcomes"]
    assert all(d.sentence.endswith(".") for d in made)


def test_missing_settings_are_not_an_error():
    """A tally of generation rounds only is diagnosed; an empty one is refused."""
    counts = [0] * 32
    counts[0] = 10
    assert len(diagnose(Tally(tuple(counts)), Convention(), GAMMA)) == 6
    with pytest.raises(InputError):
        diagnose(Tally.empty())
