"""Is a win/lose score table valid? An upper bound on its weighted sum over every quantum strategy.

Short and audited: this bound is what keeps a certified number from being too large. MATH: with
F = 2^((order-1) credit), a table is valid when Sum_z p(z) Sum_c F(c, z) R(c|z) <= 1 for every strategy. What stands above 1 is
taken off the credit of every round (`slack_bits`), so a table that is slightly off costs rate, never soundness.
"""

from __future__ import annotations

from decimal import Decimal

from extractor.errors import InputError
from extractor.entropy.numerics import GUARD, LOCAL_SCORE, ONE, TSIRELSON_SCORE, ZERO, exp2, log2, number
from extractor.entropy.single_round import renyi_power, renyi_power_slope
from extractor.model import SETTING_PAIRS, Convention, ScoreTable, Settings


def allowed_distributions(settings: Settings) -> list[tuple[Decimal, ...]]:
    """`Settings.allowed` as decimals. Raises InputError if the bias is too large."""
    return [tuple(Decimal(q.numerator) / Decimal(q.denominator) for q in point) for point in settings.allowed()]


def win_lose_factors(table: ScoreTable, convention: Convention) -> tuple[list[Decimal], Decimal, Decimal]:
    """(F_won per setting pair, F_lost, F_generation). Raises InputError unless the table has exactly that form."""
    won, lost = [], set()
    for x, y in SETTING_PAIRS:
        credits: dict[bool, set[float]] = {True: set(), False: set()}
        for a, b in SETTING_PAIRS:
            credits[convention.wins(x, y, a, b)].add(table.test[8 * x + 4 * y + 2 * a + b])
        if len(credits[True]) != 1 or len(credits[False]) != 1:
            raise InputError("factor-closed takes one credit per won and one per lost outcome of a setting pair under the "
                             "declared convention", code="not-win-lose", field="/table/test")
        won.append(credits[True].pop())
        lost |= credits[False]
    if len(lost) != 1 or len(set(table.generation)) != 1:
        raise InputError("factor-closed takes one credit for all lost rounds and one for all generation rounds",
                         code="not-win-lose", field="/table")
    lost_credit = lost.pop()
    if min(won) < lost_credit:
        raise InputError("a won round may not be credited less than a lost one", code="not-win-lose", field="/table/test")
    scale = number(table.order) - 1
    return ([exp2(scale * number(c)) for c in won], exp2(scale * number(lost_credit)),
            exp2(scale * number(table.generation[0])))


def weighted_sum_bound(table: ScoreTable, settings: Settings, convention: Convention) -> Decimal:
    """Upper bound on Sum p F R over all quantum strategies and all allowed settings distributions.

    For any strategy let w_xy = P(won | x, y), w their plain mean over the four pairs, and r_won, r_lost the Rényi powers summed
    over won and lost outcomes. Then (a) r_won(xy) <= w_xy, since R(rho|sigma) <= Tr rho for rho <= sigma and order <= 2;
    (b) r_won(xy) + r_lost(xy) <= Q(w) for every pair, since R is superadditive and Alice's outcome alone obeys Q(w)
    (`single_round.renyi_power`), also in generation rounds. With p the true test distribution and k_xy = p(xy)(F_won(xy) - F_lost) >= 0,

        sum <= [(1-g) F_gen + g F_lost] Q(w) + g Sum_xy k_xy w_xy,     Sum_xy k_xy w_xy <= K - 4 min(k) (1 - w),  K = Sum k,

    because each w_xy <= 1. The right side is concave in w (proof in `renyi_power`). It increases up to w = 3/4, where Q = 1;
    beyond, it lies below its tangent at any point: evaluating value and slope near the maximum gives
    value + |slope| (w_T - 3/4), whatever the point. Linear in p, so the extreme points of the allowed p suffice.
    """
    order, gamma = number(table.order), number(settings.test_probability)
    won, lost, generation = win_lose_factors(table, convention)
    weight = (ONE - gamma) * generation + gamma * lost
    worst = ZERO
    for p in allowed_distributions(settings):
        k = [p_xy * (f - lost) for p_xy, f in zip(p, won)]
        constant, slope = gamma * (sum(k) - 4 * min(k)), gamma * 4 * min(k)
        worst = max(worst, _concave_maximum(weight, constant, slope, order))
    return worst * (ONE + Decimal("1e-50"))


def _concave_maximum(weight: Decimal, constant: Decimal, slope: Decimal, order: Decimal) -> Decimal:
    """Upper bound on weight Q(w) + constant + slope w over the quantum range of w; all arguments >= 0."""
    left, right = LOCAL_SCORE, TSIRELSON_SCORE
    for _ in range(110):                    # bisection on the slope, to about 1e-34 in w
        middle = (left + right) / 2
        if weight * renyi_power_slope(middle, order) + slope > 0:
            left = middle
        else:
            right = middle
    point = (left + right) / 2
    value = weight * renyi_power(point, order) + constant + slope * point
    tilt = abs(weight * renyi_power_slope(point, order) + slope)
    at_local = weight + constant + slope * LOCAL_SCORE
    if point - LOCAL_SCORE < Decimal("1e-30"):   # decreasing from the local bound on: Q <= 1 covers the rest of the bracket
        return at_local + slope * Decimal("1e-29")
    return max(at_local, value + tilt * (TSIRELSON_SCORE - LOCAL_SCORE))


def slack_bits(table: ScoreTable, bound: Decimal) -> Decimal:
    """Bits per round to take off so that the table becomes valid: log2(bound)/(order - 1), at least 0, rounded up."""
    return max(ZERO, log2(bound) / (number(table.order) - 1) + GUARD * Decimal("1e-9"))
