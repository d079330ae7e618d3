"""Quantum strategies for two boxes, and what an adversary holding the purification sees: the brute force behind the bounds.

E holds a purification of rho_AB. For effects M the operator E is left with is, up to an isometry, rho^(1/2) M^T rho^(1/2),
so the Rényi power of an outcome is R = Tr (rho^(1/2a) M rho^(1/2a))^a (sandwiched, order a; M in place of M^T by the
choice of basis). Written independently of the program's own formulas.
"""

from __future__ import annotations

import numpy as np


def random_state(rng: np.random.Generator, rank: int, dimension: int = 4) -> np.ndarray:
    g = rng.normal(size=(dimension, rank)) + 1j * rng.normal(size=(dimension, rank))
    rho = g @ g.conj().T
    return rho / np.trace(rho).real


def observable(direction: np.ndarray) -> np.ndarray:
    x, y, z = direction / np.linalg.norm(direction)
    return np.array([[z, x - 1j * y], [x + 1j * y, -z]])


def effects(rng: np.random.Generator, noisy: bool) -> list[list[np.ndarray]]:
    """Two settings, two effects each, of one side: projective, or unsharp if noisy."""
    sides = []
    for _ in range(2):
        sharp = rng.uniform(0.3, 1) if noisy else 1.0
        m = (np.eye(2) + sharp * observable(rng.normal(size=3))) / 2
        sides.append([m, np.eye(2) - m])
    return sides


def near_optimal(rng: np.random.Generator, spread: float):
    """A state and measurements close to the Tsirelson point, disturbed by `spread`."""
    bell = np.array([1, 0, 0, 1]) / np.sqrt(2)
    psi = bell + spread * (rng.normal(size=4) + 1j * rng.normal(size=4))
    rho = np.outer(psi, psi.conj())
    weight = abs(rng.normal()) * spread
    rho = rho / np.trace(rho).real + weight * np.eye(4) / 4
    at = lambda angle: np.array([np.sin(angle), 0, np.cos(angle)]) + spread * rng.normal(size=3)   # noqa: E731
    def side(angles):
        return [[(np.eye(2) + s * observable(at(t))) / 2 for s in (1, -1)] for t in angles]
    measured = side((0, np.pi / 2)), side((np.pi / 4, -np.pi / 4))
    measured = tuple([[m[0], np.eye(2) - m[0]] for m in one] for one in measured)
    return rho / np.trace(rho).real, *measured


def powers(rho: np.ndarray, alice, bob, order: float) -> tuple[np.ndarray, np.ndarray]:
    """(R, P) of shape (2, 2, 2, 2) indexed [x, y, a, b]: Rényi powers and probabilities."""
    values, vectors = np.linalg.eigh(rho)
    root = (vectors * np.clip(values, 0, None) ** (1 / (2 * order))) @ vectors.conj().T
    r, p = np.zeros((2, 2, 2, 2)), np.zeros((2, 2, 2, 2))
    for x in range(2):
        for y in range(2):
            for a in range(2):
                for b in range(2):
                    m = np.kron(alice[x][a], bob[y][b])
                    spectrum = np.linalg.eigvalsh(root @ m @ root)
                    r[x, y, a, b] = np.sum(np.clip(spectrum, 0, None) ** order)
                    p[x, y, a, b] = np.trace(rho @ m).real
    return r, p


def marginal_powers(rho: np.ndarray, alice, order: float, x: int) -> float:
    """Sum over a of the Rényi power of Alice's outcome alone at setting x."""
    values, vectors = np.linalg.eigh(rho)
    root = (vectors * np.clip(values, 0, None) ** (1 / (2 * order))) @ vectors.conj().T
    return sum(np.sum(np.clip(np.linalg.eigvalsh(root @ np.kron(m, np.eye(2)) @ root), 0, None) ** order) for m in alice[x])


def strategies(count: int, seed: int):
    """Random strategies of all kinds: any rank, sharp and unsharp, complex, and near the Tsirelson point."""
    rng = np.random.default_rng(seed)
    for i in range(count):
        if i % 3:
            yield near_optimal(rng, 10 ** rng.uniform(-3, -0.3))
        else:
            yield random_state(rng, 1 + i % 4), effects(rng, i % 2 == 1), effects(rng, i % 4 == 3)
