"""The published entropy accumulation bounds in their CHSH form, one function each.

Both bound the smooth min-entropy of all outcomes given that an event fixed before the data occurred, and both return bits
that the leftover hash lemma (`lengths`) then turns into a length. Their statements were checked against the papers'
published figures (tests/published/test_accumulation.py), not against a copy of the theorem text; a certificate says so.

w_t ("tangent") is the winning probability at which the tangent of g(w) = 1 - h(1/2 + 1/2 sqrt(16 w (w-1) + 3)) is taken;
any choice is sound because g is convex. Test settings must be uniform.
"""

from __future__ import annotations

from decimal import Decimal

from extractor.entropy.numerics import LN2, ONE, TSIRELSON_SCORE, TWO, exp2, log2
from extractor.entropy.single_round import von_neumann, von_neumann_slope

OUTCOMES_2018 = 6    # Alice's two outcomes times Bob's three (Bob idle outside tests), as in the 2018 paper: log2 13
OUTCOMES_2019 = 4    # both outcomes of every round are kept


def tangent_line(tangent: Decimal) -> tuple[Decimal, Decimal]:
    """(g at w = 0, slope per unit of w) of the tangent at w_t, 3/4 < w_t < Tsirelson."""
    slope = von_neumann_slope(tangent)
    return von_neumann(tangent) - slope * tangent, slope


def eat_2018(rounds: int, wins: int, test_probability: Decimal, tangent: Decimal,
             log2_smoothing: Decimal, log2_acceptance: Decimal) -> tuple[Decimal, Decimal]:
    """First-order term and second-order loss, in bits; their difference bounds H_min^eps_s if at least `wins` tests were won.

    n f - 2 sqrt(n) (log2 13 + slope/gamma) sqrt(1 - 2 log2(eps_s eps_EA)), with either P[accept] <= eps_EA or the bound.
    Dupuis, Fawzi, Renner (arXiv:1607.01796); Arnon-Friedman, Dupuis, Fawzi, Renner, Vidick, Nat. Commun. 9, 459 (2018).
    """
    n = Decimal(rounds)
    at_zero, slope = tangent_line(tangent)
    first = n * at_zero + slope * Decimal(wins) / test_probability
    spread = log2(Decimal(1 + 2 * OUTCOMES_2018)) + slope / test_probability
    return first, TWO * n.sqrt() * spread * (ONE - TWO * (log2_smoothing + log2_acceptance)).sqrt()


def eat_2019(rounds: int, losses: int, test_probability: Decimal, tangent: Decimal, order: Decimal,
             log2_smoothing: Decimal, log2_acceptance: Decimal, outcomes: int = OUTCOMES_2019,
             ) -> tuple[Decimal, Decimal, Decimal, Decimal]:
    """First-order term and the three losses (variance, third order, event), in bits, if at most `losses` tests were lost.

    n f - n (a-1)(ln 2/2) V^2 - n (a-1)^2 K_a - log2(2/(eps_s^2 p^2))/(a-1), 1 < a = order < 2,
    V = sqrt(Var f + 2) + log2(2 d^2 + 1), K_a = 2^((a-1) R) ln^3(2^R + e^2) / (6 (2-a)^3 ln 2), R = 2 log2 d + max f - min f,
    min and Var over the quantum distributions. Dupuis, Fawzi (arXiv:1805.11652), Proposition V.3 and Lemma V.5
    (infrequent sampling): f(no test) = f(won) = g(1), f(lost) = g(1) - slope/gamma with g the tangent.
    """
    n = Decimal(rounds)
    at_zero, slope = tangent_line(tangent)
    drop = slope / test_probability                      # f falls by this much in a lost round
    first = n * (at_zero + slope) - drop * Decimal(losses)
    # A lost test has probability gamma (1 - w) with 1 - w between 1 - w_T and w_T: the largest variance of f over that range.
    low, high = test_probability * (ONE - TSIRELSON_SCORE), test_probability * TSIRELSON_SCORE
    lost = min(max(Decimal("0.5"), low), high)
    variance = drop * drop * lost * (ONE - lost)
    v = (variance + 2).sqrt() + log2(Decimal(2 * outcomes * outcomes + 1))
    reach = 2 * log2(Decimal(outcomes)) + slope * TSIRELSON_SCORE   # max f - min over quantum: g(1) - g(1 - w_T)
    k = exp2((order - 1) * reach) * (exp2(reach) + TWO.exp()).ln() ** 3 / (6 * (TWO - order) ** 3 * LN2)
    return (
        first,
        n * (order - 1) * LN2 / 2 * v * v,
        n * (order - 1) ** 2 * k,
        (ONE - 2 * log2_smoothing - 2 * log2_acceptance) / (order - 1),
    )
