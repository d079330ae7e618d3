"""Looks for the score table that earns an expected rig the most. Trusted for nothing: `two_sided_grid` certifies what
is found.

The programme. With expected frequencies nu(k) of the cells and R_s(k) what strategy s makes of cell k (settings'
probability
times Rényi power), maximise sum_k nu(k) ln F(k) subject to sum_k R_s(k) F(k) <= 1 for all s. Its dual is a fit of nu
by a mixture of
strategies: F = nu/mu, mu = sum_s l_s R_s, and the gain is the divergence of nu from mu. Strategies are added where
the present table is
exceeded most (cutting planes): the worst places of a grid, moved uphill, and the certifier's own worst nodes. The
inner programme is
solved by a primal-dual interior-point method in the scale d(ln F) * sqrt(nu), in which the curvature of the goal is 1
in every
direction, so that cells of probability 1e-8 and 1/4 are treated alike.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from extractor.entropy import two_sided
from extractor.entropy.search import best_in_log
from extractor.entropy.two_sided import Problem

LN2 = math.log(2)
_BASE = 16                       # places per side of the search grid


@dataclass
class Strategies:
    """A pool of strategies: trial states p (4, n), v (4, 4, n) and angles (2, n) in units of pi."""

    p: np.ndarray
    v: np.ndarray
    angles: np.ndarray

    @classmethod
    def none(cls) -> Strategies:
        return cls(np.empty((4, 0)), np.empty((4, 4, 0)), np.empty((2, 0)))

    def joined(self, p: np.ndarray, v: np.ndarray, angles: np.ndarray) -> Strategies:
        return Strategies(np.concatenate([self.p, p], 1), np.concatenate([self.v, v], 2),
                np.concatenate([self.angles, angles], 1))

    def kept(self, which: np.ndarray) -> Strategies:
        return Strategies(self.p[:, which], self.v[:, :, which], self.angles[:, which])

    def powers(self, order: float) -> np.ndarray:
        """Rényi powers (n, 2, 2, 2, 2) indexed [x, y, a, b]."""
        alice, bob = two_sided.directions(self.angles[0]), two_sided.directions(self.angles[1])
        m = two_sided._components(self.v, alice, bob)
        t = np.einsum("xaybin,in->nxyab", m * m, self.p ** (1 / order))
        return t ** order


def deterministic() -> np.ndarray:
    """The 16 local deterministic strategies as (16, 2, 2, 2, 2) indexed [x, y, a, b]."""
    rows = np.zeros((16, 2, 2, 2, 2))
    for s in range(16):
        for x in range(2):
            for y in range(2):
                rows[s, x, y, s >> (3 - x) & 1, s >> (1 - y) & 1] = 1
    return rows


@dataclass(frozen=True)
class Layout:
    """How settings probabilities turn Rényi powers into rows of 16 test cells and, if there are generation rounds, 4
    more.

    distributions  (e, 4): the allowed test distributions, each gives a row
    """

    gamma: float
    distributions: np.ndarray
    generation: tuple[int, int]

    def rows(self, powers: np.ndarray) -> np.ndarray:
        """(n * e, 16 or 20)"""
        tests = self.gamma * powers[:, None] * self.distributions.reshape(1, -1, 2, 2, 1, 1)
        flat = tests.reshape(-1, 16)
        if self.gamma == 1:
            return flat
        generation = (1 - self.gamma) * powers[:, self.generation[0], self.generation[1]].reshape(-1, 1, 4)
        return np.concatenate([flat,
                np.broadcast_to(generation, (len(powers), len(self.distributions), 4)).reshape(-1, 4)], axis=1)

    def problems(self, factors: np.ndarray, e: float) -> list[Problem]:
        """The certification problems of a table, one per allowed distribution."""
        found = []
        for distribution in self.distributions:
            weights = self.gamma * distribution.reshape(2, 2)
            mass = weights[:, :, None, None] * (factors[:16].reshape(2, 2, 2, 2) - 1)
            if self.gamma < 1:
                weights = weights.copy()
                weights[self.generation] += 1 - self.gamma
                mass[self.generation] += (1 - self.gamma) * (factors[16:].reshape(2, 2) - 1)
            found.append(Problem(weights, (mass / weights[:, :, None, None] / e).transpose(0, 2, 1, 3).copy(), e))
        return found


def best_factors(nu: np.ndarray, rows: np.ndarray, accuracy: float, least: float = 0.0) -> tuple[np.ndarray,
        np.ndarray]:
    """(F, multipliers of the rows): maximise sum nu ln F subject to rows @ F <= 1 and F >= least, to about `accuracy`
    in the goal."""
    strategies, root = len(rows), np.sqrt(nu)
    limits = np.ones(strategies)
    if least:
        rows, limits = np.concatenate([rows, -np.eye(len(nu))]), np.concatenate([limits, np.full(len(nu), -least)])
    m = len(rows)
    factors = np.full(len(nu), 0.5)
    slack = np.maximum(limits - rows @ factors, 1e-3)
    multipliers = np.full(m, 1.0 / m)
    for _ in range(120):
        gap = float(slack @ multipliers) / m
        primal = limits - rows @ factors - slack
        dual = nu / factors - rows.T @ multipliers
        if gap * m < accuracy and np.max(np.abs(primal)) < accuracy and np.max(np.abs(dual) * factors) < 1e-10:
            break
        scaled = rows * (factors / root)                       # rows in the scale y = root * dF/F
        solve = _newton(scaled, slack / multipliers)

        def step(tau: float, corrections: np.ndarray | float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
            target = (tau - corrections) / multipliers          # new slack, to first order, before the change of multipliers
            y, d_multipliers = solve(dual * factors / root, primal + slack - target)
            return y * factors / root, target - slack - slack / multipliers * d_multipliers, d_multipliers

        def longest(d_f: np.ndarray, d_s: np.ndarray, d_l: np.ndarray) -> float:
            ratios = np.concatenate([d_f / factors, d_s / slack, d_l / multipliers])
            worst = float(np.min(ratios))
            return min(1.0, -0.99 / worst) if worst < 0 else 1.0

        try:
            trial = step(0.0, 0.0)
            length = longest(*trial)
            predicted = float((slack + length * trial[1]) @ (multipliers + length * trial[2])) / m
            d_f, d_s, d_l = step(gap * max(predicted / gap, 0.0) ** 3, trial[1] * trial[2])
        except np.linalg.LinAlgError:
            break
        length = longest(d_f, d_s, d_l)
        factors, slack, multipliers = factors + length * d_f, slack + length * d_s, multipliers + length * d_l
    return factors / max(1.0, float(np.max(rows[:strategies] @ factors))), multipliers[:strategies]


def _newton(rows: np.ndarray, ratios: np.ndarray) -> Callable[[np.ndarray, np.ndarray], tuple[np.ndarray, np.ndarray]]:
    """Solver of y + rows^T l = top, rows y - ratios l = bottom: whole if small, else through y alone (a little less
    exact)."""
    n, m = rows.shape[1], len(rows)
    if m <= 250:
        k = np.zeros((n + m, n + m))
        k[:n, :n], k[:n, n:], k[n:, :n] = np.eye(n), rows.T, rows
        k[range(n, n + m), range(n, n + m)] = -ratios

        def whole(top: np.ndarray, bottom: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            both = np.linalg.solve(k, np.concatenate([top, bottom]))
            return both[:n], both[n:]
        return whole
    normal = np.eye(n) + rows.T @ (rows / ratios[:, None])

    def reduced(top: np.ndarray, bottom: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        y = np.linalg.solve(normal, top + rows.T @ (bottom / ratios))
        return y, (rows @ y - bottom) / ratios
    return reduced


class Oracle:
    """Finds strategies that exceed a table, warm from call to call."""

    def __init__(self) -> None:
        line = np.linspace(0, 1, _BASE + 1)
        self.angles = np.array(np.meshgrid(line, line, indexing="ij")).reshape(2, -1)
        self.p, self.v = two_sided.flat_states(self.angles.shape[1])
        self.steps = 25

    def worst(self, problem: Problem, count: int = 8) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """(values, p, v, angles) of up to `count` local maxima, moved uphill."""
        values = np.empty(self.angles.shape[1])
        for begin in range(0, len(values), 320):
            part = slice(begin, begin + 320)
            self.p[:, part], self.v[:, :, part], values[part] = _climb(problem, self.p[:, part], self.v[:, :, part],
                    self.angles[:, part], self.steps)
        self.steps = 8
        square = values.reshape(_BASE + 1, _BASE + 1)
        around = np.full((_BASE + 3, _BASE + 3), -np.inf)
        around[1:-1, 1:-1] = square
        top = np.max([around[1 + di:_BASE + 2 + di, 1 + dj:_BASE + 2 + dj] for di in (-1, 0, 1) for dj in (-1, 0, 1)],
                axis=0)
        peaks = np.flatnonzero((square >= top).reshape(-1))
        peaks = peaks[np.argsort(-values[peaks])][:count]
        return _refined(problem, self.p[:, peaks], self.v[:, :, peaks], self.angles[:, peaks])


def _climb(problem: Problem, p: np.ndarray, v: np.ndarray, angles: np.ndarray, steps: int) -> tuple[np.ndarray,
        np.ndarray, np.ndarray]:
    alice, bob = two_sided.directions(angles[0]), two_sided.directions(angles[1])
    p, v = two_sided.ascend(problem, p, v, alice, bob, steps, 1e-9)
    h, _, _ = two_sided.gradient(problem, p, v, alice, bob)
    return p, v, sum(p[i] * h[i, i] for i in range(4))


def _refined(problem: Problem, p: np.ndarray, v: np.ndarray, angles: np.ndarray) -> tuple[np.ndarray, np.ndarray,
        np.ndarray, np.ndarray]:
    """Moves each strategy's angles uphill: a 3 by 3 stencil, its quadratic fit, and a third of the step, seven
    times."""
    n, h = angles.shape[1], 0.5 / _BASE
    offsets = np.array([(di, dj) for di in (-1, 0, 1) for dj in (-1, 0, 1)], dtype=float).T           # (2, 9)
    values = np.full(n, -np.inf)
    for _ in range(7):
        centre = np.clip(angles, 0, 1)
        places = np.clip(centre[:, :, None] + h * offsets[:, None, :], 0, 1).reshape(2, -1)
        p9, v9, g = _climb(problem, np.repeat(p, 9, 1), np.repeat(v, 9, 2), places, 6)
        grid = g.reshape(n, 9)
        best = np.argmax(grid, axis=1) + 9 * np.arange(n)
        p, v, values, angles = p9[:, best], v9[:, :, best], g[best], places[:, best]
        f = grid.reshape(n, 3, 3)
        gi, gj = (f[:, 2, 1] - f[:, 0, 1]) / 2, (f[:, 1, 2] - f[:, 1, 0]) / 2
        hii, hjj = f[:, 2, 1] - 2 * f[:, 1, 1] + f[:, 0, 1], f[:, 1, 2] - 2 * f[:, 1, 1] + f[:, 1, 0]
        hij = (f[:, 2, 2] - f[:, 2, 0] - f[:, 0, 2] + f[:, 0, 0]) / 4
        det = hii * hjj - hij * hij
        good = (hii < 0) & (det > 0)
        det = np.where(good, det, 1.0)
        move = np.stack([-(hjj * gi - hij * gj) / det, -(hii * gj - hij * gi) / det])
        good &= np.all(np.abs(move) <= 1, axis=0)
        angles = np.where(good, np.clip(centre + h * np.clip(move, -1, 1), 0, 1), angles)
        h /= 3
    p, v, values = _climb(problem, p, v, angles, 10)
    return values, p, v, angles


@dataclass
class Search:
    """A table search for one rig and settings; strategies found at one order serve the next.

    nu           expected frequencies of the 16 test cells [x, y, a, b] and, if there are generation rounds, 4 more
    lowest       lowest credit of a cell, in bits
    settled      orders (minus 1) at which the strategies are known to suffice
    """

    nu: np.ndarray
    layout: Layout
    lowest: float
    pool: Strategies
    oracle: Oracle
    turn: int = 0
    settled: list[float] = field(default_factory=list)

    @classmethod
    def of(cls, nu: np.ndarray, layout: Layout, lowest: float) -> Search:
        return cls(nu, layout, lowest, Strategies.none(), Oracle())

    def fit(self, e: float, keep: int = 140) -> tuple[np.ndarray, float]:
        """(F, gain in bits per round) under the strategies known so far."""
        powers = np.concatenate([deterministic(), self.pool.powers(1 + e)])
        rows = self.layout.rows(powers)
        factors, multipliers = best_factors(self.nu, rows, 1e-7 * e, 2.0 ** (self.lowest * e))
        weights = multipliers.reshape(len(powers), -1).sum(axis=1)[16:]
        if len(weights) > keep:
            self.pool = self.pool.kept(np.argsort(-weights)[:keep])
        return factors, float(self.nu @ np.log(factors)) / (e * LN2)

    def improve(self, e: float, rounds: int, relative: float) -> tuple[np.ndarray, float]:
        """(F, gain): cutting planes until the worst excess found is below `relative` of the gain."""
        factors, gain = self.fit(e)
        quiet = 0
        for _ in range(rounds):
            found = self.layout.problems(factors, e)
            values, p, v, angles = self.oracle.worst(found[self.turn % len(found)])
            self.turn += 1
            aim = relative * max(gain, 1e-12) * LN2
            over = values > 0.1 * aim
            self.pool = self.pool.joined(p[:, over], v[:, :, over], angles[:, over])
            if np.max(values) < aim:
                quiet += 1
                if quiet == min(len(found), 4):
                    break
                continue
            quiet = 0
            factors, gain = self.fit(e)
        return factors, gain

    def best_excess(self, rounds: int, cost: float) -> float:
        """e = order - 1 that makes rounds * gain - cost/e largest under the strategies known so far."""
        low = min(max(cost / (2.5 * rounds), 1e-8), 0.9)
        return best_in_log(lambda e: rounds * self.fit(e)[1] - cost / e, low, 1.0, points=15)


def best_table(search: Search, rounds: int, cost: float, order: float | None, relative: float = 1e-3) -> tuple[float,
        np.ndarray, float]:
    """(e, F, gain in bits per round) for a run of `rounds` rounds that pays cost * order/(order - 1) bits; order None
    = search for it."""
    if order is not None:
        e = order - 1
        return e, *search.improve(e, 20, relative)
    e = min(max(math.sqrt(cost / rounds), 1e-7), 0.5)
    for _ in range(8):
        search.improve(e, 3, relative)
        before, e = e, search.best_excess(rounds, cost)
        if abs(math.log(e / before)) < 0.1:
            break
    return e, *search.improve(e, 20, relative)
