"""Looks for good orders, score tables, tangents and limits, in floating point. Trusted for nothing.

Whatever is found here is evaluated again by `validity`, `accumulation` and `bound` with exact rounding; a poor choice costs bits,
never soundness. Small differences are kept by log1p and expm1, since order - 1 may be 1e-6.
"""

from __future__ import annotations

import math
from collections.abc import Callable

from scipy import optimize

from extractor.entropy.numerics import TSIRELSON_SCORE, exactly, number
from extractor.entropy.single_round import renyi_power
from extractor.model import SETTING_PAIRS, Convention, ScoreTable, Settings

TSIRELSON = float(TSIRELSON_SCORE)
_LOW, _HIGH = 0.75 + 1e-13, TSIRELSON - 1e-13
ORDER_RANGE = (2e-10, 1.0)     # order - 1


def best_in_log(gain: Callable[[float], float], low: float, high: float, points: int = 41) -> float:
    """Argument in [low, high] that makes `gain` largest: a coarse grid in the logarithm, then Brent's method around its best."""
    grid = [low * (high / low) ** (k / (points - 1)) for k in range(points)]
    values = [gain(g) for g in grid]
    best = max(range(points), key=values.__getitem__)
    left, right = grid[max(best - 1, 0)], grid[min(best + 1, points - 1)]
    found = optimize.minimize_scalar(lambda u: -gain(math.exp(u)), bounds=(math.log(left), math.log(right)), method="bounded",
                                     options={"xatol": 1e-7})
    return math.exp(found.x) if -found.fun >= values[best] else grid[best]


def _log_power(w: float, excess: float) -> tuple[float, float]:
    """ln Q(w) and its derivative in w at order 1 + excess; see single_round.renyi_power."""
    c = math.sqrt((4 * w - 3) * (4 * w - 1))
    q, r = (1 + c) / 2, (1 - c) / 2
    shrink = excess / (1 + excess)                                 # 1 - 1/order
    q_tilt, r_tilt = math.expm1(-shrink * math.log(q)), math.expm1(-shrink * math.log(r))
    total = q * q_tilt + r * r_tilt                                # q^beta + r^beta - 1
    log_q = (1 + excess) * math.log1p(total) - excess * math.log(2)
    slope = (q_tilt - r_tilt) / (2 * (1 + total)) * 8 * (2 * w - 1) / c
    return log_q, slope


def worst_score(score: float, gamma: float, excess: float) -> float:
    """w*: the winning probability whose strategy is hardest to tell from a rig at `score` (root of the stationarity condition)."""
    def rise(w: float) -> float:
        log_q, slope = _log_power(w, excess)
        q = math.exp(log_q)
        if q <= w:                     # beyond here even a round that is always won has less than w: no worst strategy lies there
            return -1e300
        return (1 - gamma) * slope + gamma * (score / w + (1 - score) * (slope * q - 1) / (q - w))
    if rise(_LOW) <= 0:
        return 0.75
    if rise(_HIGH) >= 0:
        return _HIGH
    return optimize.brentq(rise, _LOW, _HIGH, xtol=1e-15, rtol=1e-15)


def closed_rate(score: float, gamma: float, excess: float) -> float:
    """Expected credit per round, in bits, of the best win/lose table at order 1 + excess for uniform settings."""
    w = worst_score(score, gamma, excess)
    log_q = _log_power(w, excess)[0] if w > 0.75 else 0.0
    won = math.log1p((w - score) / score)
    lost = math.log1p((score - w + math.expm1(log_q)) / (1 - score)) if score < 1 else 0.0
    return -(gamma * (score * won + (1 - score) * lost) + (1 - gamma) * log_q) / (excess * math.log(2))


def best_closed_order(rounds: int, score: float, gamma: float, soundness: float) -> float:
    """The order that maximises rounds * rate - (a/(a-1)) log2(1/eps)."""
    cost = -math.log2(soundness)
    gain = lambda excess: rounds * closed_rate(score, gamma, excess) - cost / excess   # noqa: E731 (a/(a-1) = 1 + 1/excess)
    return 1 + best_in_log(gain, *ORDER_RANGE)


