"""A second opinion on a score table, written apart from `extractor.entropy`: standard library and numpy only.

Question: can any quantum strategy make the weighted sum  sum_z p(z) sum_c F(z, c) R(c | z)  exceed 1?
1. Two qubits, real projective measurements and angles phi_A, phi_B in [0, pi] between each side's two are enough,
   E holding the purification; then R = <m|rho^(1/a)|m>^a with product vectors m and a = order.
2. At fixed angles f(rho) is concave and homogeneous: f(rho) <= largest eigenvalue of f's gradient at ANY rho0 > 0.
3. Between the corners of a rectangle of angles f exceeds its largest corner by at most E_A + E_B (`excess_between`).
So: bound the corners, add E, cut where the result is above 1. Numbers are (value - 1)/(a - 1): valid means <= 0.
The derivations are in extractor/entropy/TABLES.md. Floating point: a corner errs by less than ROUNDING.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from typing import Any

import numpy as np

ROUNDING = 1e-8           # natural units per round; generous: the errors met are below 1e-10
DEPTH = 16                # angles are pi * k / 2^16
STEPS = 12                # ascent steps a corner gets each time it is looked at


def table_holds(declaration: Mapping[str, Any]) -> bool:
    """True if the table of a declaration document is shown to be valid under every settings distribution it allows."""
    e = declaration["order"] - 1
    cases = _cases(declaration["settings"], declaration["table"], e)
    try:
        return bool(cases) and all(np.isfinite(case).all() for pair in cases for case in pair) and all(
            _holds(*case, e) for case in cases)
    except np.linalg.LinAlgError:             # numbers no eigenvalue can be found for are no proof
        return False


def _cases(settings: Mapping[str, Any], table: Mapping[str, Any], e: float) -> list[tuple[np.ndarray, np.ndarray]]:
    """Per extreme settings distribution: weight of each pair [x, y], and (factor - 1)/e of each cell [x, y, a, b]."""
    gamma, generation = settings["test_probability"], tuple(settings["generation"])
    factor = lambda credits: np.expm1(e * math.log(2) * np.array(credits)) / e   # noqa: E731
    cases = []
    for p in _distributions(np.array(settings["distribution"]).reshape(2, 2), settings["bias"]):
        weights, mass = gamma * p, gamma * p[:, :, None, None] * factor(table["test"]).reshape(2, 2, 2, 2)
        weights[generation] += 1 - gamma
        mass[generation] += (1 - gamma) * factor(table["generation"]).reshape(2, 2)
        cases.append((weights, mass / weights[:, :, None, None]))
    return cases


def _distributions(p: np.ndarray, bias: float) -> list[np.ndarray]:
    """Distributions with each conditional probability at an end of its interval, x drawn first or y first."""
    if bias == 0:
        return [p]
    found = []
    for first in (p, p.T):
        head = first.sum(axis=1)
        for s in itertools.product((-bias, bias), repeat=3):
            top = np.array([head[0] + s[0], 1 - head[0] - s[0]])
            left = np.array([first[0, 0] / head[0] + s[1], first[1, 0] / head[1] + s[2]])
            moved = top[:, None] * np.stack([left, 1 - left], axis=1)
            found.append(moved if first is p else moved.T.copy())
    return found


def _holds(weights: np.ndarray, excess: np.ndarray, e: float) -> bool:
    log_states: dict[tuple[int, int], np.ndarray] = {}            # ln rho0 at each corner, kept; new ones start mixed
    bounds: dict[tuple[int, int], float] = {}
    size = 2 ** (DEPTH - 4)
    cells = [(i, j) for i in range(0, 2**DEPTH, size) for j in range(0, 2**DEPTH, size)]
    while cells:
        corners = sorted({(i + di, j + dj) for i, j in cells for di in (0, size) for dj in (0, size)})
        for start in range(0, len(corners), 256):
            some = corners[start:start + 256]
            angles = np.array(some).T * (math.pi / 2**DEPTH)
            logs = np.array([log_states.get(place, np.zeros((4, 4))) for place in some])
            logs, upper, reached = _climb(weights, excess, e, angles, logs)
            if not reached <= ROUNDING:
                return False                                      # a strategy that exceeds 1 was met
            for place, log_state, bound in zip(some, logs, upper):
                log_states[place], bounds[place] = log_state, min(bound, bounds.get(place, math.inf))
        between = excess_between(weights, excess, e, size)
        between += excess_between(weights.T, excess.transpose(1, 0, 3, 2), e, size)
        still_open = [(i, j) for i, j in cells
                      if not max(bounds[i + di, j + dj] for di in (0, size) for dj in (0, size)) + between + ROUNDING <= 0]
        if size == 1 or len(still_open) > 40_000:
            return False
        half, cells = size // 2, []
        for i, j in still_open:
            cells += [(i, j), (i + half, j), (i, j + half), (i + half, j + half)]
        size = half
    return True


def excess_between(weights: np.ndarray, excess: np.ndarray, e: float, size: int) -> float:
    """E_A/e: (a/2) T sum_y w max_b {|d_1 - d_0| r^2/2 + max(F) r^2 (ln(2/r) + 3/2)}, T = 4^(1-1/a), 2r the width."""
    r = size * math.pi / 2**DEPTH / 2
    total = 0.0
    for y in (0, 1):
        d0, d1 = excess[1, y, 0], excess[1, y, 1]                 # indexed by b
        each = np.abs(d1 - d0) * r * r / 2 + (1 + e * np.maximum(d0, d1)) * r * r * (math.log(2 / r) + 1.5)
        total += float(weights[1, y] * each.max())
    return (1 + e) / 2 * 4 ** (e / (1 + e)) * total * (1 + 1e-9)


def _climb(weights: np.ndarray, excess: np.ndarray, e: float, angles: np.ndarray,
           logs: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """(ln rho0, least bound, largest value met) after STEPS of ln rho <- ln rho + gradient; any rho0 gives a bound."""
    alice, bob = _outcomes(angles[0]), _outcomes(angles[1])
    m = np.einsum("nxas,nybt->nxyabst", alice, bob).reshape(-1, 4, 4, 4)   # [node, pair, outcomes, i]
    d, w = excess.reshape(4, 4), weights.reshape(4, 1)
    kappa, least = e / (1 + e), np.full(len(logs), np.inf)
    for _ in range(STEPS):
        values, v = np.linalg.eigh(logs)
        p = np.maximum(np.exp(values - values[:, -1:]), 1e-9)
        p /= p.sum(axis=1, keepdims=True)
        shrink = np.expm1(-kappa * np.log(p))                     # p^(1/a)/p - 1
        c = m @ v[:, None]                                        # components in the eigenbasis of rho0
        t = np.einsum("nzki,ni->nzk", c * c, p * (1 + shrink))
        a = _product(d, 1.0, np.expm1(e * np.log(t)) / e, e)    # (F a t^(a-1) - 1)/e
        x = np.einsum("nzk,nzki,nzkj->nij", w * a, c, c)
        g = _slopes(p, shrink, e)
        h = x + g * (np.eye(4) + e * x)                           # (gradient - 1)/e
        least = np.minimum(least, np.linalg.eigvalsh(h)[:, -1])
        reached = float(np.einsum("ni,nii->n", p, h).max())
        logs = v @ (h + np.log(p)[:, :, None] * np.eye(4)) @ v.transpose(0, 2, 1)
    return logs, least, reached


def _product(x: np.ndarray, y: float, z: np.ndarray, e: float) -> np.ndarray:
    """((1 + ex)(1 + ey)(1 + ez) - 1)/e without cancellation."""
    return x + y + z + e * (x * y + x * z + y * z) + e * e * x * y * z


def _slopes(p: np.ndarray, shrink: np.ndarray, e: float) -> np.ndarray:
    """(slope - 1)/e with slope = (p_i^(1/a) - p_j^(1/a))/(p_i - p_j), the derivative where they (nearly) agree."""
    difference, total = p[:, :, None] - p[:, None], p[:, :, None] + p[:, None]
    near = np.abs(difference) < 1e-5 * total
    y = p * shrink / e
    kappa = e / (1 + e)
    at_mean = np.expm1(-kappa * np.log(total / 2))
    derivative = (at_mean * (1 - kappa) - kappa) / e
    return np.where(near, derivative, (y[:, :, None] - y[:, None]) / np.where(near, 1.0, difference))


def _outcomes(phi: np.ndarray) -> np.ndarray:
    """Outcome vectors [node, setting, outcome, component] of measurements along 0 and phi."""
    c, s, one, zero = np.cos(phi / 2), np.sin(phi / 2), np.ones_like(phi), np.zeros_like(phi)
    return np.array([[[one, zero], [zero, one]], [[c, s], [-s, c]]]).transpose(3, 0, 1, 2)
