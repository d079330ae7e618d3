"""The score of a tally."""

import json
import math

import numpy as np
import pytest

from extractor.bell.decisive import count_decisive, decisive_cells
from extractor.bell.rigs import LocalRig, Rig, optimal_rig, simulate_many
from extractor.bell.score import score
from extractor.bell.strategies import STRATEGIES, losing_at, outcomes
from extractor.model import SETTING_PAIRS, Convention, Settings, Tally, cell_index
from tests.published.counts import DELFT_2015, tally_of

CONVENTIONS = [Convention(pair, flip) for pair in SETTING_PAIRS for flip in (False, True)]


def as_tally(row) -> Tally:
    return Tally(tuple(int(c) for c in row))


def expected_tally(rig, rounds: float) -> Tally:
    return as_tally(np.round(rig.expected_tally_frequencies() * rounds))


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_score_of_expected_counts_is_the_rigs(convention):
    """Expected counts of a rig give the rig's S and w under each convention."""
    rig = Rig(visibility=0.93, convention=convention)
    s = score(expected_tally(rig, 1e12), convention)
    assert s.chsh == pytest.approx(rig.chsh, abs=1e-9)
    assert s.winning_probability == pytest.approx(rig.winning_probability, abs=1e-9)
    assert s.wins / s.test_rounds == pytest.approx(rig.winning_probability, abs=1e-9)


def test_unequal_settings_do_not_bias_the_score():
    """The same boxes score the same S under very unequal settings, though the share of raw wins moves."""
    fair, skew = Rig(visibility=0.8), Rig(visibility=0.8, settings=Settings(distribution=(0.7, 0.1, 0.15, 0.05)))
    assert score(expected_tally(skew, 1e12), settings=skew.settings).chsh == pytest.approx(fair.chsh, abs=1e-9)


def test_generation_rounds_do_not_enter():
    """Rounds with t = 0 change the count of generation rounds and nothing else."""
    counts = list(tally_of(DELFT_2015).counts)
    counts[cell_index(0, 0, 0, 1, 0)] = 10**6
    with_generation, without = score(Tally(tuple(counts))), score(tally_of(DELFT_2015))
    assert with_generation.generation_rounds == 10**6
    assert with_generation.chsh == without.chsh and with_generation.p_value == without.p_value


def test_standard_error_matches_the_scatter_of_simulated_runs():
    """Over 2000 simulated runs the scatter of S is its standard error, to 10 per cent."""
    scores = [score(as_tally(row)) for row in simulate_many(Rig(visibility=0.9), 2000, 500, seed=3)]
    scatter = np.std([s.chsh for s in scores])
    assert scatter == pytest.approx(np.mean([s.chsh_error for s in scores]), rel=0.1)
    assert scores[0].winning_probability_error == scores[0].chsh_error / 8


def test_missing_settings_leave_no_score_but_a_note():
    """A pair that never came up has no correlator, S is missing with a note, and nothing divides by zero."""
    counts = [0] * 32
    counts[cell_index(1, 0, 0, 0, 0)] = 5
    s = score(Tally(tuple(counts)))
    assert s.correlators == (1.0, None, None, None) and s.correlator_errors[1] is None
    assert s.chsh is None and s.winning_probability is None and "(0, 1)" in s.note
    empty = score(Tally.empty())
    assert empty.p_value is None and empty.p_value_note and empty.chsh is None


def test_document_is_json_and_keeps_the_figures():
    """The document of a score survives JSON and repeats its figures."""
    for tally in (tally_of(DELFT_2015), Tally.empty()):
        s = score(tally)
        document = json.loads(json.dumps(s.document(), allow_nan=False))
        assert document["chsh"] == s.chsh and document["wins"] == s.wins
        assert document["decisive"]["limit"] == 0.5 and len(document["correlators"]) == 4


def test_overwhelming_evidence_is_not_zero():
    """Ten million good rounds give a p-value too small for a float: it is positive and the logarithm tells its size."""
    s = score(expected_tally(Rig(), 1e7))
    assert s.p_value > 0.0 and s.log10_p_value < -100_000


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_decisive_cells_bound_every_local_strategy(convention):
    """A strategy with the favourable outcome has an unfavourable one somewhere; J = (S - 2)/4 for strategies with
    d, e."""
    for d in (0, 1):
        first, *others = decisive_cells(convention, d)
        assert convention.wins(*first) and not any(convention.wins(*cell) for cell in others)
        for s in range(STRATEGIES):
            hits = [outcomes(s, x, y) == (a, b) for x, y, a, b in (first, *others)]
            assert hits[0] <= sum(hits[1:])
            value = hits[0] - sum(hits[1:])
            assert value == pytest.approx((LocalRig.always(s, convention=convention).chsh - 2) / 4)


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_decisive_rounds_tell_a_weak_photonic_rig_from_local(convention):
    """With pairs in one round of a hundred, the decisive rounds are convincing where the wins say nothing,
    under each convention."""
    rig = optimal_rig(0.85, pair_probability=0.01, convention=convention)
    tally = expected_tally(rig, 1e7)
    s = score(tally, convention, no_click=rig.no_click)
    assert s.decisive.forms == 1
    assert s.p_value > 0.01 and s.ch_p_value < 1e-9 and s.decisive.memory_p_value < 1e-6
    assert s.chsh == pytest.approx(2 + 4 * s.decisive.value, abs=1e-5)
    untold = count_decisive(tally, convention, Settings())
    assert untold.forms == 2 and untold.p_value == pytest.approx(2 * s.ch_p_value, rel=1e-9)


def test_decisive_count_does_not_apply_when_empty_rounds_lose():
    """No-click values under which empty rounds lose at three pairs leave no decisive count, and the note says so."""
    s = score(tally_of(DELFT_2015), no_click=(0, 1))
    assert s.ch_p_value is None and "does not apply" in s.decisive.note
    assert s.p_value is not None


def test_known_unequal_settings_change_the_limits():
    """Known settings (0.4, 0.3, 0.2, 0.1): b = 0.9; favourable limit p00/(p00 + p11) = 0.8;
    a local rig at these limits is not significant."""
    settings = Settings(distribution=(0.4, 0.3, 0.2, 0.1))
    rig = LocalRig.always(losing_at(Convention())[3], settings=settings)
    s = score(expected_tally(rig, 1e6), settings=settings)
    assert s.local_win_limit == pytest.approx(0.9) and s.decisive.limit == pytest.approx(0.8)
    assert s.wins == 900_000 and s.p_value > 0.4 and s.p_value_note is None
    assert s.chsh == 2.0


def test_hidden_bias_fools_a_count_that_ignores_it_and_not_one_that_declares_it():
    """A local rig that loses where settings are rarest wins b of the rounds: not significant once the bias is
    declared."""
    tau = 0.02
    rig = LocalRig.always(losing_at(Convention())[3], setting_bias=(tau, tau))
    tally = expected_tally(rig, 1e4)
    told = score(tally, settings=Settings(bias=tau))
    assert told.local_win_limit == pytest.approx(0.75 + tau - tau**2, abs=1e-12)
    assert told.wins / told.test_rounds == pytest.approx(told.local_win_limit, abs=1e-4)
    assert told.p_value > 0.4
    assert score(expected_tally(rig, 1e6)).p_value_note is not None
    assert math.isclose(told.chsh, 2.0, abs_tol=1e-12)
