"""Planning: what is promised before a run is what an honest run gets."""

from __future__ import annotations

import numpy as np
import pytest

from extractor.entropy import bound, planning
from extractor.errors import InputError
from extractor.model import METHODS, SETTING_PAIRS, Convention, Settings, Tally, cell_index


def honest_tally(rng, declaration, score) -> Tally:
    """A multinomial tally of a rig at `score` with outcomes of equal marginals, as the simulated rigs give."""
    s, convention = declaration.settings, declaration.convention
    cells, weights = [], []
    for share, (x, y) in zip(s.distribution, SETTING_PAIRS):
        for a, b in SETTING_PAIRS:
            cells.append(cell_index(1, x, y, a, b))
            weights.append(s.test_probability * share * (score if convention.wins(x, y, a, b) else 1 - score) / 2)
    if s.test_probability < 1:
        for a, b in SETTING_PAIRS:
            cells.append(cell_index(0, *s.generation, a, b))
            weights.append((1 - s.test_probability) * (score if convention.wins(*s.generation, a, b) else 1 - score) / 2)
    counts = [0] * 32
    for cell, n in zip(cells, rng.multinomial(declaration.rounds, np.array(weights) / sum(weights))):
        counts[cell] = int(n)
    return Tally(tuple(counts))


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("gamma", [1.0, 0.2])
def test_honest_rigs_reach_the_reliable_length(method, gamma):
    """A declaration made at 99 % confidence is met by an honest rig about 99 times in 100 (300 simulated runs, at least 94 %)."""
    declaration = planning.declare(rig="Wren bench", rounds=10**7, method=method, soundness=1e-6, score=0.82, settings=Settings(gamma))
    rng = np.random.default_rng(20)
    met = sum(bound.certify(declaration, honest_tally(rng, declaration, 0.82)).outcome == "certified" for _ in range(300 if gamma == 1 else 100))
    assert met >= (0.94 * 300 if gamma == 1 else 94)


def test_plans_agree_with_certificates():
    """The planned length is the certified length of a run with exactly the expected statistics."""
    plan = planning.plan(rounds=10**8, score=0.8, soundness=1e-8, method="factor-closed", output_rule="credit")
    declaration = planning.declare(rig="Wren bench", rounds=10**8, score=0.8, soundness=1e-8, method="factor-closed", output_rule="credit")
    certificate = bound.certify(declaration, planning._expected(declaration, 0.8, 0.5))
    assert plan.certified_length == certificate.certified_length
    assert plan.seed_bits == certificate.seed_bits
    assert plan.reliable_length < plan.certified_length


def test_the_chosen_order_is_the_best():
    """No order within a factor of the chosen one gives more."""
    best = planning.plan(rounds=10**7, score=0.79, soundness=1e-9, method="factor-closed")
    for factor in (0.5, 0.9, 1.1, 2.0):
        other = planning.plan(rounds=10**7, score=0.79, soundness=1e-9, method="factor-closed", order=1 + (best.order - 1) * factor)
        assert other.certified_length <= best.certified_length


def test_rounds_for_a_length():
    """rounds_for finds the fewest rounds: they reach the length (reliably if it is fixed), slightly fewer do not."""
    for rule, measure in (("fixed", "reliable_length"), ("credit", "certified_length")):
        arguments = dict(score=0.8, soundness=1e-9, method="factor-closed", output_rule=rule)
        rounds = planning.rounds_for(10**5, **arguments)
        assert getattr(planning.plan(rounds=rounds, **arguments), measure) >= 10**5
        assert getattr(planning.plan(rounds=rounds - rounds // 10**3, **arguments), measure) < 10**5
    with pytest.raises(InputError, match="more than"):
        planning.rounds_for(10**9, score=0.7500001, soundness=1e-9, method="factor-closed")


def test_comparison_names_what_does_not_apply():
    """compare answers for every method: a plan, or the reason why not."""
    answers = planning.compare(rounds=10**7, score=0.8, soundness=1e-9, settings=Settings(bias=1e-4))
    assert all(isinstance(a, planning.Plan) for a in answers[:2])
    assert all(isinstance(a, InputError) and "factor-table" in str(a) for a in answers[2:])


@pytest.mark.parametrize("score", [0.75, 0.5, 0.86, 1.0, float("nan"), "0.8", True])
def test_impossible_scores_are_refused(score):
    """Scores at or below the local bound, above the Tsirelson bound, or not numbers are refused in words."""
    with pytest.raises(InputError, match="local bound|Tsirelson|not"):
        planning.plan(rounds=1000, score=score, soundness=1e-3, method="factor-closed")


@pytest.mark.parametrize("changes", [dict(rounds=0), dict(rounds=1.5), dict(soundness=0), dict(soundness=1), dict(soundness=-1), dict(method="best"),
                                     dict(order=1.0), dict(order=3.0), dict(settings=Settings(1.0, (0.97, 0.01, 0.01, 0.01), bias=0.02))])
def test_bad_arguments_are_named(changes):
    """Every bad argument is an InputError, never another exception."""
    with pytest.raises(InputError):
        planning.plan(**(dict(rounds=1000, score=0.8, soundness=1e-3, method="factor-closed") | changes))


def test_nothing_to_certify_is_said_before_the_run():
    """declare refuses to write a declaration that an honest rig would not meet."""
    with pytest.raises(InputError, match="does not reach a single bit"):
        planning.declare(rig="Wren bench", rounds=1000, method="eat-2018", soundness=1e-9, score=0.8)
    for method in METHODS:
        with pytest.raises(InputError, match="probably be refused"):
            planning.declare(rig="Wren bench", rounds=10**7, method=method, soundness=1e-9, score=0.8, output_bits=99 * 10**5)


def test_score_of_a_calibration_weighs_settings_equally():
    """The calibration score is a mean over setting pairs, so unequal settings do not bias it."""
    counts = [0] * 32
    for (x, y), (won, lost) in zip(SETTING_PAIRS, ((90, 10), (800, 200), (9, 1), (70, 30))):
        flip = int(not Convention().wins(x, y, 0, 0))
        counts[cell_index(1, x, y, 0, flip)], counts[cell_index(1, x, y, 0, 1 - flip)] = won, lost
    assert planning.score_of(Tally(tuple(counts)), Convention()) == pytest.approx((0.9 + 0.8 + 0.9 + 0.7) / 4)
    with pytest.raises(InputError, match="no test rounds"):
        planning.score_of(Tally.empty(), Convention())
