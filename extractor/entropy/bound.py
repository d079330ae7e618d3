"""The certified length of a tally under its declaration: every term evaluated exactly, listed, and rounded down.

Short and audited. The only inputs are the declaration and the tally; there is no clock, search or random choice in
here, so anybody can recompute the same bytes.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal

from extractor.errors import InputError
from extractor.entropy import accumulation, lengths, statements, table_validity, validity
from extractor.entropy.numerics import ZERO, down, exactly, floor_bits, number, up
from extractor.model import FACTOR_METHODS, MAXIMUM_ROUNDS, SETTING_PAIRS, CellCredit, Certificate, Declaration, Tally, Term, cells

MOST_LOG2_FACTOR = 900     # factors of a table stay below 2^900: their sums still fit a float

_FACTOR = ("estimation factors: Knill, Zhang, Fu 2018 (arXiv:1806.04553); Zhang, Fu, Knill, Phys. Rev. Research 2, 013016 (2020); "
           "one-round bound: Hahn, Philip, Tan, Brown 2025 (arXiv:2507.07365)")
_TABLE = ("estimation factors: Knill, Zhang, Fu 2018 (arXiv:1806.04553); Zhang, Fu, Knill, Phys. Rev. Research 2, 013016 (2020); "
          "validity over all two-qubit strategies: derived in extractor/entropy/TABLES.md")
_RENYI_HASH = "Dupuis, IEEE Trans. Inf. Theory 69, 7784 (2023) (arXiv:2105.05342)"
_SMOOTH_HASH = "Tomamichel, Schaffner, Smith, Renner, IEEE Trans. Inf. Theory 57, 5524 (2011) (arXiv:1002.2436)"
_EAT_2018 = "Dupuis, Fawzi, Renner (arXiv:1607.01796); Arnon-Friedman et al., Nat. Commun. 9, 459 (2018)"
_EAT_2019 = "Dupuis, Fawzi, IEEE Trans. Inf. Theory 65, 7596 (2019) (arXiv:1805.11652), Proposition V.3"


@dataclass(frozen=True)
class _Account:
    """What one method says about a tally: exact signed terms (name, bits, meaning, source), cells, numbers, and a refusal if any."""

    terms: tuple[tuple[str, Decimal, str, str], ...]
    cells: tuple[CellCredit, ...]
    numbers: dict[str, float | int | str]
    refusal: str | None = None


def check_declaration(declaration: Declaration) -> None:
    """Raise InputError unless the declared method covers the declared settings, table and output rule.

    The limits keep every intermediate number inside what `numerics` promises, and every certificate inside what JSON can carry.
    """
    if declaration.settings.test_probability * declaration.rounds < 1:
        raise InputError(f"with a test probability of {declaration.settings.test_probability!r} not even one of {declaration.rounds} rounds "
                         "is expected to be a test", code="no-tests", field="/settings/test_probability")
    with exactly():
        if declaration.method == "factor-table":
            table_validity.check_valid(declaration.table, declaration.settings)
            return
        if declaration.method == "factor-closed":
            validity.allowed_distributions(declaration.settings)
            validity.win_lose_factors(declaration.table, declaration.convention)
            if max(declaration.table.test + declaration.table.generation) * (declaration.order - 1) > MOST_LOG2_FACTOR:
                raise InputError(f"a credit times (order - 1) exceeds {MOST_LOG2_FACTOR}; no valid table has such a cell", code="bad-table",
                                 field="/table")
            return
        if not declaration.settings.uniform:
            raise InputError(f"{declaration.method} covers uniform test settings without bias only; use factor-table or factor-closed",
                             code="settings-not-covered", field="/settings")
        if declaration.output_rule != "fixed":
            raise InputError(f"{declaration.method} rests on one threshold fixed beforehand, so its length must be fixed too; "
                             "use factor-table or factor-closed for a length from credit", code="rule-not-covered", field="/output/rule")
        counted = "wins" if declaration.method == "eat-2018" else "losses"
        if declaration.acceptance.count != counted:
            raise InputError(f"{declaration.method} accepts on the number of {counted}", code="bad-acceptance", field="/acceptance/count")
        if declaration.acceptance.limit > declaration.rounds:
            raise InputError(f"{declaration.acceptance.limit} {counted} cannot come from {declaration.rounds} rounds", code="bad-acceptance",
                             field="/acceptance/limit")


def certify(declaration: Declaration, tally: Tally) -> Certificate:
    """The certificate of a tally: certified, or refused with the numbers that were missing.

    Raises InputError if the tally cannot belong to the declaration (too many rounds, cells that cannot occur).
    """
    check_declaration(declaration)
    _check_tally(declaration, tally)
    with exactly():
        account = _factor(declaration, tally) if declaration.method in FACTOR_METHODS else _accumulation(declaration, tally)
        classes, why = lengths.class_bits(declaration, tally.rounds)
        terms = account.terms + (("classes", -classes, f"cost of what becomes known besides the bits: {why}", "Hölder inequality over the classes, see lengths.class_bits"),)
        # Nobody gets more than the raw bits that exist, whatever was declared; far below zero the exact number says no more.
        available = max(min(floor_bits(sum((bits for _, bits, _, _ in terms), ZERO)), 2 * tally.rounds), -MAXIMUM_ROUNDS)
        listed = tuple(Term(name, down(bits), meaning, source) for name, bits, meaning, source in terms)
    wanted = declaration.output_bits
    reason = account.refusal
    length = 0
    if reason is None:
        if declaration.output_rule == "fixed":
            length = wanted if available >= wanted else 0
            reason = None if length else f"the run supports {max(available, 0)} bits, the declared length is {wanted} bits"
        else:
            length = min(max(available, 0), wanted)
            reason = None if length else f"credit and penalty add up to {available} bits: nothing can be certified"
    return Certificate(
        outcome="certified" if length else "refused",
        reason=reason,
        method=declaration.method,
        soundness=declaration.soundness,
        rounds=tally.rounds,
        declared_rounds=declaration.rounds,
        certified_length=length,
        available_bits=available,
        raw_bits=declaration.raw_bits,
        tally=tally,
        terms=listed,
        cells=account.cells,
        numbers=account.numbers,
        assumptions=statements.assumptions(declaration, tally.rounds),
        cautions=statements.CAUTIONS,
    )


def _check_tally(declaration: Declaration, tally: Tally) -> None:
    if tally.rounds > declaration.rounds:
        raise InputError(f"the tally has {tally.rounds} rounds, {declaration.rounds} were declared", code="too-many-rounds")
    gamma, generation = declaration.settings.test_probability, declaration.settings.generation
    for i, (t, x, y, _, _) in cells():
        if t == 0 and tally.counts[i] and (gamma == 1 or (x, y) != generation):
            raise InputError(
                "every round was declared a test round, but the tally has generation rounds" if gamma == 1 else
                f"generation rounds were declared with settings {list(generation)}, the tally has some at {[x, y]}",
                code="impossible-cell", field="/counts")


def _factor(declaration: Declaration, tally: Tally) -> _Account:
    """Credit of every occupied cell, the table's slack, and the cost of soundness. MATH section 3.

    factor-table: `check_declaration` has shown the table to be valid as it stands, so there is no slack to take off, and no digit
    of the bound appears. factor-closed: the slack is what its bound exceeds 1 by.
    """
    table, order = declaration.table, number(declaration.order)
    credit, earned = ZERO, []
    for i, (t, x, y, a, b) in cells():
        if tally.counts[i]:
            bits = table.test[i - 16] if t else table.generation[2 * a + b]
            credit += number(bits) * tally.counts[i]
            earned.append(CellCredit(t, x, y, a, b, tally.counts[i], bits))
    terms = [("credit", credit, "sum over cells of rounds times declared credit",
              _TABLE if declaration.method == "factor-table" else _FACTOR)]
    numbers: dict[str, float | int | str] = {"order": declaration.order}
    if declaration.method == "factor-table":
        numbers["validity"] = "no quantum strategy exceeds 1 under this table: confirmed before the tally was looked at"
    else:
        bound = validity.weighted_sum_bound(table, declaration.settings, declaration.convention)
        slack = validity.slack_bits(table, bound)
        terms.append(("slack", -slack * tally.rounds,
                      "rounds times log2(validity bound)/(order - 1): what the table exceeds validity by", _FACTOR))
        numbers |= {"validity_bound": up(bound), "slack_bits_per_round": up(slack)}
    cost = lengths.renyi_hash_cost(number(declaration.soundness), order)
    terms += [("soundness", -cost, "order/(order - 1) times log2(1/soundness)", _RENYI_HASH),
              ("hash constant", Decimal(2), "constant of the leftover hash bound", _RENYI_HASH)]
    return _Account(tuple(terms), tuple(earned), numbers)


def _accumulation(declaration: Declaration, tally: Tally) -> _Account:
    """The published bounds. They speak about the whole declared run and the declared event, so anything less is refused."""
    rule, gamma = declaration.acceptance, number(declaration.settings.test_probability)
    counts = tally.test_counts()
    wins = sum(int(counts[x, y, a, b]) for x, y in SETTING_PAIRS for a, b in SETTING_PAIRS if declaration.convention.wins(x, y, a, b))
    losses = int(counts.sum()) - wins
    smoothing, acceptance, hashing = lengths.eat_errors(declaration.soundness)
    n, tangent = declaration.rounds, number(rule.tangent)
    if declaration.method == "eat-2018":
        first, second = accumulation.eat_2018(n, rule.limit, gamma, tangent, smoothing, acceptance)
        terms = (("first order", first, "rounds times the tangent at the accepted number of wins", _EAT_2018),
                 ("second order", -second, "2 sqrt(n) (log2 13 + slope/test probability) sqrt(1 - 2 log2(eps_s eps_EA))", _EAT_2018))
        met, short = wins >= rule.limit, f"{wins} test rounds were won, at least {rule.limit} were declared"
    else:
        first, variance, third, event = accumulation.eat_2019(
            n, rule.limit, gamma, tangent, number(declaration.order), smoothing, acceptance)
        terms = (("first order", first, "rounds times the tangent at the accepted number of losses", _EAT_2019),
                 ("variance", -variance, "n (order - 1) (ln 2/2) V^2", _EAT_2019),
                 ("third order", -third, "n (order - 1)^2 K", _EAT_2019),
                 ("event", -event, "log2(2/(eps_s^2 eps_EA^2))/(order - 1)", _EAT_2019))
        met, short = losses <= rule.limit, f"{losses} test rounds were lost, at most {rule.limit} were declared"
    refusal = None
    if tally.rounds < n:
        refusal = f"{declaration.method} speaks about all {n} declared rounds, the run has {tally.rounds}; the factor methods can stop early"
    elif not met:
        refusal = f"the declared threshold was missed: {short}"
    numbers: dict[str, float | int | str] = {
        "wins": wins, "losses": losses, "accept": f"{rule.count} {'>=' if rule.count == 'wins' else '<='} {rule.limit}",
        "tangent": rule.tangent, "log2_smoothing_error": down(smoothing), "log2_acceptance_error": down(acceptance),
        "log2_hash_error": down(hashing)}
    if declaration.order is not None:
        numbers["order"] = declaration.order
    hash_term = ("hash", -lengths.smooth_hash_cost(hashing), "2 log2(1/(2 eps_h)), leftover hash lemma, purified-distance smoothing", _SMOOTH_HASH)
    return _Account(terms + (hash_term,), (), numbers, refusal)
