"""Local strategies: what boxes without entanglement can do, with and without memory.

A deterministic strategy fixes both outcomes for both settings. There are 16, numbered 8 a(0) + 4 a(1) + 2 b(0) +
b(1); every local model is a mixture of them, and one with memory picks the mixture anew from all earlier rounds.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from extractor.model import CELLS, SETTING_PAIRS, Convention, cell_index

STRATEGIES = 16


def outcomes(strategy: int, x: int, y: int) -> tuple[int, int]:
    """(a, b) of a deterministic strategy at settings (x, y)."""
    return strategy >> (3 - x) & 1, strategy >> (1 - y) & 1


def _table() -> np.ndarray:
    cells = np.empty((STRATEGIES, 8), dtype=np.uint8)
    for strategy in range(STRATEGIES):
        for index in range(8):
            t, x, y = index >> 2, index >> 1 & 1, index & 1
            cells[strategy, index] = cell_index(t, x, y, *outcomes(strategy, x, y))
    return cells


CELL_OF = _table()          # uint8 (16, 8): cell index a strategy produces at 4 t + 2 x + y


@lru_cache
def losing_at(convention: Convention) -> tuple[int, int, int, int]:
    """For each setting pair the lower-numbered of the two strategies that lose there and win at the other three."""
    chosen = []
    for pair in SETTING_PAIRS:
        for strategy in range(STRATEGIES):
            lost = [p for p in SETTING_PAIRS if not convention.wins(*p, *outcomes(strategy, *p))]
            if lost == [pair]:
                chosen.append(strategy)
                break
    return tuple(chosen)


@dataclass
class Past:
    """What boxes with memory know before they choose: everything, for `runs` runs side by side. Policies only read it.

    tallies   counts so far, int64 (runs, 32);  last: counts of the last stretch, int64 (runs, 32)
    seen      rounds so far per 4 t + 2 x + y, int64 (runs, 8)
    strategy  strategy of the last stretch, (runs,), -1 before the first
    random    private randomness of the boxes
    """

    convention: Convention
    tallies: np.ndarray
    last: np.ndarray
    seen: np.ndarray
    strategy: np.ndarray
    random: np.random.Generator

    @classmethod
    def nothing(cls, convention: Convention, runs: int, random: np.random.Generator) -> Past:
        tallies, last, seen = (np.zeros((runs, width), dtype=np.int64) for width in (CELLS, CELLS, 8))
        return cls(convention, tallies, last, seen, np.full(runs, -1, dtype=np.int64), random)

    @property
    def runs(self) -> int:
        return len(self.tallies)


Policy = Callable[[Past], np.ndarray]     # -> strategy of each run for the next stretch, integers (runs,)


def bet_on_rarest(past: Past) -> np.ndarray:
    """Lose where settings came up least often so far: the best use of a biased settings source."""
    return np.array(losing_at(past.convention))[past.seen[:, 4:].argmin(axis=1)]


def switch_after_loss(past: Past) -> np.ndarray:
    """Keep the strategy after a stretch with at most a quarter of losses, else lose at a pair picked at random."""
    choices = np.array(losing_at(past.convention))
    won = _won_cells(past.convention)
    losses = past.last[:, 16:] @ ~won
    tests = past.last[:, 16:].sum(axis=1)
    keep = (past.strategy >= 0) & (4 * losses <= tests)
    return np.where(keep, past.strategy, choices[past.random.integers(0, 4, past.runs)])


def stop_when_ahead(past: Past) -> np.ndarray:
    """Make decisive rounds until the favourable ones lead by more than two standard deviations, then stay silent.

    The favourable cell is both outcomes 1 (Bob's inverted under a flip) at the pair opposite to the minus sign;
    silence is the other outcome always.
    """
    mx, my = past.convention.minus
    flip = int(past.convention.flip)
    favourable = cell_index(1, 1 - mx, 1 - my, 1, 1 ^ flip)
    others = [cell_index(1, 1 - mx, my, 1, flip), cell_index(1, mx, 1 - my, 0, 1 ^ flip),
              cell_index(1, mx, my, 1, 1 ^ flip)]
    won, lost = past.tallies[:, favourable], past.tallies[:, others].sum(axis=1)
    eager, silent = (15, 0) if not flip else (12, 3)
    return np.where(won - lost > 2.0 * np.sqrt(won + lost + 1.0), silent, eager)


def wander(past: Past) -> np.ndarray:
    """A fresh one of the four best strategies at random each time: no memory, for comparison."""
    return np.array(losing_at(past.convention))[past.random.integers(0, 4, past.runs)]


POLICIES: dict[str, Policy] = {
    "bet-on-rarest": bet_on_rarest,
    "switch-after-loss": switch_after_loss,
    "stop-when-ahead": stop_when_ahead,
    "wander": wander,
}


def _won_cells(convention: Convention) -> np.ndarray:
    """Which of the 16 test cells are won, bool (16,)."""
    return np.array([convention.wins(i >> 3, i >> 2 & 1, i >> 1 & 1, i & 1) for i in range(16)])


def largest_chsh(convention: Convention) -> float:
    """Largest S of the 16 strategies, by trying them all."""
    def correlator(strategy: int, x: int, y: int) -> int:
        a, b = outcomes(strategy, x, y)
        return 1 if a == b else -1

    return max(math.fsum(convention.sign(*pair) * correlator(strategy, *pair) for pair in SETTING_PAIRS)
               for strategy in range(STRATEGIES))
