"""The hash: a Toeplitz matrix over GF(2) times the raw string, streamed.

    y_i = XOR_j s[i - j + n - 1] x_j,      0 <= i < m,  0 <= j < n

n raw bits x, m output bits y, a seed s of exactly n + m - 1 uniform bits, all packed LSB-first with tail bits zero.
The family is 2-universal (Carter and Wegman 1979) and linear, so the contributions of any pieces of the raw string
XOR to the whole. It is one hash of one string: hashing pieces to separate outputs is something else and not
covered by the bound on the output length.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from extractor.errors import Defect, InputError
from extractor.hashing._numpy import FourierBackend
from extractor.hashing._reference import DefinitionBackend
from extractor.hashing.backend import Backend
from extractor.hashing.packing import byte_count, tail_is_clear
from extractor.hashing.seeds import SeedBytes, SeedFile, SeedReader

__all__ = ["BACKENDS", "SeedBytes", "SeedFile", "SeedReader", "ToeplitzStream", "backends", "toeplitz_hash"]

BACKENDS: tuple[Backend, ...] = (FourierBackend(), DefinitionBackend())     # best first


def backends() -> dict[str, bool]:
    """Name of every backend -> whether it can run here, best first."""
    return {backend.name: backend.available() for backend in BACKENDS}


def find_backend(name: str | None) -> Backend:
    """The backend of that name, or the best present if None; InputError "unknown-backend" otherwise."""
    for backend in BACKENDS:
        if name in (None, backend.name) and backend.available():
            return backend
    raise InputError(f"there is no hashing backend {name!r} here; present: "
                     f"{', '.join(known for known, present in backends().items() if present)}", code="unknown-backend")


class ToeplitzStream:
    """Takes consecutive raw bits from position `start` on and gives their contribution to the hash.

    raw_bits      n >= 1, length of the whole raw string
    output_bits   m >= 1
    seed          reader of exactly n + m - 1 bits; only windows of it are read
    start         position in 0..n of the first raw bit that will be pushed
    backend       name of a backend, None = the best present; `backend_name` says which one runs
    threads       threads a backend may use, >= 1
    The XOR of the partials of any split of the raw string (raw bits never pushed count as zero) is the hash.
    Raises InputError "seed-length" for a seed of another length, "out-of-range" for sizes that make no sense,
    "raw-length" if more is pushed than the raw string has, "tail-bits" for set bits beyond the last.
    """

    def __init__(self, raw_bits: int, output_bits: int, seed: SeedReader, start: int = 0, backend: str | None = None,
                 threads: int = 1) -> None:
        for name, value, low in (("raw bits", raw_bits, 1), ("output bits", output_bits, 1), ("start", start, 0),
                                 ("threads", threads, 1)):
            if value < low:
                raise InputError(f"{name} must be at least {low}, not {value}", code="out-of-range")
        if start > raw_bits:
            raise InputError(f"start {start} lies beyond the {raw_bits} raw bits", code="out-of-range")
        if seed.bits != raw_bits + output_bits - 1:
            raise InputError(f"hashing {raw_bits} raw bits to {output_bits} takes a seed of exactly "
                             f"{raw_bits + output_bits - 1} bits, not {seed.bits}", code="seed-length")
        chosen = find_backend(backend)
        self.raw_bits, self.output_bits, self.position = raw_bits, output_bits, start
        self.backend_name = chosen.name
        self._engine = chosen.make(raw_bits, output_bits, seed, start, threads)

    def push(self, packed: np.ndarray, bits: int) -> None:
        """Take the next `bits` >= 0 raw bits, packed in a uint8 array of shape (ceil(bits / 8),)."""
        if packed.dtype != np.uint8 or packed.shape != (byte_count(bits),):
            raise Defect(f"{bits} packed bits came as {packed.dtype} of shape {packed.shape}")
        if self.position + bits > self.raw_bits:
            raise InputError(f"{bits} raw bits at position {self.position} exceed the {self.raw_bits} announced",
                             code="raw-length")
        if bits == 0:
            return
        if not tail_is_clear(packed, bits):
            raise InputError(f"bits beyond the last of {bits} raw bits are set", code="tail-bits")
        self._engine.push(packed, bits)
        self.position += bits

    def partial(self) -> bytes:
        """The packed m-bit contribution of what was pushed since the last call, ceil(m / 8) bytes; the position stays.

        Raises Defect if the backend cannot vouch for its result.
        """
        return self._engine.partial()


def toeplitz_hash(pieces: Iterable[tuple[np.ndarray, int]], raw_bits: int, output_bits: int, seed: SeedReader, *,
                  backend: str | None = None, threads: int = 1) -> bytes:
    """Hash a whole raw string given as consecutive (packed uint8 array, bits) pieces; ceil(m / 8) bytes.

    Raises InputError "raw-length" unless the pieces add up to exactly raw_bits, and as `ToeplitzStream` does.
    """
    stream = ToeplitzStream(raw_bits, output_bits, seed, backend=backend, threads=threads)
    for packed, bits in pieces:
        stream.push(packed, bits)
    if stream.position != raw_bits:
        raise InputError(f"the raw string has {stream.position} bits, {raw_bits} were announced", code="raw-length")
    return stream.partial()
