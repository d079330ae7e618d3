"""Published counts give the published figures, and their traps are not stepped into."""

import math

import pytest

from extractor.bell.allowed import local_win_limit
from extractor.bell.diagnostics import diagnose
from extractor.bell.score import score
from extractor.bell.tails import log_at_least, log_martingale
from extractor.model import Settings
from tests.published.counts import DELFT_2015, MUNICH_150, NIST_2015, VIENNA_2015, tally_of

DETECTION_IS_0 = (1, 1)     # no_click values: + is our 0


def test_delft_score():
    """Hensen et al., Nature 526, 682 (2015): 245 rounds, S = 2.42 +- 0.20; 196 wins and the correlators follow from
    the counts."""
    s = score(tally_of(DELFT_2015))
    assert (s.test_rounds, s.wins, s.losses, s.settings_counts) == (245, 196, 49, (53, 79, 62, 51))
    assert s.chsh == pytest.approx(2.4225, abs=1e-6)
    assert s.chsh_error == pytest.approx(0.204, abs=5e-4)
    assert s.correlators == pytest.approx((0.7358, 0.5949, 0.4839, -0.6078), abs=5e-5)
    assert s.winning_probability == pytest.approx(0.5 + 2.4225 / 8)


def test_delft_p_value():
    """Hensen et al. 2015 print p = 0.039; the binomial tails for bias 0 and 1.08e-5 (bias from memory) are 0.03908
    and 0.0391."""
    assert score(tally_of(DELFT_2015)).p_value == pytest.approx(0.03908, abs=5e-6)
    biased = Settings(bias=1.08e-5)
    assert local_win_limit(biased) == pytest.approx(0.75 + 1.08e-5 - 1.08e-5**2, abs=1e-15)
    assert score(tally_of(DELFT_2015), settings=biased).p_value == pytest.approx(0.0391, abs=5e-5)
    loose = 0.75 + 3 * (1.08e-5 + 1.08e-5**2)           # the paper's looser form, from memory
    assert math.exp(log_at_least(196, 245, loose)) == pytest.approx(0.0392, abs=5e-5)


def test_delft_second_run():
    """Hensen et al., Sci. Rep. 6, 30289 (2016), from memory: 300 rounds, p = 0.061; 237 wins fit that (the number
    of wins is inferred)."""
    assert math.exp(log_at_least(237, 300, 0.75)) == pytest.approx(0.061, abs=5e-4)


def test_munich_score():
    """150 events with atoms, public re-analysis (companion of arXiv:2209.00702): S = 2.609, 124 wins;
    p evaluated from the counts."""
    s = score(tally_of(MUNICH_150))
    assert (s.test_rounds, s.wins) == (150, 124)
    assert s.chsh == pytest.approx(2.609047, abs=1e-6)
    assert s.chsh_error == pytest.approx(0.248, abs=5e-4)
    assert s.p_value == pytest.approx(0.01632, abs=5e-6)


def test_vienna_score():
    """Giustina et al., PRL 115, 250401 (2015): 3 502 784 150 rounds, J = 7.27e-6; S from the same counts,
    evaluated here."""
    s = score(tally_of(VIENNA_2015), no_click=DETECTION_IS_0)
    assert (s.test_rounds, s.wins) == (3502784150, 2627096168)
    assert s.decisive.value == pytest.approx(7.27e-6, abs=5e-9)
    assert s.decisive.value == pytest.approx(7.26814e-6, abs=5e-12)
    assert s.chsh - 2 == pytest.approx(2.8120e-5, abs=5e-9)
    assert s.chsh_error == pytest.approx(3.28e-6, abs=5e-9)


def test_vienna_wins_have_no_power_but_decisive_rounds_do():
    """Counting wins of mostly empty rounds gives 0.377, the CH-conditioned count (Bierhorst, J. Phys. A 48,
    195302 (2015)) 5.2e-34."""
    assert math.exp(log_at_least(2627096168, 3502784150, 0.75)) == pytest.approx(0.377, abs=5e-4)
    d = score(tally_of(VIENNA_2015), no_click=DETECTION_IS_0).decisive
    assert (d.favourable, d.unfavourable, d.limit, d.forms) == (141439, 135075, 0.5, 1)
    assert math.exp(log_at_least(141439, 141439 + 135075, 0.5)) == pytest.approx(5.2e-34, rel=0.01)
    assert log_martingale(141439, 135075, 0.5) / math.log(10) < -29


