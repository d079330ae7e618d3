"""What a rig is expected to do: outcome probabilities P(a, b | x, y) from a calibration tally or a score. For the
search only.

Observed frequencies signal a little and may lie outside the quantum set, by chance; a table fitted to them would
chase noise.
So they are replaced by the quantum behaviour of largest likelihood: a mixture of two-qubit strategies, found like the
table itself
(`table_search.best_factors`), strategies being added where the likelihood rises most.
"""

from __future__ import annotations

import numpy as np

from extractor.entropy import two_sided
from extractor.entropy.table_search import best_factors, deterministic
from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, Convention, Tally

_PSEUDO_COUNT = 0.5          # added to every cell, so that no cell is expected never
_PLACES = 24


def of_score(score: float, convention: Convention) -> np.ndarray:
    """Behaviour of a noisy singlet-like rig at this winning probability, (2, 2, 2, 2) indexed [x, y, a, b]: all four
    pairs alike, unbiased outcomes."""
    behaviour = np.empty((2, 2, 2, 2))
    for x, y in SETTING_PAIRS:
        for a, b in SETTING_PAIRS:
            behaviour[x, y, a, b] = (score if convention.wins(x, y, a, b) else 1 - score) / 2
    return behaviour


def of_tally(tally: Tally, generation: tuple[int, int] = (0, 0)) -> np.ndarray:
    """Quantum behaviour of (nearly) the largest likelihood for a calibration tally, (2, 2, 2, 2) indexed [x, y, a, b].

    Generation rounds count as rounds of their settings. Raises InputError if a pair of settings has no rounds.
    """
    counts = tally.test_counts().astype(float)
    counts = counts + np.array(tally.counts[:16], dtype=float).reshape(2, 2, 2, 2)
    for x, y in SETTING_PAIRS:
        if not counts[x, y].sum():
            raise InputError(f"the calibration has no rounds at settings {x}{y}", code="empty-setting",
                    field="/calibration")
    total = counts.sum()
    counts = counts + _PSEUDO_COUNT
    nu = (counts / counts.sum()).reshape(16)
    weights = nu.reshape(4, 4).sum(axis=1).repeat(4)
    rows = deterministic().reshape(16, 16) * weights
    close = min(1e-3, 0.1 / total)
    best = rows.mean(axis=0)
    for _ in range(40):
        factors, multipliers = best_factors(nu, rows, 0.1 * close)
        best = rows.T @ multipliers / multipliers.sum()
        value, found = _worst((weights * factors).reshape(2, 2, 2, 2))
        if value < 1 + close:
            break
        rows = np.concatenate([rows, found.reshape(-1, 16) * weights])
    behaviour = best.reshape(2, 2, 2, 2)
    return behaviour / behaviour.sum(axis=(2, 3), keepdims=True)


def _worst(coefficients: np.ndarray) -> tuple[float, np.ndarray]:
    """(largest quantum value of a Bell expression, behaviours (n, 2, 2, 2, 2) of its local maxima); coefficients
    indexed [x, y, a, b]."""
    line = np.linspace(0, 1, _PLACES + 1)
    angles = np.array(np.meshgrid(line, line, indexing="ij")).reshape(2, -1)
    values, _ = _values(coefficients, angles)
    square = np.full((_PLACES + 3, _PLACES + 3), -np.inf)
    square[1:-1, 1:-1] = values.reshape(_PLACES + 1, _PLACES + 1)
    top = np.max([square[1 + i:_PLACES + 2 + i, 1 + j:_PLACES + 2 + j] for i in (-1, 0, 1) for j in (-1, 0, 1)], axis=0)
    peaks = np.flatnonzero(values >= top.reshape(-1))
    centre, h = angles[:, peaks[np.argsort(-values[peaks])][:8]], 0.5 / _PLACES
    steps = np.array([(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1)], dtype=float).T
    for _ in range(26):
        places = np.clip(centre[:, :, None] + h * steps[:, None, :], 0, 1).reshape(2, -1)
        around, _ = _values(coefficients, places)
        best = np.argmax(around.reshape(-1, 9), axis=1)
        centre = places[:, best + 9 * np.arange(len(best))]
        h *= 0.6
    values, found = _values(coefficients, centre)
    return float(values.max()), found


def _values(coefficients: np.ndarray, angles: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    alice, bob = two_sided.directions(angles[0]), two_sided.directions(angles[1])
    m = np.einsum("xasn,ybtn->nxyabst", alice, bob).reshape(-1, 2, 2, 2, 2, 4)
    operator = np.einsum("xyab,nxyabi,nxyabj->nij", coefficients, m, m)
    values, vectors = np.linalg.eigh(operator)
    return values[:, -1], np.einsum("nxyabi,ni->nxyab", m, vectors[:, :, -1]) ** 2
