"""What a backend is. One file per backend; `toeplitz.BACKENDS` lists them, best first.

A backend only computes: `ToeplitzStream` has checked every argument before it calls, keeps the position, and
sees to it that the engine never gets more bits than the raw string has.
"""

from __future__ import annotations

from typing import Protocol

import numpy as np

from extractor.hashing.seeds import SeedReader


class Engine(Protocol):
    """One hash in the making, at one position of the raw string."""

    def push(self, packed: np.ndarray, bits: int) -> None:
        """Take the next `bits` >= 1 raw bits, packed LSB-first in uint8 (ceil(bits / 8),), tail bits zero.

        The engine keeps no reference to `packed`.
        """
        ...

    def partial(self) -> bytes:
        """Packed contribution to the m bits, ceil(m / 8) bytes, of all pushed since the last call.

        The sum then starts from zero again; the position goes on.
        """
        ...


class Backend(Protocol):
    """A way to compute the hash; every backend gives the same bits."""

    name: str

    def available(self) -> bool:
        """True if this machine can run it; a backend must not fail on import where it is not available."""
        ...

    def make(self, raw_bits: int, output_bits: int, seed: SeedReader, start: int, threads: int = 1) -> Engine:
        """Engine for raw bits start … raw_bits - 1; `threads` >= 1 is a wish that a backend may ignore."""
        ...
