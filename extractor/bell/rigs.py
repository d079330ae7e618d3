"""Simulated rigs: an honest one with the usual imperfections and faults, and local ones that only pretend.

Rigs are for planning, rehearsal and tests; nothing simulated is random in the sense of a certificate. Every rig can be
simulated; those without memory also offer cell_probabilities, expected_tally_frequencies, chsh and
winning_probability.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from extractor.bell.memory import MemoryLocalRig
from extractor.bell.sampling import BLOCK_ROUNDS, CellSampler, generator, pack_cells
from extractor.bell.strategies import CELL_OF, STRATEGIES
from extractor.bell.two_qubits import (
    NO_CLICK, Angles, best_state_and_angles, click_probabilities, pair_probabilities, textbook_angles,
)
from extractor.bell.wiring import check_chance, chsh_of, settings_probabilities, without_lost_rounds
from extractor.errors import InputError
from extractor.model import CELLS, SETTING_PAIRS, Convention, RoundBatch, Settings, Tally

__all__ = [
    "LocalRig", "MemoryLocalRig", "Rig", "optimal_rig", "simulate", "simulate_many", "simulate_tally",
    "textbook_angles",
]


class _RoundByRound(ABC):
    """What rigs whose rounds do not depend on each other have in common."""

    convention: Convention

    @abstractmethod
    def cell_probabilities(self, at_round: int = 0) -> np.ndarray:
        """Chance of every cell, shape (2, 2, 2, 2, 2) indexed [t, x, y, a, b]."""

    def expected_tally_frequencies(self, at_round: int = 0) -> np.ndarray:
        """Expected share of each cell, shape (32,), in the order of a tally."""
        return self.cell_probabilities(at_round).reshape(CELLS)

    @property
    def chsh(self) -> float:
        """S of the first round under the rig's convention, faults included."""
        return chsh_of(self.cell_probabilities(), self.convention)

    @property
    def winning_probability(self) -> float:
        """w = 1/2 + S/8."""
        return 0.5 + self.chsh / 8.0

    def sampler(self, seed: int) -> _Blocks:
        """Draws this rig's rounds block by block."""
        return _Blocks(self, seed)


