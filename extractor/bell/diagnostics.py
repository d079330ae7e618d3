"""Checks that can raise a flag and can certify nothing.

Each diagnostic answers one plain question about a tally. Its p-value is the chance that a rig in order looks at least
this odd, corrected for the comparisons inside the diagnostic; a flag goes up below FALSE_ALARM divided by the number
of diagnostics made together, so that a rig in order raises any flag at all in at most one tally of a thousand. Rounds
are taken as independent here, except for the settings and the test fraction, whose tails hold for any memory of the
boxes.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from extractor.bell.allowed import check_settings
from extractor.bell.tails import as_p_value, log_at_least, log_at_most, log_chi_square_at_least, log_normal_at_least
from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, Convention, Settings, Tally

FALSE_ALARM = 1e-3              # over all diagnostics of one tally; common practice
STUCK_ROUNDS = 1000             # rounds after which an outcome that never changed is worth a flag
_FEW = 10.0                     # expected counts below this are compared exactly instead of by a normal approximation
TSIRELSON = 2.0 * math.sqrt(2.0)


@dataclass(frozen=True)
class Diagnostic:
    """One check: value as described by the sentence, p_value in (0, 1] or None where chance plays no part."""

    name: str
    value: float
    p_value: float | None
    flag: bool
    sentence: str

    def document(self) -> dict[str, Any]:
        """The same as a JSON object."""
        return asdict(self)


def diagnose(tally: Tally, convention: Convention = Convention(), settings: Settings = Settings(),
             calibration: Tally | None = None) -> tuple[Diagnostic, ...]:
    """All diagnostics of a tally, in a fixed order. Errors raised: InputError for an empty tally or an impossible bias.

    calibration  tally of earlier rounds of the same rig, to compare with
    """
    if tally.rounds == 0:
        raise InputError("the tally holds no rounds, so there is nothing to diagnose", code="empty-tally")
    made = [_settings_frequencies(tally, settings), _test_fraction(tally, settings), _no_signalling(tally),
            _beyond_tsirelson(tally), _other_convention(tally, convention), _stuck(tally)]
    if calibration is not None and calibration.rounds:
        made += [_calibration_score(tally, convention, calibration), _calibration_outcomes(tally, calibration)]
    return tuple(_flagged(d, FALSE_ALARM / len(made)) for d in made)


def diagnose_drift(segments: Sequence[Tally], convention: Convention = Convention()) -> Diagnostic:
    """Whether the score wandered over the segments of a run: chi-square of their S around the common mean.

    Segments in which a setting pair never came up are left out. value: largest minus smallest S.
    """
    scores = [_smooth_chsh(segment, convention) for segment in segments if _all_pairs(segment)]
    if len(scores) < 2:
        return Diagnostic("drift", 0.0, None, False,
                          "Fewer than two segments have all setting pairs, so drift cannot be judged.")
    values, errors = (np.array(column) for column in zip(*scores))
    weights = errors ** -2.0
    mean = float(np.sum(weights * values) / np.sum(weights))
    log = log_chi_square_at_least(float(np.sum(weights * (values - mean) ** 2)), len(scores) - 1)
    spread = float(values.max() - values.min())
    d = Diagnostic("drift", spread, as_p_value(log), False,
                   f"S ranged over {spread:.4g} across {len(scores)} segments.")
    return _flagged(d, FALSE_ALARM)


def _flagged(d: Diagnostic, level: float) -> Diagnostic:
    """Raise the flag if the p-value is below the level, and append what to do, or that nothing is odd."""
    if d.p_value is None:
        return d
    flag = d.p_value < level
    tail = _ADVICE[d.name] if flag else "Within chance."
    return replace(d, flag=flag, sentence=f"{d.sentence} {tail}")


_ADVICE = {
    "settings-frequencies":
        "More than chance: the settings were not drawn as declared, or rounds were lost depending on their settings; "
        "check the settings source and that no round was dropped.",
    "test-fraction":
        "More than chance: test rounds were not chosen as declared; "
        "check the switch between test and generation rounds.",
    "no-signalling":
        "More than chance: one station's outcome depends on the other's setting; look for cross-talk, "
        "drift together with the settings, or rounds dropped by outcome.",
    "beyond-tsirelson":
        "No quantum rig can do this: suspect swapped labels, dropped rounds or stations that communicate.",
    "other-convention":
        "The rig violates another CHSH expression than the declared one: settings or outcomes are probably labelled "
        "otherwise; declare that convention for the next run.",
    "calibration-score":
        "More than chance: the rig scored differently than at calibration; "
        "calibrate again before the next declaration.",
    "calibration-outcomes":
        "More than chance: the rig's outcomes changed since calibration; the declared score table may no longer fit.",
    "drift":
        "More than chance: the rig was not steady; look for misalignment or temperature, "
        "and calibrate closer to the run.",
}


def _settings_frequencies(tally: Tally, settings: Settings) -> Diagnostic:
    check = check_settings(_pair_totals(tally), settings)
    outside = max(check.low - check.observed, check.observed - check.high, 0.0) if sum(_pair_totals(tally)) else 0.0
    return Diagnostic("settings-frequencies", outside, as_p_value(check.log_chance), False,
                      f"Test rounds had {check.what} in {100 * check.observed:.4g} % of the cases, "
                      f"{100 * outside:.2g} percentage points outside what was declared.")


def _test_fraction(tally: Tally, settings: Settings) -> Diagnostic:
    n, tests, gamma = tally.rounds, sum(_pair_totals(tally)), settings.test_probability
    fraction = tests / n
    sentence = f"{100 * fraction:.4g} % of the rounds were test rounds; {100 * gamma:.4g} % were declared."
    if gamma == 1.0:
        flag = tests < n
        sentence += " Generation rounds must not occur: check the test field." if flag else " As it must be."
        return Diagnostic("test-fraction", fraction, None, flag, sentence)
    log = min(log_at_least(tests, n, gamma), log_at_most(tests, n, gamma)) + math.log(2)
    return Diagnostic("test-fraction", fraction, as_p_value(min(0.0, log)), False, sentence)


def _no_signalling(tally: Tally) -> Diagnostic:
    """Four comparisons: the chance of outcome 1 at one station and setting, under the other's setting 0 and 1."""
    counts, worst, gap, where = tally.test_counts(), math.inf, 0.0, "a at x = 0"
    for side, own in ((side, own) for side in "ab" for own in (0, 1)):
        ones, totals = [], []
        for other in (0, 1):
            cell = counts[own, other] if side == "a" else counts[other, own]
            ones.append(int(cell[1].sum() if side == "a" else cell[:, 1].sum()))
            totals.append(int(cell.sum()))
        if not all(totals):
            continue
        log = _log_two_proportions(ones, totals) + math.log(4)
        if log < worst:
            worst, gap = log, ones[0] / totals[0] - ones[1] / totals[1]
            where = f"{side} at {'x' if side == 'a' else 'y'} = {own}"
    return Diagnostic("no-signalling", abs(gap), as_p_value(min(0.0, worst)), False,
                      "The largest change of one station's outcomes with the other's setting is "
                      f"{abs(gap):.2g}, for {where}.")


