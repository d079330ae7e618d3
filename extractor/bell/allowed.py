"""What a declared settings distribution allows, and whether observed settings contradict it.

A declared bias tau lets the chance of each setting bit of a test round, given everything before it, be off by up to
tau. "Before it" may include the other station's bit of the same round, in either order, so the allowed distributions
are spanned by x first, then y given x, and by y first, then x given y; each conditional chance at one end of its
interval.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from extractor.bell.tails import log_at_least, log_at_most
from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, Settings

CONTRADICTION_LOG = math.log(1e-6)      # common practice: one false alarm in a million honest runs


def allowed_distributions(settings: Settings) -> tuple[tuple[float, float, float, float], ...]:
    """`Settings.allowed` as floats. Raises InputError if the bias is too large."""
    return tuple(tuple(map(float, point)) for point in settings.allowed())


def local_win_limit(settings: Settings) -> float:
    """Highest chance b of a local model, with any memory, to win a test round: 1 - min P(x, y).

    Every local deterministic strategy loses at one pair at least. Uniform settings with bias tau: b = 3/4 + tau - tau^2
    (game form of Elkouss, Wehner, npj Quantum Information 2, 16026 (2016); derived).
    """
    return 1.0 - min(min(p) for p in allowed_distributions(settings))


def favourable_limit(settings: Settings, pair: tuple[int, int]) -> float:
    """Highest chance that a decisive round is the favourable one, favourable at `pair` and unfavourable at the others.

    A local strategy that has the favourable outcome at `pair` has an unfavourable one at one other pair at least
    (Bierhorst, J. Phys. A 48, 195302 (2015), for uniform settings: 1/2), so the chance is at most p/(p + smallest
    other p).
    """
    at = SETTING_PAIRS.index(pair)
    return max(p[at] / (p[at] + min(p[:at] + p[at + 1:])) for p in allowed_distributions(settings))


@dataclass(frozen=True)
class SettingsCheck:
    """How observed settings compare with the allowed ones.

    log_chance  ln of the chance, corrected for the number of comparisons, of settings at least this odd (0 =
                nothing odd)
    what        the oddest event in words, e.g. "settings (0, 1)" or "x = 0"
    observed    its observed frequency; low, high: the allowed interval
    """

    log_chance: float
    what: str
    observed: float
    low: float
    high: float

    @property
    def contradicts(self) -> bool:
        return self.log_chance < CONTRADICTION_LOG


def check_settings(counts: tuple[int, int, int, int], settings: Settings) -> SettingsCheck:
    """Compare the counts of test rounds per setting pair with the declared distribution and bias.

    Exact binomial tails at the near end of each allowed interval (which hold for any memory), for the four pairs
    and the two setting bits, on both sides: twelve comparisons, multiplied out (Bonferroni). No rounds: nothing odd.
    """
    n, allowed = sum(counts), allowed_distributions(settings)
    events = [(f"settings {pair}", counts[i], min(p[i] for p in allowed), max(p[i] for p in allowed))
              for i, pair in enumerate(SETTING_PAIRS)]
    for name, i, j in (("x = 0", 0, 1), ("y = 0", 0, 2)):
        either = [p[i] + p[j] for p in allowed]
        events.append((name, counts[i] + counts[j], min(either), max(either)))
    worst = SettingsCheck(0.0, events[0][0], counts[0] / n if n else 0.0, events[0][2], events[0][3])
    for what, count, low, high in events if n else ():
        tail = min(log_at_least(count, n, high), log_at_most(count, n, low)) + math.log(2 * len(events))
        if tail < worst.log_chance:
            worst = SettingsCheck(tail, what, count / n, low, high)
    return worst


def bias_that_covers(counts: tuple[int, int, int, int], settings: Settings) -> float | None:
    """Smallest declared bias (to about 1e-6) under which the counts are no contradiction; None if no bias helps."""
    low, high = settings.bias, min(0.25, min(_smallest_step(settings.distribution)) * (1 - 1e-9))

    def fits(bias: float) -> bool:
        trial = Settings(settings.test_probability, settings.distribution, settings.generation, bias)
        return not check_settings(counts, trial).contradicts

    if high <= low or not fits(high):
        return None
    while high - low > 1e-6:
        middle = (low + high) / 2
        low, high = (low, middle) if fits(middle) else (middle, high)
    return high


def _smallest_step(p: tuple[float, float, float, float]) -> list[float]:
    """Every conditional chance of a setting bit and of its opposite; the bias must stay below each."""
    bits = [p[0] + p[1], p[2] + p[3], p[0] + p[2], p[1] + p[3]]
    for i, j in ((0, 1), (2, 3), (0, 2), (1, 3)):
        bits += [p[i] / (p[i] + p[j]), p[j] / (p[i] + p[j])]
    return bits
