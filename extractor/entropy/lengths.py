"""From entropy to a length: what soundness, the choice of a length and disclosure cost, in bits."""

from __future__ import annotations

from decimal import Decimal

from extractor.entropy.numerics import ONE, exactly, log2, number
from extractor.model import FACTOR_METHODS, Declaration

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


def class_bits(declaration: Declaration, rounds: int) -> tuple[Decimal, str]:
    """Cost in bits of what becomes known about the run besides the bits, and its reason. `rounds`: rounds of the run.

    What becomes known puts the run into one of many classes. Let class c have probability p_c and be given the share s_c, the
    shares adding up to 1 at most. Taking log2(1/s_c) bits off its length, its secrecy is at most
    eps p_c^(1/a) s_c^((a-1)/a), and by Hölder these add up to at most eps. (For smooth min-entropy, with equal shares, the chain rule
    H(A|EM) >= H(A|E) - log2 M says the same.) The shares:

    confidential  The ledger shows the number of rounds, and the length if it is not fixed. Runs of the declared size have half
                  of all shares, runs that stopped early the other half, equally over where; each times one over the possible lengths.
                  Methods that refuse an early stop have no such class.
    public        Equal shares for every content that may be published: tally, no-click counts, digest of the rounds and commitment to
                  the segments' digests (which opens with the report's salt); rounds and length follow from the tally.
    """
    n = declaration.rounds
    if declaration.disclosure == "public":
        # Tallies of at most N rounds over K cells: C(N + K, K).
        cells = 16 if declaration.settings.test_probability == 1 else 20
        ways = ONE
        for k in range(1, cells + 1):
            ways *= Decimal(n + k) / k
        return log2(ways) + 2 * log2(Decimal(n + 1)) + 2 * DIGEST_BITS, (
            f"tally over {cells} cells, two no-click counts and two digests of {DIGEST_BITS} bits may be published")
    cost, why = log2(ONE), []
    if declaration.method in FACTOR_METHODS:
        cost += ONE if rounds == n else ONE + log2(Decimal(n))
        why.append("the run may stop early" if rounds == n else f"the run stopped early, after any of up to {n} rounds")
    if declaration.output_rule == "credit":
        cost += log2(Decimal(declaration.output_bits))
        why.append(f"the length may be any of 1 to {declaration.output_bits} bits")
    return cost, " and ".join(why) or "nothing but acceptance becomes known"


def eat_errors(soundness: float) -> tuple[Decimal, Decimal, Decimal]:
    """log2 of (eps_s, eps_EA, eps_h) with max(eps_EA, eps_h + 2 eps_s) <= soundness: eps/4, eps, eps/2."""
    with exactly():
        total = log2(number(soundness))
        return total - 2, total, total - 1