@dataclass(frozen=True)
class Rig(_RoundByRound):
    """An honest two-qubit rig.

    visibility        1 minus the share of white noise, [0, 1]
    efficiency        of the detectors of a, b, [0, 1]; a no-click gets the outcome no_click
    state_angle       theta of cos(theta)|00> + sin(theta)|11>; pi/4 is maximally entangled
    pair_probability  chance that a round holds a pair; multiple pairs are left out
    angles            ((a at x = 0, x = 1), (b at y = 0, y = 1)) in radians, or "optimal" for this state
    dark_counts       chance that a station that sees nothing clicks all the same
    Faults, none by default:
    setting_bias      hidden shift of P(x = 0) and P(y = 0 | x) of test rounds, against what `settings` says
    stuck             outcome a station always gives, or None
    dropped_no_clicks share of the rounds with a no-click that never reach the file (the detection loophole)
    dropped_losses    share of the lost test rounds that never reach the file
    visibility_drift  change of the visibility per million rounds, stepwise per block of 2^20 rounds, kept within [0, 1]
    """

    visibility: float = 1.0
    efficiency: tuple[float, float] = (1.0, 1.0)
    state_angle: float = math.pi / 4
    pair_probability: float = 1.0
    angles: Angles | str = "optimal"
    settings: Settings = Settings()
    convention: Convention = Convention()
    no_click: tuple[int, int] = (0, 0)
    dark_counts: tuple[float, float] = (0.0, 0.0)
    setting_bias: tuple[float, float] = (0.0, 0.0)
    stuck: tuple[int | None, int | None] = (None, None)
    dropped_no_clicks: float = 0.0
    dropped_losses: float = 0.0
    visibility_drift: float = 0.0

    def __post_init__(self) -> None:
        for name in ("visibility", "pair_probability", "dropped_no_clicks", "dropped_losses"):
            check_chance(getattr(self, name), name)
        for name in ("efficiency", "dark_counts"):
            if len(getattr(self, name)) != 2:
                raise InputError("needs one number per station", code="bad-rig", field=f"/{name}")
            for value in getattr(self, name):
                check_chance(value, name)
        for name, allowed in (("no_click", (0, 1)), ("stuck", (0, 1, None))):
            if len(getattr(self, name)) != 2 or any(value not in allowed for value in getattr(self, name)):
                raise InputError("needs one outcome, 0 or 1, per station", code="bad-rig", field=f"/{name}")
        for name in ("state_angle", "visibility_drift"):
            if not math.isfinite(getattr(self, name)):
                raise InputError("needs a finite number", code="bad-rig", field=f"/{name}")
        if self.angles != "optimal" and (isinstance(self.angles, str) or np.shape(self.angles) != (2, 2)
                                         or not np.all(np.isfinite(np.array(self.angles, dtype=float)))):
            raise InputError('needs two angles per station, or "optimal"', code="bad-rig", field="/angles")
        settings_probabilities(self.settings, self.setting_bias)

    @property
    def measured_angles(self) -> Angles:
        """The angles in use."""
        if self.angles != "optimal":
            return self.angles
        return best_state_and_angles(self.efficiency, self.visibility, self.dark_counts, self.no_click, self.convention,
                                     self.state_angle)[1]

    def cell_probabilities(self, at_round: int = 0) -> np.ndarray:
        """Chance of every cell at a round number (matters under drift), shape (2, 2, 2, 2, 2) [t, x, y, a, b]."""
        visibility = min(1.0, max(0.0, self.visibility + self.visibility_drift * at_round / 1e6))
        alpha, beta = self.measured_angles
        outcome = np.zeros((2, 2, 2, 2))
        for x, y in SETTING_PAIRS:
            clicks = click_probabilities(pair_probabilities(self.state_angle, visibility, alpha[x], beta[y]),
                                         self.pair_probability, self.efficiency, self.dark_counts)
            for a, b in np.ndindex(3, 3):
                kept = 1.0 - self.dropped_no_clicks if NO_CLICK in (a, b) else 1.0
                outcome[x, y, self._recorded(0, a), self._recorded(1, b)] += kept * clicks[a, b]
        joint = settings_probabilities(self.settings, self.setting_bias)[..., None, None] * outcome
        return without_lost_rounds(joint, self.convention, self.dropped_losses)

    def _recorded(self, station: int, outcome: int) -> int:
        if self.stuck[station] is not None:
            return self.stuck[station]
        return self.no_click[station] if outcome == NO_CLICK else outcome


@dataclass(frozen=True)
class LocalRig(_RoundByRound):
    """Boxes without entanglement: a mixture of the 16 deterministic strategies, drawn anew every round.

    weights  16 non-negative numbers, scaled to add up to 1; number 8 a(0) + 4 a(1) + 2 b(0) + b(1)
    setting_bias, dropped_losses  faults as in Rig
    """

    weights: tuple[float, ...]
    settings: Settings = Settings()
    convention: Convention = Convention()
    setting_bias: tuple[float, float] = (0.0, 0.0)
    dropped_losses: float = 0.0

    def __post_init__(self) -> None:
        w = np.array(self.weights, dtype=float)
        if w.shape != (STRATEGIES,) or not np.all(np.isfinite(w)) or w.min() < 0 or w.sum() <= 0:
            raise InputError("needs 16 non-negative weights, not all zero", code="bad-rig", field="/weights")
        check_chance(self.dropped_losses, "dropped_losses")
        settings_probabilities(self.settings, self.setting_bias)

    @classmethod
    def always(cls, strategy: int, **more: object) -> LocalRig:
        """The rig that plays one strategy all the time."""
        return cls(tuple(float(i == strategy) for i in range(STRATEGIES)), **more)

    def cell_probabilities(self, at_round: int = 0) -> np.ndarray:
        """Chance of every cell, shape (2, 2, 2, 2, 2) indexed [t, x, y, a, b]."""
        weights = np.array(self.weights, dtype=float)
        joint = np.zeros(CELLS)
        chances = settings_probabilities(self.settings, self.setting_bias).reshape(8)
        for strategy, weight in enumerate(weights / weights.sum()):
            joint[CELL_OF[strategy]] += weight * chances
        return without_lost_rounds(joint.reshape((2,) * 5), self.convention, self.dropped_losses)