def closed_table(order: float, score: float, settings: Settings, convention: Convention) -> ScoreTable:
    """Win/lose table F_g = 1/Q(w*), F_w = w0/w*, F_l = (1-w0)/(Q(w*) - w*), the won factor spread so that p(xy)(F_w - F_l) is equal."""
    with exactly():
        a, w0 = number(order), number(score)
        w = number(worst_score(score, settings.test_probability, order - 1))
        q = renyi_power(w, a)
        lost = (1 - w0) / (q - w)
        step = w0 / w - lost
        credit = lambda f: float(f.ln() / (a - 1) / number(2).ln())   # noqa: E731
        total = sum(map(number, settings.distribution))
        won = [credit(lost + step * total / (4 * number(p))) for p in settings.distribution]
        lost_credit, generation = credit(lost), credit(1 / q)
    test = tuple(
        won[2 * x + y] if convention.wins(x, y, a, b) else lost_credit
        for x, y in SETTING_PAIRS for a, b in SETTING_PAIRS)
    return ScoreTable(order, test, (generation,) * 4)


def _entropy_line(tangent: float) -> tuple[float, float]:
    """(value at w = 0, slope) of the tangent of 1 - h at `tangent`; see accumulation.tangent_line."""
    c = math.sqrt((4 * tangent - 3) * (4 * tangent - 1))
    q = (1 + c) / 2
    slope = math.log2(q / (1 - q)) * 4 * (2 * tangent - 1) / c
    return 1 + q * math.log2(q) + (1 - q) * math.log2(1 - q) - slope * tangent, slope


def best_tangent(gain: Callable[[float], float]) -> float:
    """Tangent point in (3/4, Tsirelson) that makes `gain` largest; searched in the logarithm of its distance from 3/4."""
    top = TSIRELSON - 0.75
    return 0.75 + best_in_log(lambda d: gain(0.75 + d), 1e-7, top * (1 - 1e-6))


def best_tangent_2018(rounds: int, score: float, gamma: float, errors: tuple[float, float]) -> float:
    root = math.sqrt(1 - 2 * sum(errors))

    def gain(tangent: float) -> float:
        at_zero, slope = _entropy_line(tangent)
        return rounds * (at_zero + slope * score) - 2 * math.sqrt(rounds) * (math.log2(13) + slope / gamma) * root
    return best_tangent(gain)


def best_order_2019(rounds: int, score: float, gamma: float, errors: tuple[float, float],
                    order: float | None = None) -> tuple[float, float]:
    """(order, tangent) for eat-2019: for each tangent the best order (or the given one), then the best tangent."""
    event = 1 - 2 * sum(errors)

    def value(tangent: float, excess: float) -> float:
        at_zero, slope = _entropy_line(tangent)
        low, high = gamma * (1 - TSIRELSON), gamma * TSIRELSON
        lost = min(max(0.5, low), high)
        v = math.sqrt((slope / gamma) ** 2 * lost * (1 - lost) + 2) + math.log2(33)
        reach = 4 + slope * TSIRELSON
        log_sum = reach * math.log(2) if reach > 500 else math.log(2**reach + math.e**2)
        third = excess * reach
        k = math.inf if third > 900 or excess >= 1 else 2**third * log_sum**3 / (6 * (1 - excess) ** 3 * math.log(2))
        return (rounds * (at_zero + slope * score - excess * math.log(2) / 2 * v * v - excess**2 * k) - event / excess)

    def best_excess(tangent: float) -> float:
        return order - 1 if order else best_in_log(lambda e: value(tangent, e), 1e-9, 0.5, points=25)

    tangent = best_tangent(lambda t: value(t, best_excess(t)))
    return 1 + best_excess(tangent), tangent
