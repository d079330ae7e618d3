"""Outcome probabilities of one photon-pair-like round, and the state and angles that give the largest S.

State cos(theta)|00> + sin(theta)|11> mixed with white noise, visibility V. A measurement at (half-)angle alpha has the
observable cos(2 alpha) Z + sin(2 alpha) X; outcome 0 is its value +1. For the pure state
<A> = cos 2theta cos 2alpha,  <A B> = cos 2alpha cos 2beta + sin 2theta sin 2alpha sin 2beta, and V multiplies both.
"""

from __future__ import annotations

import itertools
import math
from functools import lru_cache

import numpy as np
from scipy import optimize

from extractor.model import Convention

Angles = tuple[tuple[float, float], tuple[float, float]]
NO_CLICK = 2


def pair_probabilities(state_angle: float, visibility: float, alpha: float, beta: float) -> np.ndarray:
    """P(a, b) of a pair whose detectors both click, shape (2, 2)."""
    single_a = visibility * math.cos(2 * state_angle) * math.cos(2 * alpha)
    single_b = visibility * math.cos(2 * state_angle) * math.cos(2 * beta)
    both = visibility * (math.cos(2 * alpha) * math.cos(2 * beta)
                         + math.sin(2 * state_angle) * math.sin(2 * alpha) * math.sin(2 * beta))
    sign = np.array([1.0, -1.0])
    p = 0.25 * (1.0 + single_a * sign[:, None] + single_b * sign[None, :] + both * np.outer(sign, sign))
    return np.clip(p, 0.0, None) / np.clip(p, 0.0, None).sum()


def click_probabilities(pair: np.ndarray, pair_probability: float, efficiency: tuple[float, float],
                        dark_counts: tuple[float, float]) -> np.ndarray:
    """P(a, b) with the third value NO_CLICK, shape (3, 3).

    A round holds a pair with chance pair_probability; a side sees its half with its efficiency.
    A side that sees nothing
    clicks all the same with its dark-count chance, either outcome alike.
    """
    idle = [np.array([d / 2, d / 2, 1 - d]) for d in dark_counts]
    seen = [eta * np.eye(2, 3) + (1 - eta) * nothing for eta, nothing in zip(efficiency, idle)]
    return pair_probability * seen[0].T @ pair @ seen[1] + (1 - pair_probability) * np.outer(*idle)


def textbook_angles(convention: Convention) -> Angles:
    """Angles with S = 2 sqrt 2 for the maximally entangled state: Alice 0, pi/4; Bob pi/8, -pi/8;
    relabelled for the convention."""
    return _relabelled(((0.0, math.pi / 4), (math.pi / 8, -math.pi / 8)), convention)


def _relabelled(angles: Angles, convention: Convention) -> Angles:
    """Angles for the convention from angles for minus (1, 1): swap settings; a flip inverts Bob's outcome,
    a turn by pi/2."""
    (a0, a1), (b0, b1) = angles
    turn = math.pi / 2 if convention.flip else 0.0
    mx, my = convention.minus
    return ((a0, a1) if mx else (a1, a0)), ((b0 + turn, b1 + turn) if my else (b1 + turn, b0 + turn))


def best_state_and_angles(efficiency: tuple[float, float], visibility: float, dark_counts: tuple[float, float],
                          no_click: tuple[int, int], convention: Convention,
                          state_angle: float | None = None) -> tuple[float, Angles]:
    """State angle and measurement angles of the largest S when a no-click counts as the given outcome.

    state_angle  keep this state and look for angles only; None: look for the state too
    Pairs per round do not matter, since empty rounds add a constant to S. Method: for a given state and given angles of
    Alice, S is linear in each of Bob's observables, so his angles are explicit; the rest is a simplex search
    from several starts (Eberhard, Phys. Rev. A 47, R747 (1993) for the problem).
    """
    turn_a = math.pi / 2 if no_click[0] else 0.0
    sign_b = -1.0 if no_click[0] ^ no_click[1] ^ int(convention.flip) else 1.0
    theta, (a0, a1), (b0, b1) = _search(tuple(efficiency), visibility, tuple(dark_counts), sign_b, state_angle)
    # Turning both observables by pi/2 inverts both outcomes: a no-click that counts as 1 becomes one that counts as 0.
    angles = ((a0 + turn_a, a1 + turn_a), (b0 + turn_a, b1 + turn_a))
    return theta, _relabelled(angles, convention)


@lru_cache(maxsize=256)
def _search(efficiency: tuple[float, float], visibility: float, dark_counts: tuple[float, float],
            sign_b: float, state_angle: float | None) -> tuple[float, tuple[float, float], tuple[float, float]]:
    """The search for minus (1, 1), Alice's no-click worth +1 and Bob's worth sign_b."""
    eta_a, eta_b = efficiency
    idle_a, idle_b = (1 - eta_a) * (1 - dark_counts[0]), (1 - eta_b) * (1 - dark_counts[1]) * sign_b

    def bob(theta: float, a0: float, a1: float) -> list[tuple[float, float]]:
        """(cos, sin) coefficients of Bob's two observables in S, y = 0: E_00 + E_10, y = 1: E_01 - E_11."""
        c0, c1, s0, s1 = math.cos(2 * a0), math.cos(2 * a1), math.sin(2 * a0), math.sin(2 * a1)
        tilt, skew = math.cos(2 * theta), math.sin(2 * theta)
        scale = visibility * eta_b
        return [(scale * (eta_a * (c0 + c1) + 2 * idle_a * tilt), scale * eta_a * skew * (s0 + s1)),
                (scale * eta_a * (c0 - c1), scale * eta_a * skew * (s0 - s1))]

    def loss(point: np.ndarray) -> float:
        theta, a0, a1 = (point[0], point[1], point[2]) if state_angle is None else (state_angle, point[0], point[1])
        constant = 2 * visibility * eta_a * idle_b * math.cos(2 * theta) * math.cos(2 * a0) + 2 * idle_a * idle_b
        return -(constant + sum(math.hypot(*pair) for pair in bob(theta, a0, a1)))

    textbook = [math.pi / 4, 0.0, math.pi / 4] if state_angle is None else [0.0, math.pi / 4]
    best, best_loss = np.array(textbook), loss(np.array(textbook))
    thetas = (0.7, 0.5, 0.3, 0.15, 0.06) if state_angle is None else (state_angle,)
    for theta, (u, v) in itertools.product(thetas, ((0.25, -1.0), (1.0, -0.3), (0.3, 2.0), (-1.5, 0.3))):
        start = [u * min(theta, 0.6), v * min(theta, 0.6)]
        found = optimize.minimize(loss, start if state_angle is not None else [theta, *start], method="Nelder-Mead",
                                  options={"xatol": 1e-9, "fatol": 1e-14, "maxiter": 2000})
        if found.fun < best_loss - 1e-10:
            best, best_loss = found.x, float(found.fun)
    theta, a0, a1 = (float(v) for v in best) if state_angle is None else (state_angle, float(best[0]), float(best[1]))
    if theta < 0.0:         # the same statistics, written with a state angle >= 0
        theta, a0, a1 = -theta, -a0, -a1
    (c, s), (c1, s1) = bob(theta, a0, a1)
    return theta, (a0, a1), (math.atan2(s, c) / 2, math.atan2(s1, c1) / 2)
