"""What all simulated rigs share: the settings source, lost rounds, S of a distribution of cells."""

from __future__ import annotations

import math

import numpy as np

from extractor.errors import InputError
from extractor.model import SETTING_PAIRS, Convention, Settings


def check_chance(value: object, field: str) -> None:
    """InputError unless the value is a number in [0, 1]."""
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0.0 <= value <= 1.0:
        raise InputError(f"{value!r} is not a number from 0 to 1", code="out-of-range", field=f"/{field}")


def settings_probabilities(settings: Settings, setting_bias: tuple[float, float] = (0.0, 0.0)) -> np.ndarray:
    """P(t, x, y) as really drawn, shape (2, 2, 2): P(x = 0) and P(y = 0 | x) of test rounds shifted by the hidden
    bias."""
    gamma, p = settings.test_probability, np.array(settings.distribution).reshape(2, 2)
    first = p[0].sum() + setting_bias[0]
    later = p[:, 0] / p.sum(axis=1) + setting_bias[1]
    if not (0.0 <= first <= 1.0 and later.min() >= 0.0 and later.max() <= 1.0):
        raise InputError("shifts a chance of a setting out of 0..1", code="out-of-range", field="/setting_bias")
    out = np.zeros((2, 2, 2))
    out[1] = gamma * np.array([first, 1.0 - first])[:, None] * np.stack([later, 1.0 - later], axis=1)
    out[0][settings.generation] = 1.0 - gamma
    return out


def without_lost_rounds(joint: np.ndarray, convention: Convention, dropped_losses: float) -> np.ndarray:
    """Cell chances, shape (2, 2, 2, 2, 2), when this share of the lost test rounds vanishes; scaled to add up to 1."""
    kept = joint.copy()
    for x, y, a, b in np.ndindex(2, 2, 2, 2):
        if not convention.wins(x, y, a, b):
            kept[1, x, y, a, b] *= 1.0 - dropped_losses
    total = kept.sum()
    if total <= 0.0:
        raise InputError("no round would be left with these faults", code="bad-rig")
    return kept / total


def chsh_of(cells: np.ndarray, convention: Convention) -> float:
    """S of the test rounds of cell chances of shape (2, 2, 2, 2, 2) [t, x, y, a, b]."""
    total = []
    for x, y in SETTING_PAIRS:
        outcome = cells[1, x, y]
        if outcome.sum() <= 0.0:
            raise InputError(f"the settings {(x, y)} never come up, so there is no S", code="bad-rig",
                             field="/settings")
        total.append(convention.sign(x, y) * (np.trace(outcome) - outcome[0, 1] - outcome[1, 0]) / outcome.sum())
    return math.fsum(total)
