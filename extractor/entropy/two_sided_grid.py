"""Is a score table valid? A bound on its weighted sum over every quantum strategy, by an adaptive grid over two angles.

Trusted. TABLES.md section 1 reduces every strategy to two qubits with one angle per side, section 2 bounds one pair
of angles
(`two_sided.upper_bounds`), section 3 the angles in between: over a cell of half widths r_A, r_B the best value
exceeds the
largest bound of its four corners by at most E_A(r_A) + E_B(r_B). Where the result is too large the cell is cut into
four.
The trial states come from an ascent that is trusted for nothing: a poor one makes the bound worse, never wrong.

Everything is in units of e = order - 1 above 1: "excess" v stands for a weighted sum of 1 + e v. Every operation is
one of
`portable`, so the answer is the same on every machine.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from extractor.entropy import two_sided
from extractor.entropy.portable import expm1, log
from extractor.entropy.two_sided import Problem

DEPTH = 16                       # angles are pi * i / 2^16
_FIRST = 12                      # first grid: 2^4 cells per side
_CHUNK = 384                     # nodes worked on together (fits the cache)
_ROUNDINGS = 1 + 1e-9            # TABLES.md 4: on E and on the position of a node
NODE_LIMIT = 60_000


@dataclass(frozen=True)
class GridBound:
    """What the grid found. bound: no strategy has an excess above it. attained: about the excess of the best strategy
    met.

    nodes    number of pairs of angles evaluated
    places   (2, nodes) angles in units of pi / 2^DEPTH; values, p, v: attained excess and trial state of each (for
             the search)
    """

    bound: float
    attained: float
    nodes: int
    places: np.ndarray
    values: np.ndarray
    p: np.ndarray
    v: np.ndarray


def interpolation_error(problem: Problem, side: int, width: np.ndarray) -> np.ndarray:
    """E/e for cells that are `width` (units of pi / 2^DEPTH) wide in the angle of side 0 (Alice) or 1 (Bob).
    TABLES.md 3."""
    e, order = problem.e, 1 + problem.e
    # indexed [moving setting, its outcome, other side's setting, its outcome]
    excess = problem.excess if side == 0 else problem.excess.transpose(2, 3, 0, 1)
    weights = (problem.weights if side == 0 else problem.weights.T)[1]                # per setting of the other side
    r = width * (0.5 * np.pi / 2**DEPTH)
    square = r * r
    spread = square * (log(2 / r) + 1.5)
    total = np.zeros(np.shape(r))
    for y in range(2):
        worst = np.zeros(np.shape(r))
        for b in range(2):
            d0, d1 = float(excess[1, 0, y, b]), float(excess[1, 1, y, b])
            worst = np.maximum(worst, abs(d1 - d0) * (0.5 * square) + (1 + e * max(d0, d1)) * spread)
        total = total + float(weights[y]) * worst
    trace = 1 + expm1(np.full(np.shape(r), 2 * (e / order) * float(log(np.array(2.0)))))  # 4^(1 - 1/order)
    return 0.5 * order * trace * total * _ROUNDINGS


def best_local(problem: Problem) -> float:
    """Excess of the best local deterministic strategy."""
    best = -np.inf
    for s in range(16):
        total = 0.0
        for x in range(2):
            for y in range(2):
                total += float(problem.weights[x, y]) * float(problem.excess[x, s >> x & 1, y, s >> (2 + y) & 1])
        best = max(best, total)
    return best


class _Nodes:
    """The nodes evaluated so far, by place."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.at: dict[int, int] = {}
        self.places = np.empty((2, 0), dtype=np.int64)
        self.upper, self.attained, self.stuck = np.empty(0), np.empty(0), np.empty(0, dtype=bool)
        self.p, self.v = np.empty((4, 0)), np.empty((4, 4, 0))

    def add(self, places: np.ndarray, parents: np.ndarray | None) -> None:
        """Evaluate new places; trial states start from the nodes `parents` or from the mixed state."""
        if parents is None:
            p, v = two_sided.flat_states(places.shape[1])
        else:
            p, v = self.p[:, parents], self.v[:, :, parents]
        start = self.places.shape[1]
        for k, key in enumerate((places[0] << 20) + places[1]):
            self.at[int(key)] = start + k
        n = places.shape[1]
        self.places = np.concatenate([self.places, places], axis=1)
        self.p, self.v = np.concatenate([self.p, p], axis=1), np.concatenate([self.v, v], axis=2)
        self.upper = np.concatenate([self.upper, np.full(n, np.inf)])
        self.attained = np.concatenate([self.attained, np.full(n, -np.inf)])
        self.stuck = np.concatenate([self.stuck, np.zeros(n, dtype=bool)])
        self.improve(np.arange(start, start + n), 6, 0.0)

    def improve(self, which: np.ndarray, steps: int, tolerance: float) -> None:
        for begin in range(0, len(which), _CHUNK):
            some = which[begin:begin + _CHUNK]
            alice, bob = (two_sided.directions(self.places[side, some] / 2.0**DEPTH) for side in (0, 1))
            p, v = two_sided.ascend(self.problem, self.p[:, some], self.v[:, :, some], alice, bob, steps, tolerance)
            upper, attained = two_sided.upper_bounds(self.problem, p, v, alice, bob)
            self.p[:, some], self.v[:, :, some] = p, v
            gap = self.upper[some] - np.maximum(self.attained[some], attained)
            self.stuck[some] = self.upper[some] - upper < 0.3 * gap      # more steps will not lower the bound soon
            self.upper[some], self.attained[some] = np.minimum(upper, self.upper[some]), attained

    def find(self, i: np.ndarray, j: np.ndarray) -> np.ndarray:
        return np.array([self.at[int(key)] for key in (i << 20) + j], dtype=np.int64)


