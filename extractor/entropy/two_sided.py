"""One node of a table's certificate: the best that two qubits can do at fixed measurement angles, bounded from above.

Trusted: `upper_bounds`. Derivations: TABLES.md beside this file, sections 2 (fixed angles) and 4 (rounding).

Cells of this module are (x, a, y, b); w[x, y] is the weight of a setting pair (the weights add up to 1) and
1 + e d[x, a, y, b] the factor of a cell, e = order - 1. All numbers are kept relative to 1 in units of e, so that
nothing is lost when the order is close to 1: a strategy's weighted sum is 1 + e v, and v <= 0 is validity.
Only arithmetic of `portable` is used.

Shapes: n nodes stand last. p (4, n) > 0 and v (4, 4, n): eigenvalues and eigenvectors (columns) of the trial state
rho0, basis |Alice Bob> = 00, 01, 10, 11. directions (2, 2, 2, n): [setting, outcome, component] of one side.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from extractor.errors import Defect
from extractor.entropy.portable import U, expm1, log, quarter_turn, rotate_towards_diagonal

FLOOR = 1e-9              # smallest eigenvalue of a trial state
_V_DEFECT = 2e-15         # largest entry of V^T V - 1 (as computed) that is accepted
_ENTRY = 2e-14            # TABLES.md 4: how far a computed component <e_i|m_k> may be from the exact one
STEP = 1.0                # of the ascent


@dataclass(frozen=True)
class Problem:
    """A table under one settings distribution: what is to be bounded.

    weights  w (2, 2) indexed [x, y], adding up to 1
    excess   d (2, 2, 2, 2) indexed [x, a, y, b], d >= -1/e: the factor of a cell is 1 + e d
    e        order - 1, in (0, 1]
    """

    weights: np.ndarray
    excess: np.ndarray
    e: float

    def __post_init__(self) -> None:
        finite = np.isfinite(self.weights).all() and np.isfinite(self.excess).all()
        if not (finite and 0 < self.e <= 1 and (self.weights > 0).all() and abs(self.weights.sum() - 1) < 1e-9):
            raise Defect("a table's weights or factors are not finite numbers of the right size")

    @property
    def largest(self) -> float:
        return float(np.max(np.abs(self.excess)))


def directions(fraction: np.ndarray) -> np.ndarray:
    """Outcome vectors of one side's two measurements with the angle pi * fraction between them, (2, 2, 2, n)."""
    c, s = quarter_turn(fraction)
    one, zero = np.ones_like(c), np.zeros_like(c)
    return np.array([[[one, zero], [zero, one]], [[c, s], [-s, c]]])


def _components(v: np.ndarray, alice: np.ndarray, bob: np.ndarray) -> np.ndarray:
    """<m_xayb|e_i>, shape (2, 2, 2, 2, 4, n)."""
    # half is indexed [x, a, component of Bob, i, n]
    half = alice[:, :, 0, None, None] * v[0:2] + alice[:, :, 1, None, None] * v[2:4]
    return (half[:, :, None, None, 0] * bob[None, None, :, :, 0, None]
            + half[:, :, None, None, 1] * bob[None, None, :, :, 1, None])