def _beyond_tsirelson(tally: Tally) -> Diagnostic:
    if not _all_pairs(tally):
        return Diagnostic("beyond-tsirelson", 0.0, None, False,
                          "A setting pair never came up, so S cannot be compared with 2 sqrt 2.")
    s, error = max(_smooth_chsh(tally, c) for c in _conventions())
    log = log_normal_at_least((s - TSIRELSON) / error) + math.log(8)
    return Diagnostic("beyond-tsirelson", s, as_p_value(min(0.0, log)), False,
                      f"The largest S of all eight CHSH expressions is {s:.6g} with standard error {error:.2g}; "
                      "2 sqrt 2 = 2.828427 is the quantum limit.")


def _other_convention(tally: Tally, convention: Convention) -> Diagnostic:
    if not _all_pairs(tally):
        return Diagnostic("other-convention", 0.0, None, False,
                          "A setting pair never came up, so conventions cannot be compared.")
    s, error, other = max((*_smooth_chsh(tally, c), str(c.minus) + (" flipped" if c.flip else ""))
                          for c in _conventions() if c != convention)
    log = log_normal_at_least((s - 2.0) / error) + math.log(7)
    return Diagnostic("other-convention", s, as_p_value(min(0.0, log)), False,
                      f"The largest S under a convention other than the declared one is {s:.6g}, "
                      f"with the minus sign at {other}; at most one of the eight can exceed 2.")