class _Blocks:
    """Draws the blocks of a round-by-round rig; block k depends on seed and k only."""

    def __init__(self, rig: _RoundByRound, seed: int) -> None:
        self._rig, self._seed = rig, seed
        self._chances: np.ndarray | None = None
        self._table: CellSampler | None = None

    def block(self, k: int, rounds: int) -> np.ndarray:
        chances = self._rig.expected_tally_frequencies(k * BLOCK_ROUNDS + BLOCK_ROUNDS // 2 if k else 0)
        if self._chances is None or not np.array_equal(chances, self._chances):
            self._chances, self._table = chances, CellSampler(chances)
        return self._table.draw(generator(self._seed, k), rounds)


class Blocks(Protocol):
    """Draws block k of a simulation, in order from 0."""

    def block(self, k: int, rounds: int) -> np.ndarray:
        """Cells of the first `rounds` rounds of block k, uint8 (rounds,)."""


class SimulatedRig(Protocol):
    """Anything that can be simulated."""

    def sampler(self, seed: int) -> Blocks:
        """The blocks of the simulation with this seed."""


def optimal_rig(efficiency: float | tuple[float, float] = 1.0, pair_probability: float = 1.0,
                visibility: float = 1.0, *, settings: Settings = Settings(), convention: Convention = Convention(),
                no_click: tuple[int, int] | None = None, dark_counts: tuple[float, float] = (0.0, 0.0)) -> Rig:
    """The honest rig with the state and angles of the largest S.

    efficiency  one number for both stations or one each
    no_click    None: outcomes under which an empty round is won at three setting pairs (0,
                and 1 for b if the convention flips)
    """
    both = (float(efficiency),) * 2 if isinstance(efficiency, (int, float)) else tuple(efficiency)
    counted = no_click if no_click is not None else (0, int(convention.flip))
    start = Rig(visibility, both, pair_probability=pair_probability, settings=settings, convention=convention,
                no_click=counted, dark_counts=dark_counts, angles=textbook_angles(convention))   # checks the arguments
    theta, angles = best_state_and_angles(both, visibility, start.dark_counts, counted, convention)
    return Rig(visibility, both, theta, pair_probability, angles, settings, convention, counted, tuple(dark_counts))


def simulate(rig: SimulatedRig, rounds: int, seed: int) -> Iterator[RoundBatch]:
    """The rounds of a rig in batches of 2^20 (the last one shorter), reproducible from the seed.

    A shorter simulation is the beginning of a longer one; what is drawn does not depend on how rounds are split
    into segments later.
    """
    if isinstance(rounds, bool) or not isinstance(rounds, int) or rounds < 1:
        raise InputError(f"{rounds!r} is not a whole number >= 1", code="bad-number", field="/rounds")
    sampler = rig.sampler(seed)
    for k in range((rounds + BLOCK_ROUNDS - 1) // BLOCK_ROUNDS):
        yield pack_cells(sampler.block(k, min(BLOCK_ROUNDS, rounds - k * BLOCK_ROUNDS)))


def simulate_many(rig: SimulatedRig, rounds: int, runs: int, seed: int) -> np.ndarray:
    """Tallies of `runs` independent runs of `rounds` rounds each, int64 (runs, 32), without making the rounds."""
    if rounds < 1 or runs < 1:
        raise InputError("at least one round and one run are needed", code="bad-number", field="/rounds")
    random = generator(seed, 0, rounds, runs)
    if isinstance(rig, MemoryLocalRig):
        return rig.tallies(rounds, runs, random)
    total = np.zeros((runs, CELLS), dtype=np.int64)
    steps = range(0, rounds, BLOCK_ROUNDS) if getattr(rig, "visibility_drift", 0.0) else (0,)
    for start in steps:
        some = rounds if len(steps) == 1 else min(BLOCK_ROUNDS, rounds - start)
        chances = rig.expected_tally_frequencies(start + BLOCK_ROUNDS // 2 if start else 0)
        total += random.multinomial(some, chances / chances.sum(), size=runs)
    return total


def simulate_tally(rig: SimulatedRig, rounds: int, seed: int) -> Tally:
    """The tally of one such run; quick for any number of rounds unless the rig has memory."""
    return Tally(tuple(int(c) for c in simulate_many(rig, rounds, 1, seed)[0]))