def gradient(problem: Problem, p: np.ndarray, v: np.ndarray, alice: np.ndarray,
             bob: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(H, rounding, size): H = (gradient of f at rho0 - 1)/e in the eigenbasis of rho0, (4, 4, n).

    rounding (n,): bound on the spectral norm of the error of H, given V within `_V_DEFECT` of orthogonality.
    """
    e, d = problem.e, problem.excess[..., None]
    kappa = e / (1 + e)                                               # 1 - 1/order
    m = _components(v, alice, bob)
    square = m * m
    log_p = log(p)
    z = p + p * expm1(-kappa * log_p)                                 # p^(1/order)
    t = ((square[..., 0, :] * z[0] + square[..., 1, :] * z[1]) + square[..., 2, :] * z[2]) + square[..., 3, :] * z[3]
    lowest = np.min(t.reshape(16, -1), axis=0)
    t_power = expm1(e * log(np.maximum(t, 1e-300))) / e               # (t^e - 1)/e
    a = d + 1 + t_power + e * (d + t_power + d * t_power) + e * e * (d * t_power)   # (1+ed)(1+e)(1+e t_power) = 1 + e a
    weighted = (a * problem.weights[:, None, :, None, None]).reshape(16, 1, -1)
    rows = m.reshape(16, 4, -1)
    first, second = (0, 0, 0, 0, 1, 1, 1, 2, 2, 3), (0, 1, 2, 3, 1, 2, 3, 2, 3, 3)
    # sum_k w a m_i m_j for the ten pairs i <= j
    sums = np.concatenate([_sum16(weighted * rows[:, i:i + 1] * rows[:, i:]) for i in range(4)])
    g = _slope_of_power(p.take(first, 0), p.take(second, 0), log_p.take(first, 0), log_p.take(second, 0), e)
    same = np.array([float(i == j) for i, j in zip(first, second)])[:, None]
    entries = sums + g * (same + e * sums)
    h = np.empty((4, 4, p.shape[1]))
    for entry, i, j in zip(entries, first, second):
        h[i, j] = h[j, i] = entry
    largest_g = np.max(np.abs(g), axis=0)
    factor = (1 + e) * (1 + e * problem.largest) * (1 + e * np.max(np.abs(t_power).reshape(16, -1),
            axis=0)) * (1 + e * largest_g)
    size = (factor - 1) / e
    rounding = 4 * ((800 * U + 8 * _ENTRY) * (size + 1) * (1 + e * largest_g) + 8 * _ENTRY * factor / np.sqrt(lowest))
    return h, rounding, size


def _sum16(x: np.ndarray) -> np.ndarray:
    """Sum over the first axis of length 16, in one fixed order."""
    x = x[:8] + x[8:]
    x = x[:4] + x[4:]
    x = x[:2] + x[2:]
    return x[0] + x[1]


def _slope_of_power(p: np.ndarray, q: np.ndarray, log_p: np.ndarray, log_q: np.ndarray, e: float) -> np.ndarray:
    """g with (p^(1/order) - q^(1/order))/(p - q) = 1 + e g; the derivative where p = q.

    With d = ln(p/q)/2 and k = 1 - 1/order the quotient is exp(-k ln(pq)/2) (cosh kd - d coth(d) sinh(kd)/d).
    """
    order = 1 + e
    kappa = e / order
    d = 0.5 * (log_p - log_q)
    square = d * d
    near = np.abs(d) < 0.1
    series = 1 + square * (1 / 3 + square * (-1 / 45 + square * (2 / 945 + square * (-1 / 4725))))
    d_coth = np.where(near, series, d * (p + q) / np.where(near, 1.0, p - q))
    x = kappa * d
    half = _sinhc(0.5 * x)
    cosh_part = 0.5 * x * (d / order) * half * half                      # (cosh x - 1)/e
    bracket = cosh_part - d_coth * _sinhc(x) / order                     # (S - 1)/e
    outer = expm1(-0.5 * kappa * (log_p + log_q)) / e
    return bracket + outer + e * bracket * outer


def _sinhc(x: np.ndarray) -> np.ndarray:
    """sinh(x)/x."""
    small = np.abs(x) < 1e-4
    y = expm1(np.where(small, 1.0, x))
    return np.where(small, 1 + x * x / 6, 0.5 * (y + y / (y + 1)) / np.where(small, 1.0, x))


def _tidied(v: np.ndarray) -> np.ndarray:
    """One Newton step towards the nearest orthogonal matrix."""
    out = 1.5 * v
    for i in range(4):
        for j in range(4):
            out[:, i] = out[:, i] - 0.5 * v[:, j] * _dot(v[:, i], v[:, j])
    return out


def _dot(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    return ((a[0] * b[0] + a[1] * b[1]) + a[2] * b[2]) + a[3] * b[3]


def upper_bounds(problem: Problem, p: np.ndarray, v: np.ndarray, alice: np.ndarray,
        bob: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """(upper, attained), both (n,), in units of e above 1.

    upper     no two-qubit strategy at these angles has a weighted sum above 1 + e upper, whatever p > 0 and v are;
              infinite where the check fails. f(rho) <= <grad f(rho0), rho> <= largest eigenvalue of grad f(rho0).
    attained  about what the trial state itself reaches; for the search only
    """
    h, rounding, size = gradient(problem, p, v, alice, bob)
    attained = (((p[0] * h[0, 0] + p[1] * h[1, 1]) + p[2] * h[2, 2]) + p[3] * h[3, 3]) / (((p[0] + p[1]) + p[2]) + p[3])
    diagonal = h.copy()
    rotate_towards_diagonal(diagonal, np.zeros_like(h), 6)
    guess = np.maximum(np.maximum(diagonal[0, 0], diagonal[1, 1]), np.maximum(diagonal[2, 2], diagonal[3, 3]))
    shift = 1e-12 * (1 + size)
    top = guess + shift
    proven = _positive(top, h) & _orthogonal(v) & (p[0] > 0) & (p[1] > 0) & (p[2] > 0) & (p[3] > 0)
    # Cholesky without a negative pivot proves top - H + D >= 0 with |D| <= 4 * 6 U * largest diagonal entry
    # (TABLES.md 4).
    upper = top + (100 * U) * (np.abs(top) + size + 1) + rounding
    return np.where(proven & np.isfinite(upper), upper, np.inf), attained


def _positive(top: np.ndarray, h: np.ndarray) -> np.ndarray:
    """Whether the elimination of top * 1 - H runs through with positive pivots."""
    k = -h
    for i in range(4):
        k[i, i] = top + k[i, i]
    good = np.ones(top.shape, dtype=bool)
    for i in range(4):
        good &= k[i, i] > 0
        pivot = np.where(k[i, i] > 0, k[i, i], 1.0)
        for r in range(i + 1, 4):
            ratio = k[r, i] / pivot
            for c in range(r, 4):
                k[r, c] = k[c, r] = k[r, c] - ratio * k[i, c]
    return good


def _orthogonal(v: np.ndarray) -> np.ndarray:
    good = np.ones(v.shape[2], dtype=bool)
    for i in range(4):
        for j in range(i, 4):
            good &= np.abs(_dot(v[:, i], v[:, j]) - (1.0 if i == j else 0.0)) <= _V_DEFECT
    return good


# ---- the trial states: trusted for nothing

def flat_states(n: int) -> tuple[np.ndarray, np.ndarray]:
    """The maximally mixed state, with eigenvectors slightly apart so that the ascent leaves symmetric points."""
    v = np.empty((4, 4, n))
    v[...] = np.array([[1.0, 1, 1, 1], [1, -1, 1, -1], [1, 1, -1, -1], [1, -1, -1, 1]])[:, :, None] / 2
    return np.full((4, n), 0.25), v


def ascend(problem: Problem, p: np.ndarray, v: np.ndarray, alice: np.ndarray, bob: np.ndarray, steps: int,
           tolerance: float) -> tuple[np.ndarray, np.ndarray]:
    """Mirror ascent ln rho <- ln rho + STEP/order * H with momentum on the trial states; nodes whose gap is below
    `tolerance` rest.

    Momentum starts anew at a node whose value falls (Nesterov's method in the logarithm of the state).
    """
    p, v = p.copy(), v.copy()
    active = np.arange(p.shape[1])
    some_p, some_v = p, v
    before, speed, memory = np.full(p.shape[1], -np.inf), np.ones(p.shape[1]), None
    for _ in range(steps):
        h, _, _ = gradient(problem, some_p, some_v, alice[..., active], bob[..., active])
        reached = ((some_p[0] * h[0, 0] + some_p[1] * h[1, 1]) + some_p[2] * h[2, 2]) + some_p[3] * h[3, 3]
        largest = np.maximum(np.maximum(np.abs(h[0, 0]), np.abs(h[1, 1])), np.maximum(np.abs(h[2, 2]), np.abs(h[3, 3])))
        k = STEP / (1 + problem.e) * np.minimum(1.0,
                40 / np.maximum(largest, 1.0)) * h       # no wild step from a poor state
        for i in range(4):
            k[i, i] = k[i, i] + log(some_p[i])
        plain = _conjugated(k, some_v.transpose(1, 0, 2))             # in the fixed basis
        if memory is not None:
            fell = reached < before
            speed = np.where(fell, 1.0, speed)
            following = 0.5 * (1 + np.sqrt(1 + 4 * speed * speed))
            k = k + np.where(fell, 0.0, (speed - 1) / following) * (k - _conjugated(memory, some_v))
            speed = following
        memory, before = plain, reached
        rotate_towards_diagonal(k, some_v, 3)
        exponent = np.stack([k[i, i] for i in range(4)])
        exponent = exponent - np.max(exponent, axis=0)
        new = 1 + expm1(np.maximum(exponent, -60.0))
        some_p = np.maximum(new / (((new[0] + new[1]) + new[2]) + new[3]), FLOOR)
        some_v = _tidied(some_v)
        p[:, active], v[:, :, active] = some_p, some_v
        spread = np.zeros(len(active))
        for i in range(4):                                            # Gershgorin: how far the gradient is from flat
            spread = np.maximum(spread, h[i, i] + sum(np.abs(h[i, j]) for j in range(4) if j != i) - reached)
        going = spread > tolerance
        if not np.any(going):
            break
        if not np.all(going):
            active, some_p, some_v = active[going], some_p[:, going], some_v[:, :, going]
            before, speed, memory = before[going], speed[going], memory[:, :, going]
    return p, v


def _conjugated(k: np.ndarray, v: np.ndarray) -> np.ndarray:
    """V^T K V for each node."""
    half = np.stack([((k[:, 0, None] * v[0] + k[:, 1, None] * v[1]) + k[:, 2, None] * v[2]) + k[:, 3, None] * v[3]])[0]
    return np.stack([((v[0, i] * half[0] + v[1, i] * half[1]) + v[2, i] * half[2]) + v[3,
            i] * half[3] for i in range(4)])