def _stuck(tally: Tally) -> Diagnostic:
    counts = np.array(tally.counts, dtype=np.int64).reshape(8, 2, 2)
    ones = {"a": int(counts[:, 1, :].sum()), "b": int(counts[:, :, 1].sum())}
    stuck = [side for side, k in ones.items() if k in (0, tally.rounds)]
    flag = bool(stuck) and tally.rounds >= STUCK_ROUNDS
    sentence = "Both outcomes took both values."
    if stuck:
        sentence = f"Outcome {' and '.join(stuck)} never changed in {tally.rounds} rounds. " + (
            "Check detector, bias and cabling." if flag else "Too few rounds to tell whether a detector is stuck.")
    return Diagnostic("stuck-outcome", float(len(stuck)), None, flag, sentence)


def _calibration_score(tally: Tally, convention: Convention, calibration: Tally) -> Diagnostic:
    if not (_all_pairs(tally) and _all_pairs(calibration)):
        return Diagnostic("calibration-score", 0.0, None, False,
                          "A setting pair never came up, so S cannot be compared with the calibration.")
    (s, e), (s_before, e_before) = _smooth_chsh(tally, convention), _smooth_chsh(calibration, convention)
    error = math.hypot(e, e_before)
    log = log_normal_at_least(abs(s - s_before) / error) + math.log(2)
    return Diagnostic("calibration-score", s - s_before, as_p_value(min(0.0, log)), False,
                      f"S differs from the calibration by {s - s_before:+.4g} (standard error {error:.2g}).")


def _calibration_outcomes(tally: Tally, calibration: Tally) -> Diagnostic:
    """Chi-square homogeneity of the outcome pairs within each (t, x, y), rare ones (< _FEW expected) pooled."""
    value, degrees, distance = 0.0, 0, 0.0
    both = np.array([tally.counts, calibration.counts], dtype=float).reshape(2, 8, 4)
    for now, before in zip(*both):
        n, m = now.sum(), before.sum()
        if not n or not m:
            continue
        distance = max(distance, float(np.abs(now / n - before / m).sum() / 2))
        share = (now + before) / (n + m)
        many = share * min(n, m) >= _FEW
        table = np.array([np.append(row[many], row[~many].sum()) for row in (now, before)])
        table = table[:, table.sum(axis=0) > 0]
        expected = np.outer([n, m], table.sum(axis=0) / (n + m))
        if table.shape[1] < 2 or expected.min() < 1.0:
            continue
        value += float(((table - expected) ** 2 / expected).sum())
        degrees += table.shape[1] - 1
    return Diagnostic("calibration-outcomes", distance, as_p_value(log_chi_square_at_least(value, degrees)), False,
                      f"For some settings {100 * distance:.2g} % of the outcomes are distributed "
                      "otherwise than at calibration.")


def _pair_totals(tally: Tally) -> tuple[int, int, int, int]:
    counts = tally.test_counts()
    return tuple(int(counts[pair].sum()) for pair in SETTING_PAIRS)


def _all_pairs(tally: Tally) -> bool:
    return all(_pair_totals(tally))


def _conventions() -> list[Convention]:
    return [Convention(pair, flip) for pair in SETTING_PAIRS for flip in (False, True)]


def _smooth_chsh(tally: Tally, convention: Convention) -> tuple[float, float]:
    """S, and a standard error (one round of each kind added) that stays positive when a correlator is +1 or -1."""
    counts, s, variance = tally.test_counts(), 0.0, 0.0
    for x, y in SETTING_PAIRS:
        equal, unequal = int(np.trace(counts[x, y])), int(counts[x, y, 0, 1] + counts[x, y, 1, 0])
        n = equal + unequal
        s += convention.sign(x, y) * (equal - unequal) / n
        variance += 4.0 * (equal + 1) * (unequal + 1) / (n + 2) ** 2 / n
    return s, math.sqrt(variance)


def _log_two_proportions(ones: list[int], totals: list[int]) -> float:
    """ln of the two-sided chance that two equal proportions differ this much; exact (Fisher) where counts are few."""
    pooled, n = sum(ones), sum(totals)
    if pooled in (0, n):
        return 0.0
    if min(totals) * min(pooled, n - pooled) / n < _FEW:
        table = [ones, [totals[0] - ones[0], totals[1] - ones[1]]]
        from scipy import stats     # late: rarely needed, and it doubles the time every command takes to start

        return math.log(max(float(stats.fisher_exact(table).pvalue), 1e-300))
    share = pooled / n
    error = math.sqrt(share * (1 - share) * (1 / totals[0] + 1 / totals[1]))
    return min(0.0, log_normal_at_least(abs(ones[0] / totals[0] - ones[1] / totals[1]) / error) + math.log(2))
