"""Entropy of Alice's outcome in one round, given the winning probability. One-sided: Bob's outcome is not credited.

All functions take and return `Decimal` and must run inside `numerics.exactly()`. w is the winning
probability for uniform settings, S = 8 w - 4; below the local bound 3/4 every entropy is 0, above the Tsirelson bound
(2 + sqrt 2)/4 the value at the Tsirelson bound is used.
"""

from __future__ import annotations

from decimal import Decimal

from extractor.entropy.numerics import LN2, LOCAL_SCORE, ONE, TWO, ZERO, log2, power


def _overlap_squared(w: Decimal) -> Decimal:
    """v = S^2/4 - 1 = (4w - 3)(4w - 1), clipped to [0, 1]: the squared correlation with which Bob can predict X."""
    if w <= LOCAL_SCORE:
        return ZERO
    return min((4 * w - 3) * (4 * w - 1), ONE)


def _predictability(w: Decimal) -> Decimal:
    """q(S) = 1/2 + 1/2 sqrt(S^2/4 - 1) of MATH section 1, in [1/2, 1]."""
    return (ONE + _overlap_squared(w).sqrt()) / 2


def binary_entropy(q: Decimal) -> Decimal:
    """h(q) in bits, 0 <= q <= 1."""
    return -sum((p * log2(p) for p in (q, ONE - q) if p > 0), ZERO)


def von_neumann(w: Decimal) -> Decimal:
    """H(A|E) >= 1 - h(q). Acin et al., PRL 98, 230501 (2007); Pironio et al., New J. Phys. 11, 045021 (2009)."""
    return ONE - binary_entropy(_predictability(w))


def von_neumann_slope(w: Decimal) -> Decimal:
    """Derivative of `von_neumann` for w strictly between the local and the Tsirelson bound, bits per unit of w."""
    v = _overlap_squared(w)
    q = _predictability(w)
    return log2(q / (ONE - q)) * 4 * (2 * w - 1) / v.sqrt()


def min_entropy(w: Decimal) -> Decimal:
    """H_min(A|E) >= 1 - log2(1 + sqrt(2 - S^2/4)). Pironio et al., Nature 464, 1021 (2010)."""
    return ONE - log2(ONE + (ONE - _overlap_squared(w)).sqrt())


def renyi_power(w: Decimal, order: Decimal) -> Decimal:
    """Q(w) = 2^-((order-1) H), H the sandwiched "down-arrow" Rényi entropy bound 1 - h_{1/order}(q); order > 1.

    Closed form: 2^-(order-1) (q^(1/order) + (1-q)^(1/order))^order. Hahn, Philip, Tan, Brown 2025 (arXiv:2507.07365);
    derivation through Jordan's lemma and the Rényi uncertainty relation (Tomamichel, Berta, Hayashi 2014).

    Q is 1 up to w = 3/4, decreases from there, and is CONCAVE in w, on which `bound` rests. Proof. Write beta = 1/order
    in (0, 1), p = 1 + c, r = 1 - c with c = 2q - 1 = sqrt(v), and N(c) = (p^beta + r^beta)^(1/beta), so Q = N/2^order.
    (1) N is concave in v: this asks -N'(c)/c to increase, that is -N''(c) >= -N'(c)/c. For this norm
    -N'' = 4(1-beta) G^(order-2) (pr)^(beta-2) and -N' = G^(order-1) (r^(beta-1) - p^(beta-1)) with G = p^beta + r^beta.
    Put c = tanh s, so p = e^s/cosh s, r = e^-s/cosh s, pr = 1/cosh^2 s; the claim becomes
    (1-beta) sinh s cosh^2 s >= sinh((1-beta)s) cosh(beta s), which holds because sinh(k s) <= k sinh s for k in [0, 1]
    (sinh is convex on s >= 0 and 0 at 0) and cosh(beta s) <= cosh s <= cosh^2 s.
    (2) N decreases in v, and v = S^2/4 - 1 is convex in S, hence in w; a decreasing concave function of a convex one is concave.
    (3) At w = 3/4 the slope jumps from 0 to a negative value, which keeps concavity across the local bound.
    """
    q = _predictability(w)
    total = power(q, 1 / order) + power(ONE - q, 1 / order)
    return (order * total.ln() - (order - 1) * LN2).exp()


def renyi_power_slope(w: Decimal, order: Decimal) -> Decimal:
    """dQ/dw for w strictly between the local and the Tsirelson bound; negative."""
    c = _overlap_squared(w).sqrt()
    q, beta = (ONE + c) / 2, 1 / order
    p_power, r_power = power(q, beta), power(ONE - q, beta)
    total = p_power + r_power
    by_c = ((order - 1) * (total / 2).ln()).exp() * (p_power / q - r_power / (ONE - q)) / 2
    return by_c * 8 * (2 * w - 1) / c


def renyi_entropy(w: Decimal, order: Decimal) -> Decimal:
    """H >= 1 - h_{1/order}(q) in bits: the down-arrow Rényi entropy belonging to `renyi_power`."""
    return -log2(renyi_power(w, order)) / (order - 1)


def renyi_entropy_up(w: Decimal, order: Decimal) -> Decimal:
    """H >= 1 - h_beta(q), beta = order/(2 order - 1): the "up-arrow" form; min-entropy as order grows. Not used by a method."""
    beta = order / (2 * order - 1)
    q = _predictability(w)
    return ONE - log2(power(q, beta) + power(ONE - q, beta)) / (ONE - beta)
