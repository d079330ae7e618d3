"""Local boxes with memory: before every stretch of rounds they choose a strategy from all that happened."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from extractor.bell.sampling import BLOCK_ROUNDS, CellSampler, generator
from extractor.bell.strategies import CELL_OF, POLICIES, STRATEGIES, Past, Policy
from extractor.bell.wiring import settings_probabilities
from extractor.errors import Defect, InputError
from extractor.model import CELLS, Convention, Settings

_ROUND_BY_ROUND = 16        # up to here a stretch is drawn round by round, beyond by counts


@dataclass(frozen=True)
class MemoryLocalRig:
    """A local rig whose strategy depends on all earlier rounds.

    policy        a name in strategies.POLICIES, or a function of Past (see there) giving the next strategy of each run
    reacts_every  rounds between two choices, 1 .. 2^20; a stretch also ends with a block of 2^20 rounds
    setting_bias  hidden shift of P(x = 0) and P(y = 0 | x) of test rounds
    """

    policy: str | Policy = "bet-on-rarest"
    settings: Settings = Settings()
    convention: Convention = Convention()
    reacts_every: int = 1024
    setting_bias: tuple[float, float] = (0.0, 0.0)

    def __post_init__(self) -> None:
        if isinstance(self.policy, str) and self.policy not in POLICIES:
            raise InputError(f"{self.policy!r} is none of {', '.join(POLICIES)}", code="bad-choice", field="/policy")
        if type(self.reacts_every) is not int or not 1 <= self.reacts_every <= BLOCK_ROUNDS:
            raise InputError(f"{self.reacts_every!r} is not a whole number in 1..2^20", code="out-of-range",
                             field="/reacts_every")
        settings_probabilities(self.settings, self.setting_bias)

    def choose(self, past: Past) -> np.ndarray:
        """The next strategy of each run, integers (runs,)."""
        chosen = np.asarray((POLICIES[self.policy] if isinstance(self.policy, str) else self.policy)(past))
        if chosen.shape != (past.runs,) or chosen.min() < 0 or chosen.max() >= STRATEGIES:
            raise Defect("a policy must give one strategy number 0..15 per run")
        return chosen

    def sampler(self, seed: int) -> _MemoryBlocks:
        """Draws this rig's rounds block by block, in order."""
        return _MemoryBlocks(self, seed)

    def tallies(self, rounds: int, runs: int, random: np.random.Generator) -> np.ndarray:
        """Tallies of `runs` runs side by side, int64 (runs, 32)."""
        past = Past.nothing(self.convention, runs, random)
        chances = settings_probabilities(self.settings, self.setting_bias).reshape(8)
        chances = chances / chances.sum()
        steps, each = np.cumsum(chances)[:-1], np.arange(runs)
        row, seen_row, table = each * CELLS, each * 8, CELL_OF.ravel().astype(np.intp)
        for start in range(0, rounds, self.reacts_every):
            stretch = min(self.reacts_every, rounds - start)
            past.strategy = self.choose(past)
            past.last.fill(0)
            if stretch <= _ROUND_BY_ROUND:
                for _ in range(stretch):
                    drawn = np.searchsorted(steps, random.random(runs), side="right")
                    cell = row + table[past.strategy * 8 + drawn]         # one cell per run, so no index repeats
                    past.last.ravel()[cell] += 1
                    past.tallies.ravel()[cell] += 1
                    past.seen.ravel()[seen_row + drawn] += 1
            else:
                drawn = random.multinomial(stretch, chances, size=runs)
                past.last[each[:, None], CELL_OF[past.strategy]] = drawn
                past.tallies += past.last
                past.seen += drawn
        return past.tallies


class _MemoryBlocks:
    """Draws blocks in order: settings from the block's own stream, choices from a second one and all the past."""

    def __init__(self, rig: MemoryLocalRig, seed: int) -> None:
        self._rig, self._seed, self._next = rig, seed, 0
        self._past = Past.nothing(rig.convention, 1, generator(seed, 0, 1))
        self._table = CellSampler(settings_probabilities(rig.settings, rig.setting_bias))

    def block(self, k: int, rounds: int) -> np.ndarray:
        if k != self._next:
            raise Defect("rounds of boxes with memory can only be drawn in order")
        self._next += 1
        past, every = self._past, self._rig.reacts_every
        past.random = generator(self._seed, k, 1)
        drawn = self._table.draw(generator(self._seed, k), rounds)
        stretches = (rounds + every - 1) // every
        where = np.repeat(np.arange(stretches) * 8, every)[:rounds] + drawn
        seen = np.bincount(where, minlength=8 * stretches).reshape(stretches, 8)
        chosen = np.empty(stretches, dtype=np.intp)
        for i in range(stretches):
            past.strategy = self._rig.choose(past)
            chosen[i] = past.strategy[0]
            past.last.fill(0)
            past.last[0, CELL_OF[chosen[i]]] = seen[i]
            past.tallies += past.last
            past.seen += seen[i]
        return CELL_OF[np.repeat(chosen, every)[:rounds], drawn]
