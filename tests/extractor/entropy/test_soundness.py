"""Brute force: no quantum or local strategy beats a bound that this project certifies."""

from __future__ import annotations

import itertools
from dataclasses import replace
from decimal import Decimal

import numpy as np
import pytest
from scipy import optimize

from extractor.entropy import bound, planning, search, single_round, validity
from extractor.entropy.numerics import exactly, number
from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, Convention, Settings
from tests.extractor.entropy import attacks

ORDERS = (1.0005, 1.01, 1.1, 1.5, 2.0)
SETTINGS = (
    Settings(),
    Settings(0.1),
    Settings(0.5, generation=(1, 0)),
    Settings(1.0, (0.3, 0.2, 0.26, 0.24)),
    Settings(0.7, (0.3, 0.2, 0.26, 0.24), (0, 1), 0.01),
    Settings(1.0, bias=0.02),
)
CONVENTIONS = [Convention(minus, flip) for minus in SETTING_PAIRS for flip in (False, True)]


def winning(probabilities: np.ndarray, convention: Convention) -> float:
    return sum(probabilities[x, y, a, b] for x, y, a, b in itertools.product((0, 1), repeat=4) if convention.wins(x, y, a, b)) / 4


def weighted_sum(table, settings: Settings, r: np.ndarray, distribution) -> float:
    scale = table.order - 1
    gx, gy = settings.generation
    tests = sum(distribution[2 * x + y] * np.exp2(scale * table.test[8 * x + 4 * y + 2 * a + b]) * r[x, y, a, b]
                for x, y, a, b in itertools.product((0, 1), repeat=4))
    generation = sum(np.exp2(scale * table.generation[2 * a + b]) * r[gx, gy, a, b] for a, b in SETTING_PAIRS)
    return settings.test_probability * tests + (1 - settings.test_probability) * generation


def certified_bound(table, settings: Settings, convention: Convention) -> float:
    with exactly():
        return float(validity.weighted_sum_bound(table, settings, convention))


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("settings", SETTINGS)
def test_no_strategy_exceeds_the_bound_of_a_table(order, settings):
    """For hundreds of two-qubit strategies of every kind, the table's weighted sum stays below its certified bound."""
    convention = Convention()
    tables = [search.closed_table(order, score, settings, convention) for score in (0.76, 0.80, 0.845)]
    bounds = [certified_bound(table, settings, convention) for table in tables]
    with exactly():
        extremes = [[float(v) for v in p] for p in validity.allowed_distributions(settings)]
    for rho, alice, bob in attacks.strategies(240, seed=int(order * 1000)):
        r, _ = attacks.powers(rho, alice, bob, order)
        for table, limit in zip(tables, bounds):
            assert max(weighted_sum(table, settings, r, p) for p in extremes) <= limit + 1e-12


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_every_convention_is_covered(convention):
    """The bound holds under each of the eight CHSH relabellings, and the strategy that wins under it comes close to it."""
    settings, order = Settings(), 1.05
    table = search.closed_table(order, 0.84, settings, convention)
    limit, best = certified_bound(table, settings, convention), 0.0
    swap = lambda side, flip: [m[::-1] for m in side] if flip else side   # noqa: E731
    for rho, alice, bob in attacks.strategies(60, seed=5):
        for relabel in itertools.product((0, 1), repeat=3):
            r, _ = attacks.powers(rho, alice[::-1] if relabel[0] else alice, swap(bob[::-1] if relabel[1] else bob, relabel[2]), order)
            best = max(best, weighted_sum(table, settings, r, (0.25,) * 4))
    assert 0.97 < best <= limit + 1e-12


@pytest.mark.parametrize("settings", [Settings(), Settings(0.2), Settings(1.0, bias=0.02)])
def test_the_best_attack_found_by_optimisation_stays_below(settings):
    """Local optimisation over real two-qubit strategies from many starts comes near the bound but not above it."""
    convention, order = Convention(), 1.05
    table = search.closed_table(order, 0.80, settings, convention)
    limit = certified_bound(table, settings, convention)
    with exactly():
        extremes = [[float(v) for v in p] for p in validity.allowed_distributions(settings)]

    def build(v):
        g = np.zeros((4, 4))
        g[np.tril_indices(4)] = v[:10]
        rho = g @ g.T
        rho /= max(np.trace(rho), 1e-12)
        side = lambda angles: [[(np.eye(2) + s * attacks.observable(np.array([np.sin(t), 0, np.cos(t)]))) / 2 for s in (1, -1)] for t in angles]   # noqa: E731
        return rho, side(v[10:12]), side(v[12:14])

    def loss(v):
        r, _ = attacks.powers(*build(v), order)
        return -max(weighted_sum(table, settings, r, p) for p in extremes)

    rng, best = np.random.default_rng(3), 0.0
    for _ in range(3):
        found = optimize.minimize(loss, rng.normal(size=14), method="Nelder-Mead", options={"maxiter": 1000, "maxfev": 1000})
        best = max(best, -found.fun)
    assert best <= limit + 1e-12
    assert best > 0.98 * limit


