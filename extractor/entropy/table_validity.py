"""Is a declared general score table valid? Yes or no, the same answer on every machine.

Trusted. A table is valid when no quantum strategy has a weighted sum above 1 (MATH section 3); the bound is
`two_sided_grid`'s, the derivation
TABLES.md. The declaration holds a table already divided by what its sum exceeded 1 by, so a certificate prints no
digit of the
bound: it says that the sum is at most 1, or there is no certificate.
"""

from __future__ import annotations

from decimal import Decimal
from functools import lru_cache

import numpy as np

from extractor.entropy import two_sided_grid
from extractor.entropy.numerics import ONE, exactly, exp2, number, up
from extractor.entropy.two_sided import Problem
from extractor.entropy.validity import allowed_distributions
from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, ScoreTable, Settings

LARGEST_FACTOR = 40          # bits: a factor F = 2^((order - 1) credit) is at most 2^40, and a credit is at least -2^40/(order - 1)


def problems(table: ScoreTable, settings: Settings) -> list[Problem]:
    """One certification problem per extreme point of the allowed settings distributions; factors rounded up.

    Generation rounds use the outcome vectors of their settings, so their weight and factors join those test cells
    (TABLES.md 1).
    """
    with exactly():
        e, gamma = number(table.order) - 1, number(settings.test_probability)
        test = [_excess(credit, e) for credit in table.test]
        generation = [_excess(credit, e) for credit in table.generation]
        found = []
        for distribution in allowed_distributions(settings):
            weights, excess = np.zeros((2, 2)), np.zeros((2, 2, 2, 2))
            for (x, y), p in zip(SETTING_PAIRS, distribution):
                tested = gamma * p
                spared = ONE - gamma if (x, y) == tuple(settings.generation) else Decimal(0)
                weights[x, y] = float(tested + spared)
                for a, b in SETTING_PAIRS:
                    mean = (tested * test[8 * x + 4 * y + 2 * a + b] + spared * generation[2 * a + b]) / (tested + spared)
                    excess[x, a, y, b] = up(mean)
            found.append(Problem(weights, excess, float(e)))
    return found


def _excess(credit: float, e: Decimal) -> Decimal:
    """(F - 1)/e for F = 2^(e credit)."""
    exponent = e * number(credit)
    if exponent > LARGEST_FACTOR:
        raise InputError(f"a credit of {credit!r} bits makes a factor above 2^{LARGEST_FACTOR} at this order",
                code="bad-table", field="/table")
    return (exp2(exponent) - 1) / e


def check_valid(table: ScoreTable, settings: Settings) -> float:
    """Upper bound, at most 0, on the excess (sum - 1)/(order - 1) of the table over all quantum strategies and
    allowed settings distributions.

    Raises InputError if it could not be shown to be at most 0.
    """
    bound = _bound(table, settings)
    if not bound <= 0.0:
        raise InputError(
            "the table could not be shown to be valid: some quantum strategy may earn more than it is worth; make the table with plan or declare, or "
            "lower its credits", code="table-not-valid", field="/table")
    return bound


@lru_cache(maxsize=256)
def _bound(table: ScoreTable, settings: Settings) -> float:
    bounds: list[float] = []
    for problem in problems(table, settings):
        bounds.append(two_sided_grid.excess_bound(problem, target=0.0).bound)
        if not bounds[-1] <= 0.0:
            return float("inf")
    return max(bounds)
