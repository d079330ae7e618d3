"""The CH-conditioned count: decide between local and quantum by the few rounds that matter.

Where nearly every round is empty, counting wins drowns in the empty ones. Clauser and Horne's inequality (in
Eberhard's form) looks at four cells only, the decisive ones: with d, e the outcomes that stand for a detection,

    J = P(d e | f) - P(d e' | f, other y) - P(d' e | other x, f) - P(d e | minus)  <= 0  for every local model,

f the pair opposite to the one with the minus sign, d' and e' the other outcomes. For no-signalling probabilities S =
2 + 4 J. A round in one of the four cells is decisive, and favourable in the first one.
"""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any

from extractor.bell.allowed import favourable_limit
from extractor.bell.tails import as_log10, as_p_value, log_at_least, log_martingale
from extractor.model import Convention, Settings, Tally

NoClick = tuple[int | None, int | None]
Cell = tuple[int, int, int, int]


@dataclass(frozen=True)
class DecisiveCount:
    """Decisive test rounds of one CH form and what they say against local models.

    favourable_cell   (x, y, a, b) of the favourable outcome
    value             J, or None if a setting pair never came up
    limit             highest chance of a local model that a decisive round is favourable
    forms             forms that were tried; 2 when no no-click value says which outcome is a detection,
                      and the p-values are doubled then
    p_value           P[Bin(decisive, limit) >= favourable]: exact if the number of decisive rounds was fixed
                      beforehand, or does not depend on their outcomes; None with `note` if it would be worthless
    memory_p_value    larger; holds also if the boxes stop making decisive rounds once they are ahead
    """

    favourable_cell: Cell
    favourable: int
    unfavourable: int
    value: float | None
    limit: float
    forms: int
    p_value: float | None
    log10_p_value: float | None
    memory_p_value: float | None
    note: str | None

    def document(self) -> dict[str, Any]:
        """The same as a JSON object."""
        return asdict(self) | {"favourable_cell": list(self.favourable_cell)}


def decisive_cells(convention: Convention, detection: int) -> tuple[Cell, Cell, Cell, Cell]:
    """The favourable cell and the three unfavourable ones, for `detection` = Alice's outcome that means a detection.

    Bob's is the same, inverted if the convention flips. Each is a test cell (x, y, a, b).
    """
    (mx, my), d = convention.minus, detection
    e = d ^ int(convention.flip)
    return (1 - mx, 1 - my, d, e), (1 - mx, my, d, 1 - e), (mx, 1 - my, 1 - d, e), (mx, my, d, e)


def count_decisive(tally: Tally, convention: Convention, settings: Settings, no_click: NoClick = (None, None),
                   contradiction: str | None = None) -> DecisiveCount:
    """Count the decisive test rounds and judge them.

    no_click       outcome assigned to a no-click on a, b; a known one fixes which outcome is a detection beforehand
    contradiction  why no p-value may be given (settings contradict their declaration), if so
    """
    from_a = None if no_click[0] is None else 1 - no_click[0]
    from_b = None if no_click[1] is None else 1 - no_click[1] ^ int(convention.flip)
    told = {d for d in (from_a, from_b) if d is not None}
    candidates = (told.pop(),) if len(told) == 1 else (0, 1)
    note = contradiction
    if len(told) == 2:
        note = ("The no-click values make an empty round lose at three setting pairs under this convention, so the "
                "count of decisive rounds does not apply; declare other no-click values or the flipped convention.")
    best = min((_one_form(tally, decisive_cells(convention, d), settings, len(candidates), note) for d in candidates),
               key=lambda count: 0.0 if count.log10_p_value is None else count.log10_p_value)
    return best


def _one_form(tally: Tally, four: tuple[Cell, Cell, Cell, Cell], settings: Settings, forms: int,
              note: str | None) -> DecisiveCount:
    counts = tally.test_counts()
    favourable, *others = (int(counts[cell]) for cell in four)
    unfavourable = sum(others)
    totals = [int(counts[x, y].sum()) for x, y, _, _ in four]
    value = None
    if all(totals):
        value = favourable / totals[0] - math.fsum(k / n for k, n in zip(others, totals[1:]))
    limit = favourable_limit(settings, four[0][:2])
    decisive = favourable + unfavourable
    if note is None and not decisive:
        note = "No decisive rounds, so no p-value from them."
    p_value = log10 = memory = None
    if note is None:
        log = min(0.0, log_at_least(favourable, decisive, limit) + math.log(forms))
        p_value, log10 = as_p_value(log), as_log10(log)
        memory = as_p_value(min(0.0, log_martingale(favourable, unfavourable, limit) + math.log(forms)))
    return DecisiveCount(four[0], favourable, unfavourable, value, limit, forms, p_value, log10, memory, note)