def excess_bound(problem: Problem, *, target: float | None = None, tolerance: float = 0.0,
        limit: int = NODE_LIMIT) -> GridBound:
    """Bound on the excess of a table.

    With `target`, stops as soon as the bound is proven to be at most the target, or a strategy above it is met (then the
    bound is infinite). Otherwise stops when the bound is within `tolerance` of the best strategy met. At most about
    `limit` nodes; what is reached by then is returned, sound in any case.
    """
    nodes = _Nodes(problem)
    step = 1 << _FIRST
    line = np.arange(0, (1 << DEPTH) + 1, step)
    grid = np.array(np.meshgrid(line, line, indexing="ij")).reshape(2, -1)
    nodes.add(grid, None)
    i, j = np.array(np.meshgrid(line[:-1], line[:-1], indexing="ij")).reshape(2, -1)
    size = np.full(i.shape, step)
    local = best_local(problem)
    settled = -np.inf                                  # largest bound of the cells that need no more work
    for _ in range(DEPTH * 4):
        corners = np.stack([nodes.find(i + di * size, j + dj * size) for di in (0, 1) for dj in (0, 1)])
        error = interpolation_error(problem, 0, size) + interpolation_error(problem, 1, size)
        for _ in range(12):
            best = max(local, float(np.max(nodes.attained)))
            goal = target if target is not None else best + tolerance
            if target is not None and best > target:
                return _result(nodes, np.inf)
            bounds = np.max(nodes.upper[corners], axis=0) + error
            open_cells = ~(bounds <= goal)             # what is not shown to be at most the goal stays open, NaN included
            # Where the corners' gap to what their states attain is what is missing, better states help; else smaller
            # cells.
            hopeful = open_cells & (np.max(nodes.attained[corners], axis=0) + error <= goal)
            touched = np.unique(corners[hopeful & (nodes.upper[corners] + error > goal)])
            touched = touched[~nodes.stuck[touched]]
            if not len(touched):
                break
            nodes.improve(touched, 8, 0.0)
        settled = max(settled, float(np.max(bounds[~open_cells], initial=-np.inf)))
        if not np.any(open_cells):
            return _result(nodes, settled)
        if len(nodes.upper) > limit or int(np.min(size[open_cells])) < 2:
            return _result(nodes, np.inf if target is not None else float(max(settled, np.max(bounds))))
        i, j, size = i[open_cells], j[open_cells], size[open_cells] // 2
        parents = corners[:, open_cells]
        wanted_i = np.concatenate([i + size, i, i + size, i + 2 * size, i + size])
        wanted_j = np.concatenate([j, j + size, j + size, j + size, j + 2 * size])
        source = np.concatenate([parents[0], parents[0], parents[0], parents[3], parents[3]])
        keys, first = np.unique((wanted_i << 20) + wanted_j, return_index=True)
        new = np.array([k for key, k in zip(keys.tolist(), first.tolist()) if key not in nodes.at], dtype=np.int64)
        if len(new):
            nodes.add(np.stack([wanted_i[new], wanted_j[new]]), source[new])
        i, j = (np.concatenate([i, i, i + size, i + size]), np.concatenate([j, j + size, j, j + size]))
        size = np.concatenate([size] * 4)
    return _result(nodes, np.inf)


def _result(nodes: _Nodes, bound: float) -> GridBound:
    return GridBound(bound, max(best_local(nodes.problem), float(np.max(nodes.attained))), len(nodes.upper),
            nodes.places, nodes.attained, nodes.p, nodes.v)
