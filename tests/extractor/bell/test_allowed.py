"""What a declared settings distribution and bias allow."""

import math

import numpy as np
import pytest

from extractor.bell.allowed import (
    allowed_distributions, bias_that_covers, check_settings, favourable_limit, local_win_limit,
)
from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, Settings

SKEW = Settings(distribution=(0.4, 0.3, 0.2, 0.1), bias=0.02)


def test_without_bias_only_the_declared_distribution_is_allowed():
    """Bias 0 leaves one distribution and b = 1 - its smallest probability."""
    settings = Settings(distribution=(0.4, 0.3, 0.2, 0.1))
    assert allowed_distributions(settings) == ((0.4, 0.3, 0.2, 0.1),)
    assert local_win_limit(settings) == pytest.approx(0.9)


@pytest.mark.parametrize("tau", [0.0, 1.08e-5, 0.01, 0.2])
def test_uniform_settings_with_bias(tau):
    """Uniform settings with bias tau per bit: b = 3/4 + tau - tau^2."""
    assert local_win_limit(Settings(bias=tau)) == pytest.approx(0.75 + tau - tau * tau, abs=1e-15)


def test_extreme_points_are_distributions_within_the_bias():
    """Each is a distribution in which the bits, in one of the two orders, are off by exactly the bias at most."""
    base = np.array(SKEW.distribution).reshape(2, 2)
    points = allowed_distributions(SKEW)
    assert len(points) >= 12
    for point in points:
        p = np.array(point).reshape(2, 2)
        assert p.sum() == pytest.approx(1.0) and p.min() > 0

        def within(q, r):
            first = abs(q.sum(axis=1) - r.sum(axis=1)).max()
            later = abs(q / q.sum(axis=1, keepdims=True) - r / r.sum(axis=1, keepdims=True)).max()
            return max(first, later) <= SKEW.bias + 1e-12

        assert within(p, base) or within(p.T, base.T)


def test_random_distributions_within_the_bias_stay_below_the_limits():
    """Random choices of the conditional chances never exceed what the extreme points give."""
    random, base = np.random.default_rng(5), np.array(SKEW.distribution).reshape(2, 2)
    for turned in (False, True):
        table = base.T if turned else base
        for _ in range(200):
            first = table[0].sum() + random.uniform(-1, 1) * SKEW.bias
            later = table[:, 0] / table.sum(axis=1) + random.uniform(-1, 1, 2) * SKEW.bias
            p = np.array([first, 1 - first])[:, None] * np.stack([later, 1 - later], axis=1)
            p = (p.T if turned else p).ravel()
            assert 1 - p.min() <= local_win_limit(SKEW) + 1e-12
            for i, pair in enumerate(SETTING_PAIRS):
                assert p[i] / (p[i] + np.delete(p, i).min()) <= favourable_limit(SKEW, pair) + 1e-12


def test_a_bias_that_stops_a_setting_is_refused():
    """If a setting bit need not vary any more, no limit below 1 exists: an error naming the field."""
    with pytest.raises(InputError) as caught:
        local_win_limit(Settings(distribution=(0.8, 0.05, 0.1, 0.05), bias=0.2))
    assert caught.value.code == "bias-too-large" and caught.value.field == "/settings/bias"


def test_settings_of_an_honest_source_do_not_contradict():
    """Counts drawn from the declared distribution pass in all of 300 runs."""
    random = np.random.default_rng(8)
    settings = Settings(distribution=(0.4, 0.3, 0.2, 0.1))
    for counts in random.multinomial(10**6, settings.distribution, size=300):
        assert not check_settings(tuple(int(c) for c in counts), settings).contradicts


def test_settings_of_a_biased_source_contradict_until_the_bias_is_declared():
    """A bias of 0.01 in x is found in 100 000 rounds, and the bias said to cover it does."""
    counts = (25500, 25500, 24500, 24500)
    check = check_settings(counts, Settings())
    assert check.contradicts and check.what == "x = 0" and check.observed == 0.51
    cover = bias_that_covers(counts, Settings())
    assert 0.001 < cover < 0.01
    assert not check_settings(counts, Settings(bias=cover)).contradicts
    assert check_settings(counts, Settings(bias=cover - 1e-5)).contradicts


def test_no_bias_covers_settings_that_never_came_up():
    """A missing pair in many rounds cannot be explained by any bias; then none is suggested."""
    assert bias_that_covers((10**6, 0, 0, 10**6), Settings()) is None


def test_no_rounds_contradict_nothing():
    """Without test rounds nothing can be odd."""
    assert check_settings((0, 0, 0, 0), Settings()).log_chance == 0.0
    assert math.isfinite(check_settings((1, 0, 0, 0), Settings()).log_chance)
