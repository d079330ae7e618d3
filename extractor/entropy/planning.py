"""What a run may be expected to give: planning before the data, and the declaration that follows from it."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass, replace
from typing import Any

from scipy import special

from extractor.errors import InputError
from extractor.entropy import bound, lengths, search
from extractor.entropy.numerics import down, exactly, number
from extractor.entropy.single_round import von_neumann
from extractor.model import (
    METHODS, SETTING_PAIRS, Acceptance, Convention, Declaration, ScoreTable, Settings, Tally, cell_index,
)


@dataclass(frozen=True)
class Plan:
    """The expectation for an honest rig at `score`; lengths in bits, rates in bits per round.

    certified_length   what a run of exactly the expected statistics certifies (an honest rig reaches it every second time)
    reliable_length    what an honest rig reaches with probability `confidence`; `declare` uses it for a fixed length
    rate               credit per round before the penalty (factor methods) or first-order rate (eat methods)
    penalty_bits       everything taken off for soundness, second order, slack, classes
    limit_rate         one-sided von Neumann entropy at `score`: no method of this family can exceed it
    seed_bits          seed length for certified_length
    """

    method: str
    rounds: int
    score: float
    test_probability: float
    soundness: float
    order: float | None
    certified_length: int
    reliable_length: int
    confidence: float
    rate: float
    penalty_bits: float
    limit_rate: float
    raw_bits: int
    seed_bits: int
    note: str

    def document(self) -> dict[str, Any]:
        return asdict(self)


def score_of(calibration: Tally, convention: Convention) -> float:
    """Winning probability of a calibration tally, each setting pair weighted equally. InputError if a pair has no rounds."""
    counts = calibration.test_counts()
    shares = []
    for x, y in SETTING_PAIRS:
        total = int(counts[x, y].sum())
        if not total:
            raise InputError(f"the calibration has no test rounds at settings {x}{y}", code="empty-setting", field="/calibration")
        shares.append(sum(int(counts[x, y, a, b]) for a, b in SETTING_PAIRS if convention.wins(x, y, a, b)) / total)
    return math.fsum(shares) / 4


def declare(*, rig: str, rounds: int, method: str, soundness: float, score: float, settings: Settings = Settings(),
            convention: Convention = Convention(), no_click: tuple[int | None, int | None] = (None, None),
            output_rule: str = "fixed", output_bits: int | None = None, disclosure: str = "confidential",
            seed_source: str = "system", purpose: str = "", order: float | None = None, confidence: float = 0.99,
            calibration_digest: str | None = None, calibration_rounds: int | None = None) -> Declaration:
    """A declaration for a rig expected at `score` (winning probability): searches order, table or tangent and the length.

    Without output_bits, a fixed length is the one an honest rig reaches with probability `confidence`; a length from
    credit is capped at twice the number of rounds. Raises InputError if nothing could be certified.
    """
    common = dict(rig=rig, rounds=rounds, method=method, soundness=soundness, settings=settings, convention=convention,
                  no_click=no_click, disclosure=disclosure, seed_source=seed_source, purpose=purpose, expected_score=score,
                  calibration_digest=calibration_digest, calibration_rounds=calibration_rounds)
    _check_score(score)
    draft = _draft(common, output_rule, order, confidence)
    if output_rule == "credit":
        return _with_length(draft, output_bits or 2 * rounds)
    if output_bits is None:
        output_bits = _available(draft, _expected(draft, score, confidence))
        if output_bits < 1:
            raise InputError(
                f"with {rounds} rounds at winning probability {score:g} and soundness {soundness:g}, an honest rig does not reach a single "
                f"bit by {method} with probability {confidence:g}; plan more rounds, a better score or another method",
                code="nothing-to-certify", field="/rounds")
    elif (reached := _available(draft, _expected(draft, score, confidence))) < output_bits:
        raise InputError(
            f"an honest rig at winning probability {score:g} reaches {max(reached, 0)} bits with probability {confidence:g}, not {output_bits}: "
            "it would probably be refused; declare fewer bits, more rounds, or a lower confidence if you accept that",
            code="length-out-of-reach", field="/output/bits")
    return _with_length(draft, output_bits)


def plan(*, rounds: int, score: float, soundness: float, method: str, settings: Settings = Settings(), output_rule: str = "fixed",
         disclosure: str = "confidential", order: float | None = None, confidence: float = 0.99) -> Plan:
    """The expected outcome of a run. Raises InputError for values out of range or combinations the method does not cover."""
    _check_score(score)
    common = dict(rig="plan", rounds=rounds, method=method, soundness=soundness, settings=settings, disclosure=disclosure,
                  expected_score=score)
    expected_draft = _draft(common, output_rule, order, 0.5)
    bound.check_declaration(expected_draft)
    certificate = bound.certify(expected_draft, _expected(expected_draft, score, 0.5))
    gain = certificate.terms[0].bits
    length = max(certificate.available_bits, 0)
    if output_rule == "credit":
        length = min(length, expected_draft.output_bits)
    reliable_draft = expected_draft if method == "factor-closed" else _draft(common, output_rule, order, confidence)
    reliable = max(_available(reliable_draft, _expected(reliable_draft, score, confidence)), 0)
    with exactly():
        limit = down(von_neumann(number(score)))
    raw = 2 * rounds
    return Plan(
        method=method, rounds=rounds, score=score, test_probability=settings.test_probability, soundness=soundness,
        order=expected_draft.order, certified_length=length, reliable_length=min(reliable, length), confidence=confidence,
        rate=gain / rounds, penalty_bits=gain - math.fsum(t.bits for t in certificate.terms), limit_rate=limit, raw_bits=raw,
        seed_bits=raw + length - 1 if length else 0,
        note="" if length else "nothing can be certified: more rounds or a higher score are needed")


def compare(**arguments: Any) -> list[Plan | InputError]:
    """A plan per method, or the InputError that says why the method does not apply."""
    plans: list[Plan | InputError] = []
    for method in METHODS:
        try:
            plans.append(plan(method=method, **arguments))
        except InputError as fault:
            plans.append(fault)
    return plans


def rounds_for(length: int, *, limit: int = 10**15, **arguments: Any) -> int:
    """Fewest rounds, to about one part in 10^6, that give `length` bits; arguments as for `plan`.

    Under a fixed length the reliable length has to reach it, under a length from credit the expected one.

    Raises InputError if even `limit` rounds are too few.
    """
    measure = "certified_length" if arguments.get("output_rule") == "credit" else "reliable_length"
    reached = lambda n: getattr(plan(rounds=n, **arguments), measure) >= length   # noqa: E731
    high = max(length // 2, 100)
    while not reached(high):
        if high >= limit:
            raise InputError(f"{length} bits need more than {limit:.0e} rounds at this score and soundness", code="out-of-reach", field="/length")
        high = min(high * 4, limit)
    low = max(high // 4, 1)
    while high - low > max(1, high // 10**6):
        middle = (low + high) // 2
        low, high = (low, middle) if reached(middle) else (middle, high)
    return high


def _check_score(score: float) -> None:
    if isinstance(score, bool) or not isinstance(score, (int, float)) or not 0.75 < score < search.TSIRELSON:
        raise InputError(
            f"a winning probability of {score!r} is not between the local bound 0.75 and the Tsirelson bound 0.853553…; "
            "nothing can be certified at or below the local bound, and nothing quantum lies above the other",
            code="score-out-of-range", field="/score")


def _draft(common: dict[str, Any], output_rule: str, order: float | None, confidence: float) -> Declaration:
    """A declaration with table or acceptance rule chosen and the largest length; `confidence` places an eat threshold."""
    settings: Settings = common["settings"]
    n, score, gamma = common["rounds"], common["expected_score"], settings.test_probability
    shell = dict(common, output_rule=output_rule, output_bits=2 * n)
    if order is not None:
        ScoreTable(order, (0.0,) * 16, (0.0,) * 4)      # checks the range of a given order before anything divides by order - 1
    # Field checks first, with a harmless order, so that the search below only ever sees sane numbers.
    convention = common.get("convention", Convention())
    if common["method"] == "factor-closed":
        Declaration(**shell, order=1.5, table=search.closed_table(1.5, 0.8, settings, convention))
        chosen = order or search.best_closed_order(n, score, gamma, common["soundness"])
        return Declaration(**shell, order=chosen, table=search.closed_table(chosen, score, settings, convention))
    counted = "wins" if common["method"] == "eat-2018" else "losses"
    Declaration(**shell, order=None if counted == "wins" else 1.5, acceptance=Acceptance(counted, 0, 0.8))
    smoothing, acceptance, _ = (float(e) for e in lengths.eat_errors(common["soundness"]))
    if counted == "wins":
        limit = _quantile(n, gamma * score, 1 - confidence)
        tangent = search.best_tangent_2018(n, limit / (n * gamma), gamma, (smoothing, acceptance))
        return Declaration(**shell, acceptance=Acceptance("wins", limit, tangent))
    limit = _quantile(n, gamma * (1 - score), confidence)
    chosen, tangent = search.best_order_2019(n, 1 - limit / (n * gamma), gamma, (smoothing, acceptance), order)
    return Declaration(**shell, order=chosen, acceptance=Acceptance("losses", limit, tangent))


def _with_length(draft: Declaration, output_bits: int) -> Declaration:
    declaration = replace(draft, output_bits=output_bits)
    bound.check_declaration(declaration)
    return declaration


def _available(declaration: Declaration, expected: Tally) -> int:
    return bound.certify(declaration, expected).available_bits


def _quantile(n: int, p: float, level: float) -> int:
    """Number of successes in n trials that is exceeded (level < 1/2) or not (level > 1/2) with about this confidence."""
    if level == 0.5:
        return math.floor(n * p)
    if n < 10**9:
        return min(max(math.ceil(float(special.bdtrik(level, n, p))), 0), n)
    return min(max(math.floor(n * p + float(special.ndtri(level)) * math.sqrt(n * p * (1 - p))), 0), n)


def _expected(declaration: Declaration, score: float, confidence: float) -> Tally:
    """A tally of the declared rounds as an honest rig at `score` gives it; at confidence > 1/2, its losses at that quantile.

    Only won, lost and generation counts matter to the methods; within a setting pair won rounds are put on one outcome.
    """
    n, s, convention = declaration.rounds, declaration.settings, declaration.convention
    tests = n if s.test_probability == 1 else min(n, round(n * s.test_probability))
    if confidence == 0.5:
        lost = tests - math.floor(tests * score)
    else:
        lost = min(tests, _quantile(n, s.test_probability * (1 - score), confidence) + 1)
    counts = [0] * 32
    for share, (x, y) in zip(s.distribution, SETTING_PAIRS):
        pair_lost, pair = round(lost * share), round(tests * share)
        for b, won in ((b, convention.wins(x, y, 0, b)) for b in (0, 1)):
            counts[cell_index(1, x, y, 0, b)] = max(pair - pair_lost, 0) if won else pair_lost
    spare = tests - sum(counts)                           # rounding of the shares: goes to, or comes off, one lost cell
    x, y = SETTING_PAIRS[0]
    lost_cell = cell_index(1, x, y, 0, 1 if convention.wins(x, y, 0, 0) else 0)
    won_cell = cell_index(1, x, y, 0, 0 if convention.wins(x, y, 0, 0) else 1)
    target = lost_cell if counts[lost_cell] + spare >= 0 else won_cell
    counts[target] += spare
    counts[cell_index(0, *s.generation, 0, 0)] = n - tests
    return Tally(tuple(counts))
