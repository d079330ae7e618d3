"""From entropy to a length: what soundness, the choice of a length and disclosure cost, in bits."""

from __future__ import annotations

from decimal import Decimal

from extractor.entropy.numerics import ONE, exactly, log2, number
from extractor.model import Declaration

DIGEST_BITS = 256


def renyi_hash_cost(soundness: Decimal, order: Decimal) -> Decimal:
    """(a/(a-1)) log2(1/eps): with it, length = credit - cost + 2 is eps-secret whatever the probability of acceptance.

    Dupuis (arXiv:2105.05342): 1/2 ||rho_KE - tau x rho_E||_1 <= 1/2 2^(2/a - 1) 2^(((a-1)/a)(length - H)), a in (1, 2].
    """
    return order / (order - 1) * -log2(soundness)


def smooth_hash_cost(log2_hash_error: Decimal) -> Decimal:
    """2 log2(1/(2 eps_h)): leftover hash lemma, Tomamichel, Schaffner, Smith, Renner (arXiv:1002.2436).

    Distance to uniform 1/2 ||.||_1 <= eps_h + 2 eps_s for purified-distance smoothing eps_s.
    """
    return -2 * (log2_hash_error + 1)


def class_bits(declaration: Declaration) -> tuple[Decimal, str]:
    """log2 of the number of classes into which what becomes known splits the run, and why.

    With M classes, the secrecies of the classes add up to at most M^((a-1)/a) eps (Hölder), which log2 M bits undo; for
    smooth min-entropy the chain rule H(A|EM) >= H(A|E) - log2 M does the same.
    confidential + fixed length   one class: the length says nothing
    confidential + credit         one class per possible length
    public                        one class per possible published content: tally, no-click counts, digest of the rounds
                                  (the length follows from the tally)
    """
    if declaration.disclosure == "public":
        # Tallies of at most N rounds over K cells: C(N + K, K) <= (N + K)^K / K!.
        cells = 16 if declaration.settings.test_probability == 1 else 20
        n = declaration.rounds
        ways = Decimal(1)
        for k in range(1, cells + 1):
            ways *= Decimal(n + k) / k
        return log2(ways) + 2 * log2(Decimal(n + 1)) + DIGEST_BITS, (
            f"tally over {cells} cells, two no-click counts and a {DIGEST_BITS}-bit digest may be published")
    if declaration.output_rule == "credit":
        return log2(Decimal(declaration.output_bits)), f"the length may be any of 1 to {declaration.output_bits} bits"
    return log2(ONE), "one length was declared and nothing but acceptance becomes known"


def eat_errors(soundness: float) -> tuple[Decimal, Decimal, Decimal]:
    """log2 of (eps_s, eps_EA, eps_h) with max(eps_EA, eps_h + 2 eps_s) <= soundness: eps/4, eps, eps/2."""
    with exactly():
        total = log2(number(soundness))
        return total - 2, total, total - 1