@pytest.mark.parametrize("order", [1.001, 1.1, 1.5, 2.0])
def test_one_sided_renyi_bound_is_never_above_the_exact_value(order):
    """Q(w) bounds the summed Rényi power of Alice's outcome from above at either setting, for every strategy tried."""
    convention = Convention()
    for rho, alice, bob in attacks.strategies(200, seed=11):
        _, p = attacks.powers(rho, alice, bob, order)
        w = winning(p, convention)
        with exactly():
            q = float(single_round.renyi_power(number(min(max(w, 0.0), 1.0)), number(order)))
        for x in (0, 1):
            assert attacks.marginal_powers(rho, alice, order, x) <= q + 1e-10


@pytest.mark.parametrize("order", ["1.0000001", "1.001", "1.2", "1.7", "2"])
def test_renyi_power_is_concave_and_decreasing(order):
    """The property on which the validity bound rests, checked on a fine grid (its proof is in the docstring)."""
    with exactly():
        a = Decimal(order)
        low, high = number(0.75), number(search.TSIRELSON)
        grid = [single_round.renyi_power(low + (high - low) * k / 300, a) for k in range(301)]
        steps = [q - p for p, q in zip(grid, grid[1:])]
        assert all(step < 0 for step in steps)
        assert all(later < earlier for earlier, later in zip(steps, steps[1:]))


def test_local_strategies_saturate_but_do_not_exceed():
    """All 16 local deterministic strategies keep the weighted sum at or below 1 after slack, for every order and setting law."""
    convention = Convention()
    for settings in SETTINGS:
        for order in ORDERS:
            table = search.closed_table(order, 0.79, settings, convention)
            limit = certified_bound(table, settings, convention)
            with exactly():
                extremes = [[float(v) for v in p] for p in validity.allowed_distributions(settings)]
            for a0, a1, b0, b1 in itertools.product((0, 1), repeat=4):
                r = np.zeros((2, 2, 2, 2))
                for x, y in SETTING_PAIRS:
                    r[x, y, (a0, a1)[x], (b0, b1)[y]] = 1
                assert max(weighted_sum(table, settings, r, p) for p in extremes) <= limit + 1e-12


def test_an_invalid_table_is_paid_for():
    """A table with extra credit has a bound above 1, and the slack takes at least the extra credit off every round."""
    settings, convention = Settings(), Convention()
    honest = search.closed_table(1.01, 0.8, settings, convention)
    greedy = replace(honest, test=tuple(c + 0.1 for c in honest.test), generation=tuple(c + 0.1 for c in honest.generation))
    with exactly():
        limit = validity.weighted_sum_bound(greedy, settings, convention)
        assert limit > 1
        assert float(validity.slack_bits(greedy, limit)) >= 0.1 - 1e-6


def test_tables_that_are_not_win_lose_are_refused():
    """factor-closed takes only the form its bound covers."""
    declaration = planning.declare(rig="Wren bench", rounds=10**6, method="factor-closed", soundness=1e-6, score=0.8)
    for i in range(16):
        crooked = list(declaration.table.test)
        crooked[i] += 0.01
        with pytest.raises(InputError, match="credit"):
            bound.check_declaration(replace(declaration, table=replace(declaration.table, test=tuple(crooked))))
    swapped = tuple(reversed(declaration.table.test[:4])) + declaration.table.test[4:]
    bound.check_declaration(replace(declaration, table=replace(declaration.table, test=swapped)))   # reversal maps (a,b) to (1-a,1-b): same form
    with pytest.raises(InputError):
        bound.check_declaration(replace(declaration, convention=Convention((0, 0), False)))
