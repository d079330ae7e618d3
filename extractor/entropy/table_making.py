"""From what a rig is expected to do to a certified score table: search, certify, divide.

The search is trusted for nothing; the table that comes out has passed `table_validity`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from statistics import NormalDist

import numpy as np

from extractor.entropy import table_search, table_validity, two_sided_grid
from extractor.entropy.numerics import exactly, number, up
from extractor.entropy.table_search import Layout, Search
from extractor.entropy.validity import allowed_distributions
from extractor.errors import Defect, InputError
from extractor.model import SETTING_PAIRS, ScoreTable, Settings

_SLACK_SHARE = 1e-3          # of the gain: what a certificate may cost
_LOWEST = 100.0              # bits: no cell is credited less than minus this, or minus 2 % of what the whole run earns
_LIMIT_EXCESS = 1e-6         # order - 1 at which the i.i.d. limit is read off
Behaviour = tuple[float, ...]


@dataclass(frozen=True)
class MadeTable:
    """A certified table and what it is expected to earn, in bits per round.

    rate            expected credit per round
    deviation       standard deviation of a round's credit; skewness: third standardised moment
    validity_bound  proven bound on the table's weighted sum, at most 1
    lost            what certification took off, in bits per round
    """

    table: ScoreTable
    rate: float
    deviation: float
    skewness: float
    validity_bound: float
    lost: float

    def credit_reached(self, rounds: int, probability: float) -> float:
        """About the credit that an honest run of `rounds` rounds reaches with this probability (Cornish-Fisher, to
        the skewness)."""
        z = NormalDist().inv_cdf(1 - probability)
        shape = z + (z * z - 1) * self.skewness / (6 * math.sqrt(rounds))
        return rounds * self.rate + shape * self.deviation * math.sqrt(rounds)


def frequencies(behaviour: Behaviour, settings: Settings) -> np.ndarray:
    """Expected share of each of the 16 test cells, and of the 4 generation cells if there are any; adds up to 1."""
    p = np.array(behaviour).reshape(4, 4)
    tests = settings.test_probability * np.array(settings.distribution)[:, None] * p
    if settings.test_probability == 1:
        return tests.reshape(-1)
    return np.concatenate([tests.reshape(-1),
            (1 - settings.test_probability) * p[SETTING_PAIRS.index(tuple(settings.generation))]])


def _layout(settings: Settings) -> Layout:
    with exactly():
        points = np.array([[float(p) for p in point] for point in allowed_distributions(settings)])
    return Layout(settings.test_probability, np.unique(points, axis=0), tuple(settings.generation))


def _positive(behaviour: Behaviour, settings: Settings) -> np.ndarray:
    """Frequencies with a tiny share of noise: no cell is expected never, so no credit is infinite and no loss
    unbounded."""
    noise = 1e-12
    mixed = (1 - noise) * np.array(behaviour) + noise / 4
    return frequencies(tuple(mixed), settings)


@lru_cache(maxsize=64)
def _search(behaviour: Behaviour, settings: Settings, rounds_scale: int) -> Search:
    lowest = -max(_LOWEST, 0.02 * 2.0 ** rounds_scale)
    return Search.of(_positive(behaviour, settings), _layout(settings), lowest)


@lru_cache(maxsize=64)
def make_table(behaviour: Behaviour, settings: Settings, rounds: int, soundness: float,
        order: float | None) -> MadeTable:
    """The table (and, unless given, the order) for a run of `rounds` rounds. Raises InputError if nothing can be
    earned.

    behaviour  16 probabilities P(a, b | x, y), index 8 x + 4 y + 2 a + b
    """
    search = _search(behaviour, settings, max(rounds, 1).bit_length())
    e, factors, gain = table_search.best_table(search, rounds, -math.log2(soundness), order)
    if not gain > 0:
        raise InputError("no score table earns anything for a rig that behaves like this: it shows no violation",
                code="nothing-to-certify",
                         field="/calibration")
    credits = np.log2(factors) / e
    slack = 0.0
    for share in (_SLACK_SHARE, 2 * _SLACK_SHARE, 10 * _SLACK_SHARE):
        bound = max(two_sided_grid.excess_bound(problem, tolerance=share * gain * table_search.LN2).bound
                    for problem in search.layout.problems(factors, e))
        slack = (math.log1p(e * bound) / (e * table_search.LN2)) * (1 + 1e-6) + 1e-6 * gain
        table = _table(1 + e, credits - slack)
        try:
            worst = table_validity.check_valid(table, settings)
        except InputError:
            continue
        return _made(table, behaviour, settings, slack, worst)
    raise Defect("a table could not be certified")


def _table(order: float, credits: np.ndarray) -> ScoreTable:
    generation = tuple(float(c) for c in credits[16:]) if len(credits) == 20 else (float(min(credits.min(), 0.0)),) * 4
    return ScoreTable(order, tuple(float(c) for c in credits[:16]), generation)


def _made(table: ScoreTable, behaviour: Behaviour, settings: Settings, slack: float, worst: float) -> MadeTable:
    nu = frequencies(behaviour, settings)
    credits = np.array(table.test + (table.generation if len(nu) == 20 else ()))
    rate = math.fsum(nu * credits)
    deviation = math.sqrt(max(math.fsum(nu * (credits - rate) ** 2), 0.0))
    skewness = math.fsum(nu * (credits - rate) ** 3) / deviation**3 if deviation else 0.0
    with exactly():
        validity_bound = up(1 + (number(table.order) - 1) * number(worst))
    return MadeTable(table, rate, deviation, skewness, validity_bound, slack)


@lru_cache(maxsize=64)
def limit_rate(behaviour: Behaviour, settings: Settings) -> float:
    """About the i.i.d. limit of a behaviour, in bits per round: two-sided von Neumann entropy, its least value over
    all quantum strategies.

    Read off a search at order 1 + 1e-6; a searched number, good to about one part in a thousand, that certifies
    nothing.
    """
    search = Search.of(_positive(behaviour, settings), _layout(settings), -1e9)
    return max(search.improve(_LIMIT_EXCESS, 20, 1e-3)[1], 0.0)


def searched_length(behaviour: Behaviour, settings: Settings, rounds: int, soundness: float,
        order: float | None) -> float:
    """About the bits that `rounds` rounds would earn after the cost of soundness; quick after the first call. For
    planning."""
    search = _search(behaviour, settings, 40)
    cost = -math.log2(soundness)
    for _ in range(8):
        e = order - 1 if order is not None else search.best_excess(rounds, cost)
        if any(abs(math.log(e / known)) < 0.15 for known in search.settled):
            break
        search.improve(e, 20, 2e-3)
        search.settled.append(e)
    return rounds * search.fit(e)[1] * (1 - _SLACK_SHARE) - cost * (1 + e) / e + 2


def expected_counts(behaviour: Behaviour, settings: Settings, rounds: int) -> list[int]:
    """Counts of the 16 or 20 cells closest to what is expected, adding up to `rounds`."""
    shares = frequencies(behaviour, settings) * rounds
    counts = [math.floor(s) for s in shares]
    largest_remainders = sorted(range(len(counts)), key=lambda k: counts[k] - shares[k])
    for k in largest_remainders[:rounds - sum(counts)]:
        counts[k] += 1
    return counts
