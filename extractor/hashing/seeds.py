"""The seed of the Toeplitz matrix, read at any bit offset and never held whole.

A seed is a string of uniform bits, packed LSB-first, tail bits zero. Hashing n raw bits to m bits
takes exactly n + m - 1 of them. `SeedReader` is all that hashing asks of its source; the service hands in a
reader of an encrypted file, an auditor the seed file itself.
"""

from __future__ import annotations

import os
from typing import BinaryIO, Protocol

import numpy as np

from extractor.errors import Defect, InputError
from extractor.hashing.packing import byte_count, tail_is_clear, take


class SeedReader(Protocol):
    """Random access to a seed of `bits` bits."""

    bits: int

    def read(self, bit_offset: int, bits: int) -> np.ndarray:
        """Seed bits bit_offset … bit_offset + bits - 1, packed from bit 0, uint8 (ceil(bits / 8),), tail zero."""
        ...


def _check_range(bit_offset: int, bits: int, available: int) -> None:
    if bit_offset < 0 or bits < 1 or bit_offset + bits > available:
        raise Defect(f"seed bits {bit_offset}..{bit_offset + bits - 1} were asked of a seed of {available} bits")


def _check_size(size: int, bits: int, name: str) -> None:
    if bits < 1:
        raise InputError(f"a seed has at least one bit, not {bits}", code="seed-length", file=name)
    if size != byte_count(bits):
        raise InputError(f"the seed holds {size} bytes; {bits} seed bits fill exactly {byte_count(bits)} bytes: "
                         "hand in exactly as many bits as the certificate asks for", code="seed-length", file=name)


def _check_tail(last: np.ndarray, bits: int, name: str) -> None:
    if not tail_is_clear(last, bits):
        raise InputError(f"the seed has {bits} bits, but bits beyond them are set in its last byte: "
                         f"set the upper {8 - bits % 8} bits of that byte to zero", code="seed-tail", file=name)


class SeedFile:
    """A seed in a seekable binary file; reads only the windows asked for.

    Not safe for use by several threads at once: reading moves the position of the file.
    Raises InputError "seed-length" if the file does not hold exactly ceil(bits / 8) bytes, "seed-tail" if bits
    beyond the last are set, "seed-truncated" if the file got shorter since.
    """

    def __init__(self, file: BinaryIO, bits: int, name: str | None = None) -> None:
        self.bits = bits
        self._file = file
        self._name = name or str(getattr(file, "name", "seed"))
        _check_size(file.seek(0, os.SEEK_END), bits, self._name)
        _check_tail(self._bytes(byte_count(bits) - 1, 1), bits, self._name)

    def _bytes(self, first: int, size: int) -> np.ndarray:
        self._file.seek(first)
        parts, missing = [], size
        while missing:                      # a raw file may return less than asked
            part = self._file.read(missing)
            if not part:
                raise InputError(f"the seed file ends {missing} bytes early: it was changed while in use",
                                 code="seed-truncated", file=self._name)
            parts.append(part)
            missing -= len(part)
        return np.frombuffer(b"".join(parts), dtype=np.uint8)

    def read(self, bit_offset: int, bits: int) -> np.ndarray:
        _check_range(bit_offset, bits, self.bits)
        first, shift = divmod(bit_offset, 8)
        return take(self._bytes(first, byte_count(shift + bits)), shift, bits)


class SeedBytes:
    """A seed held in memory: packed bytes, or a uint8 array, of exactly ceil(bits / 8) bytes.

    Raises InputError "seed-length" or "seed-tail" as `SeedFile` does.
    """

    def __init__(self, packed: bytes | np.ndarray, bits: int) -> None:
        data = np.frombuffer(packed, dtype=np.uint8) if isinstance(packed, (bytes, bytearray, memoryview)) else packed
        if data.dtype != np.uint8 or data.ndim != 1:
            raise Defect(f"a seed is a one-dimensional uint8 array, not {data.dtype} of shape {data.shape}")
        _check_size(len(data), bits, "seed")
        _check_tail(data[-1:], bits, "seed")
        self.bits = bits
        self._data = data

    def read(self, bit_offset: int, bits: int) -> np.ndarray:
        _check_range(bit_offset, bits, self.bits)
        return take(self._data, bit_offset, bits)