def test_vienna_settings_contradict_exact_uniformity_and_a_declared_bias_covers_them():
    """Setting pairs (1,2), (2,1) came up 7 standard deviations off a quarter: no p-value at bias 0;
    bias 2.4e-4 (from memory) is covered."""
    s = score(tally_of(VIENNA_2015), no_click=DETECTION_IS_0)
    assert s.p_value is None and s.ch_p_value is None and "(1, 0)" in s.p_value_note
    biased = score(tally_of(VIENNA_2015), settings=Settings(bias=2.4e-4), no_click=DETECTION_IS_0)
    assert biased.p_value_note is None
    assert biased.p_value == pytest.approx(1.0)
    assert 5.2e-34 < biased.ch_p_value < 1e-30 and biased.ch_p_value < biased.decisive.memory_p_value < 1e-26


def test_nist_score():
    """Shalm et al., PRL 115, 250402 (2015), aggregated counts: J = 1.207e-5, S - 2 about 9.2e-5 (public
    re-analysis, evaluated here)."""
    s = score(tally_of(NIST_2015), no_click=DETECTION_IS_0)
    assert s.test_rounds == 173149423
    assert s.settings_counts == (43910205, 43309801, 43368944, 42560473)
    assert s.decisive.value == pytest.approx(1.20712e-5, abs=5e-11)
    assert s.chsh == pytest.approx(2.000092459, abs=5e-10)
    assert s.chsh_error == pytest.approx(1.57e-5, abs=5e-8)


def test_nist_raw_wins_are_worthless_and_are_not_used():
    """Unequal settings make raw wins 0.7542 of the rounds though (S - 2)/8 is 1.2e-5: no p-value,
    a note and a flag instead."""
    s = score(tally_of(NIST_2015), no_click=DETECTION_IS_0)
    assert s.wins == 130589817
    assert s.wins / s.test_rounds == pytest.approx(0.7542, abs=5e-5)
    assert s.winning_probability == pytest.approx(0.5 + s.chsh / 8, abs=1e-12)
    assert s.winning_probability - 0.75 < 2e-5
    assert s.p_value is None and s.log10_p_value is None
    assert "24.58" in s.p_value_note and "bias of at least" in s.p_value_note
    assert {d.name for d in diagnose(tally_of(NIST_2015)) if d.flag} == {"settings-frequencies"}


def test_nist_decisive_rounds():
    """6378 against 5770 gives 1.8e-8; against 5749 (the paper's 12 127 decisive rounds, from memory) 5.9e-9,
    as printed there."""
    d = score(tally_of(NIST_2015), no_click=DETECTION_IS_0).decisive
    assert (d.favourable, d.unfavourable) == (6378, 5770)
    assert math.exp(log_at_least(6378, 6378 + 5770, 0.5)) == pytest.approx(1.8e-8, rel=0.02)
    assert math.exp(log_at_least(6378, 6378 + 5749, 0.5)) == pytest.approx(5.9e-9, rel=0.01)


def test_nist_with_the_settings_that_came_up():
    """Taken at the frequencies that came up, the limit of the decisive count is 0.5078, not 1/2,
    and its p-value rises to about 1e-4."""
    totals = score(tally_of(NIST_2015)).settings_counts
    n = sum(totals)
    first = [k / n for k in totals[:3]]
    known = Settings(distribution=(*first, 1 - math.fsum(first)))
    s = score(tally_of(NIST_2015), settings=known, no_click=DETECTION_IS_0)
    assert s.decisive.limit == pytest.approx(43910205 / (43910205 + 42560473))
    assert 1e-5 < s.ch_p_value < 1e-3
    assert s.p_value > 0.1
