"""The CHSH score of a tally: correlators, S, the winning probability and the evidence against local models.

Generation rounds (t = 0) have fixed settings and do not enter. S is made of one correlator per setting pair, so
settings that came up unequally often do not bias it; counting wins over all rounds would. Nothing here certifies
randomness.
"""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from extractor.bell.allowed import SettingsCheck, bias_that_covers, check_settings, local_win_limit
from extractor.bell.decisive import DecisiveCount, NoClick, count_decisive
from extractor.bell.tails import as_log10, as_p_value, log_at_least
from extractor.model import SETTING_PAIRS, Convention, Settings, Tally

LOCAL_BOUND = 2.0
TSIRELSON_BOUND = 2.0 * math.sqrt(2.0)


@dataclass(frozen=True)
class Score:
    """What the test rounds of a tally say. Lists of four are ordered (0,0), (0,1), (1,0), (1,1).

    correlators, correlator_errors  E_xy in [-1, 1] and sqrt((1 - E^2)/n), None where a pair never came up
    chsh, chsh_error                S under the convention and its standard error, None if a correlator is
    winning_probability(_error)     w = 1/2 + S/8: what uniform settings would win
    wins, losses                    raw counts over all test rounds
    local_win_limit                 b, the highest chance of a local model to win a round under the declared settings
    p_value, log10_p_value          P[Bin(test rounds, b) >= wins], whatever memory the boxes have; never 0; None
                                    with p_value_note when it would be worthless, because the observed settings
                                    contradict the declared ones
    decisive                        the CH-conditioned count
    note                            why S is missing, or None
    """

    test_rounds: int
    generation_rounds: int
    settings_counts: tuple[int, int, int, int]
    correlators: tuple[float | None, ...]
    correlator_errors: tuple[float | None, ...]
    chsh: float | None
    chsh_error: float | None
    winning_probability: float | None
    winning_probability_error: float | None
    wins: int
    losses: int
    local_win_limit: float
    p_value: float | None
    log10_p_value: float | None
    p_value_note: str | None
    decisive: DecisiveCount
    note: str | None
    local_bound: float = LOCAL_BOUND
    tsirelson_bound: float = TSIRELSON_BOUND

    @property
    def ch_p_value(self) -> float | None:
        """p-value of the CH-conditioned count; None with `decisive.note`."""
        return self.decisive.p_value

    def document(self) -> dict[str, Any]:
        """The same as a JSON object."""
        fields = asdict(self)
        for name in ("settings_counts", "correlators", "correlator_errors"):
            fields[name] = list(fields[name])
        return fields | {"decisive": self.decisive.document()}


def score(tally: Tally, convention: Convention = Convention(), settings: Settings = Settings(),
          no_click: NoClick = (None, None)) -> Score:
    """The score of a tally under a convention and the declared settings.

    no_click  declared outcomes of a no-click on a, b, where known; they sharpen the CH-conditioned count only
    Errors raised: InputError if the declared bias lets a setting stop varying.
    """
    counts = tally.test_counts()
    totals = tuple(int(counts[pair].sum()) for pair in SETTING_PAIRS)
    n = sum(totals)
    correlators, errors = correlators_of(tally)
    chsh, chsh_error, note = _combine(correlators, errors, convention)
    wins = sum(int(counts[cell]) for cell in np.ndindex(2, 2, 2, 2) if convention.wins(*cell))
    limit = local_win_limit(settings)
    check = check_settings(totals, settings)
    p_note = None
    if n == 0:
        p_note = "No test rounds, so no p-value."
    elif check.contradicts:
        p_note = _contradiction_note(check, totals, settings)
    log = log_at_least(wins, n, limit) if p_note is None else None
    return Score(
        test_rounds=n, generation_rounds=tally.rounds - n, settings_counts=totals,
        correlators=correlators, correlator_errors=errors, chsh=chsh, chsh_error=chsh_error,
        winning_probability=None if chsh is None else 0.5 + chsh / 8.0,
        winning_probability_error=None if chsh_error is None else chsh_error / 8.0,
        wins=wins, losses=n - wins, local_win_limit=limit,
        p_value=None if log is None else as_p_value(log), log10_p_value=None if log is None else as_log10(log),
        p_value_note=p_note, decisive=count_decisive(tally, convention, settings, no_click, p_note), note=note)


def correlators_of(tally: Tally) -> tuple[tuple[float | None, ...], tuple[float | None, ...]]:
    """E_xy and standard errors of the four setting pairs, from test rounds; None where a pair never came up."""
    values: list[float | None] = []
    errors: list[float | None] = []
    for cell in (tally.test_counts()[pair] for pair in SETTING_PAIRS):
        equal, unequal = int(cell[0, 0] + cell[1, 1]), int(cell[0, 1] + cell[1, 0])
        n = equal + unequal
        if n == 0:
            values.append(None)
            errors.append(None)
            continue
        values.append((equal - unequal) / n)
        # 1 - E^2 = 4 equal unequal / n^2, written so that it keeps its digits when E is near 1
        errors.append(2.0 * math.sqrt(equal / n * (unequal / n) / n))
    return tuple(values), tuple(errors)


def _combine(correlators: tuple[float | None, ...], errors: tuple[float | None, ...],
             convention: Convention) -> tuple[float | None, float | None, str | None]:
    missing = [str(pair) for pair, value in zip(SETTING_PAIRS, correlators) if value is None]
    if missing:
        pairs = " or ".join(missing)
        return None, None, f"No test rounds with settings {pairs}, so S cannot be formed; take more test rounds."
    chsh = math.fsum(convention.sign(*pair) * value for pair, value in zip(SETTING_PAIRS, correlators))
    return chsh, math.sqrt(math.fsum(error * error for error in errors)), None


def _contradiction_note(check: SettingsCheck, totals: tuple[int, int, int, int], settings: Settings) -> str:
    interval = f"{100 * check.low:.6g} %"
    if check.high > check.low:
        interval += f" to {100 * check.high:.6g} %"
    cover = bias_that_covers(totals, settings)
    advice = ("declare the distribution that is really used" if cover is None else
              f"declare the distribution that is really used, or a bias of at least {cover:.2g},")
    return (f"The test rounds had {check.what} in {100 * check.observed:.6g} % of the cases, where the declared "
            f"settings allow {interval}; counts of wins are then worthless as evidence, so no p-value is given. "
            f"Find out why, and {advice} before the next run.")
