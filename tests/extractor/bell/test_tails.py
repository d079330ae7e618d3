"""Binomial tails against exact sums, and far out where they underflow."""

import math
from fractions import Fraction

import pytest

from extractor.bell import tails


def exact_log_tail(count: int, trials: int, chance: Fraction) -> float:
    """ln P[Bin >= count] by an exact sum of fractions."""
    total = sum(math.comb(trials, k) * chance**k * (1 - chance)**(trials - k) for k in range(count, trials + 1))
    return math.log(total.numerator) - math.log(total.denominator)


@pytest.mark.parametrize("count, trials", [(0, 5), (1, 5), (5, 5), (4, 7), (196, 245), (150, 245), (245, 245),
                                           (260, 300)])
@pytest.mark.parametrize("chance", [Fraction(3, 4), Fraction(1, 2), Fraction(1, 100)])
def test_upper_tail_is_exact(count, trials, chance):
    """The upper tail equals the exact sum of fractions; where it underflows a float it is at most 1 per cent too
    large, never too small."""
    exact = exact_log_tail(count, trials, chance)
    found = tails.log_at_least(count, trials, float(chance))
    if exact > -640:
        assert found == pytest.approx(exact, rel=1e-9, abs=1e-12)
    else:
        assert exact - 1e-9 * abs(exact) <= found <= exact + 0.01


@pytest.mark.parametrize("count, trials", [(220, 250), (249, 250), (390, 400), (400, 400)])
def test_far_tail_is_an_upper_bound_and_close(count, trials):
    """The far-tail formula is never below the exact value and exceeds it by 1 per cent at most."""
    exact = exact_log_tail(count, trials, Fraction(1, 2))
    assert exact - 1e-9 * abs(exact) <= tails._log_far_tail(count, trials, 0.5) <= exact + 0.01


@pytest.mark.parametrize("trials", [10**6, 10**10, 2**50])
def test_far_tail_joins_the_direct_one(trials):
    """Where both work, 30 standard deviations out, the two ways agree to 0.2 per cent at any number of rounds."""
    count = int(0.75 * trials + 30 * math.sqrt(trials * 3 / 16))
    direct, far = tails.log_at_least(count, trials, 0.75), tails._log_far_tail(count, trials, 0.75)
    assert direct < far < direct + 2e-3


def test_lower_tail_complements_the_upper():
    """P[<= k] + P[>= k + 1] = 1."""
    for k in range(12):
        below, above = tails.log_at_most(k, 12, 0.3), tails.log_at_least(k + 1, 12, 0.3)
        assert math.exp(below) + math.exp(above) == pytest.approx(1.0)


def test_a_p_value_is_never_zero():
    """However strong the evidence, the p-value is positive and its decimal logarithm keeps the size."""
    log = tails.log_at_least(10**9, 10**9, 0.75)
    assert tails.as_p_value(log) == tails.SMALLEST > 0.0
    assert tails.as_log10(log) == pytest.approx(10**9 * math.log10(0.75))
    assert tails.as_p_value(0.0) == 1.0
    assert tails.log_at_least(6, 5, 0.5) == -math.inf


def test_martingale_p_value_against_direct_integration():
    """The mixture over the alternatives equals a numerical average of the products."""
    f, g, limit = 40, 20, 0.5
    steps = 20000
    grid = [limit + (1 - limit) * (i + 0.5) / steps for i in range(steps)]
    mean = sum((u / limit)**f * ((1 - u) / (1 - limit))**g for u in grid) / steps
    assert tails.log_martingale(f, g, limit) == pytest.approx(-math.log(mean), rel=1e-6)


def test_martingale_p_value_is_a_p_value_under_the_null():
    """Summed over all outcomes at the limit, its inverse has mean at most 1."""
    n, limit, mean = 30, 0.6, 0.0
    for f in range(n + 1):
        log = tails.log_martingale(f, n - f, limit)
        if log < 0.0:           # a value capped at 1 says nothing
            mean += math.comb(n, f) * limit**f * (1 - limit)**(n - f) * math.exp(-log)
    assert 0.1 < mean <= 1.0


def test_chi_square_far_out_is_finite():
    """A hopeless misfit has a finite logarithm, not minus infinity."""
    assert -1e7 < tails.log_chi_square_at_least(1e6, 3) < -4e5
    assert tails.log_chi_square_at_least(5.0, 0) == 0.0
