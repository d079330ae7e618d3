"""Packed bits: LSB-first within bytes, tail bits zero. Moving runs of bits to other bit positions."""

from __future__ import annotations

import numpy as np


def byte_count(bits: int) -> int:
    """Bytes that hold `bits` packed bits."""
    return (bits + 7) // 8


def clear_tail(packed: np.ndarray, bits: int) -> np.ndarray:
    """Set the bits beyond `bits` in the last byte of `packed` to zero, in place; returns it."""
    if bits % 8:
        packed[-1] &= (1 << bits % 8) - 1
    return packed


def tail_is_clear(packed: np.ndarray, bits: int) -> bool:
    """True if no bit beyond `bits` is set in a packed array of exactly byte_count(bits) bytes."""
    return bits % 8 == 0 or packed[-1] >> (bits % 8) == 0


def take(packed: np.ndarray, offset: int, bits: int) -> np.ndarray:
    """Bits offset … offset + bits - 1 of `packed` as a new packed array, uint8 (byte_count(bits),)."""
    first, shift = divmod(offset, 8)
    size = byte_count(bits)
    if shift == 0:
        return clear_tail(packed[first:first + size].copy(), bits)
    spread = packed[first:first + byte_count(shift + bits)]
    out = spread[:size] >> shift
    upper = spread[1:size + 1]
    out[:len(upper)] |= upper << (8 - shift)
    return clear_tail(out, bits)


def put(target: np.ndarray, offset: int, packed: np.ndarray, bits: int) -> None:
    """XOR `bits` packed bits (tail zero) into `target` from bit `offset` on; target must be long enough."""
    first, shift = divmod(offset, 8)
    size = byte_count(bits)
    if shift == 0:
        target[first:first + size] ^= packed[:size]
        return
    target[first:first + size] ^= packed[:size] << shift
    carried = byte_count(shift + bits) - 1      # target bytes that receive the upper part of a source byte
    target[first + 1:first + 1 + carried] ^= packed[:carried] >> (8 - shift)


def unpack(packed: np.ndarray, bits: int) -> np.ndarray:
    """The first `bits` packed bits as uint8 values 0/1, shape (bits,)."""
    return np.unpackbits(packed, count=bits, bitorder="little")


def pack(bits: np.ndarray) -> np.ndarray:
    """Values 0/1 of shape (n,) as a packed array of shape (byte_count(n),)."""
    return np.packbits(bits, bitorder="little")
