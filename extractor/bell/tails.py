"""Tails of the binomial distribution as logarithms, so that a tiny chance never becomes the number 0.

Everything is a natural logarithm unless the name says log10. Where an approximation is used, it errs upward: a tail
is never reported smaller than it is, beyond the last digits of the arithmetic.
"""

from __future__ import annotations

import math

from scipy import special

SMALLEST = 2.2250738585072014e-308      # smallest normal float64; stands for anything smaller
_DIRECT = 1e-280                        # above this the tail itself is a safe float


def log_at_least(count: int, trials: int, chance: float) -> float:
    """ln P[Bin(trials, chance) >= count], count any whole number, trials >= 0, 0 < chance < 1;
    -inf if count > trials."""
    if count <= 0:
        return 0.0
    if count > trials:
        return -math.inf
    # The incomplete beta function is scipy.stats.binom.sf(count - 1, ...) to the last bit, without its overhead.
    tail = float(special.betainc(count, trials - count + 1, chance))
    if tail > _DIRECT:
        return min(0.0, math.log(tail))
    return min(0.0, _log_far_tail(count, trials, chance))


def log_at_most(count: int, trials: int, chance: float) -> float:
    """ln P[Bin(trials, chance) <= count]: the upper tail with successes and failures exchanged."""
    return log_at_least(trials - count, trials, 1.0 - chance)


def _log_far_tail(count: int, trials: int, chance: float) -> float:
    """Upper bound on the tail far above the mean: the first term times a geometric series.

    First term by Stirling's formula with the bounds e^(1/(12n+1)) < n! / (sqrt(2 pi n) (n/e)^n) < e^(1/12n)
    (Robbins 1955);
    its exponent -n D(count/n || chance) in the form of deviations from the mean, because the textbook form with three
    log-factorials loses all digits at n = 1e10. The ratio of successive terms falls, so 1/(1 - first ratio) bounds
    the rest.
    """
    if count == trials:
        return trials * math.log(chance)
    rest = trials - count
    hits, misses = trials * chance, trials * (1.0 - chance)
    deviation = count - hits
    exponent = -hits * _excess(deviation / hits) - misses * _excess(-deviation / misses)
    first = exponent + 0.5 * math.log(trials / (2.0 * math.pi * count) / rest)
    first += 1.0 / (12.0 * trials) - 1.0 / (12.0 * count + 1.0) - 1.0 / (12.0 * rest + 1.0)
    ratio = rest * chance / ((count + 1.0) * (1.0 - chance))
    return first - math.log1p(-ratio)


def _excess(e: float) -> float:
    """(1 + e) ln(1 + e) - e for e > -1, accurate near 0 (series e^2/2 - e^3/6 + e^4/12 - ...)."""
    if abs(e) > 1e-2:
        return (1.0 + e) * math.log1p(e) - e
    total, power = 0.0, e * e
    for k in range(2, 12):
        total += power / (k * (k - 1))
        power *= -e
    return total


def log_martingale(favourable: int, unfavourable: int, limit: float) -> float:
    """ln of a p-value that holds however the boxes time their decisive rounds (0 at most).

    Each decisive round is favourable with chance <= limit given the past. For every u > limit the product of
    (u/limit) per favourable and ((1-u)/(1-limit)) per unfavourable round cannot grow on average, so neither can its
    average over u uniform on [limit, 1]; the inverse of a non-negative quantity of mean <= 1 is a p-value (Ville 1939).
    """
    f, g = favourable, unfavourable
    weight = float(special.betainc(g + 1, f + 1, 1.0 - limit))      # share of the Beta(f+1, g+1) above the limit
    if weight <= 0.0:
        return 0.0
    log_mean = special.betaln(f + 1, g + 1) + math.log(weight) - math.log1p(-limit)
    log_mean -= f * math.log(limit) + g * math.log1p(-limit)
    return min(0.0, -float(log_mean))


def as_p_value(log: float) -> float:
    """The p-value of a natural logarithm, in (0, 1]; what underflows is reported as the smallest normal number."""
    return min(1.0, max(SMALLEST, math.exp(log))) if log > -700.0 else SMALLEST


def as_log10(log: float) -> float:
    """The same in decimal digits, for values too small for a float."""
    return log / math.log(10.0)


def log_normal_at_least(z: float) -> float:
    """ln P[standard normal >= z]."""
    return float(special.log_ndtr(-z))


def log_chi_square_at_least(value: float, degrees: int) -> float:
    """ln P[chi-square with `degrees` degrees of freedom >= value]; 0 without a degree of freedom."""
    if degrees < 1:
        return 0.0
    tail = float(special.chdtrc(degrees, value))
    if tail > _DIRECT:
        return min(0.0, math.log(tail))
    # Chernoff: P <= exp(-(v - k)/2 + (k/2) ln(v/k)) for v > k
    return -(value - degrees) / 2.0 + degrees / 2.0 * math.log(value / degrees)
