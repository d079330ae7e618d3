"""Packed bits that start anywhere: the few shifts that slicing and joining bit planes take.

Bit i of a packed plane is bit (i mod 8), counted from the least significant, of byte i // 8. Bits beyond the
length are zero; every function here expects that and keeps it.
"""

from __future__ import annotations

import numpy as np


def packed_size(bits: int) -> int:
    """Bytes that hold `bits` bits."""
    return (bits + 7) // 8


def shifted(plane: np.ndarray, left: int) -> np.ndarray:
    """The plane moved up by `left` bits, 0 < left < 8: uint8 array of shape (len(plane) + 1,), zeros moved in."""
    # Whole 64-bit words are about ten times as fast as bytes in numpy; the dtype spells the byte order out,
    # so the carry between words is right on every machine.
    words = np.zeros(plane.size // 8 + 1, dtype="<u8")
    words.view(np.uint8)[: plane.size] = plane
    moved = words << np.uint64(left)
    moved[1:] |= words[:-1] >> np.uint64(64 - left)
    return moved.view(np.uint8)[: plane.size + 1]


def slice_bits(plane: np.ndarray, start: int, count: int) -> np.ndarray:
    """Bits start .. start + count - 1 as a packed array of their own; a view where no bit has to move."""
    low, offset = divmod(start, 8)
    if offset:
        out = shifted(plane[low : packed_size(start + count)], 8 - offset)[1 : packed_size(count) + 1]
    else:
        out = plane[low : low + packed_size(count)]
    spare = -count % 8
    if spare and out[-1] >> (8 - spare):
        out = out if offset else out.copy()
        out[-1] &= 0xFF >> spare
    return out


def put_bits(block: np.ndarray, fill: int, plane: np.ndarray, count: int) -> None:
    """Write `count` packed bits of `plane` into `block` from bit `fill` on; the block is zero from there on."""
    low, offset = divmod(fill, 8)
    moved = shifted(plane, offset) if offset else plane
    end = packed_size(fill + count)
    if low < end:
        block[low] |= moved[0]
        block[low + 1 : end] = moved[1 : end - low]


def first_set(plane: np.ndarray) -> int | None:
    """Position of the first bit that is 1, or None."""
    place = int(np.argmax(plane != 0)) if plane.size else 0
    if not plane.size or not plane[place]:
        return None
    byte = int(plane[place])
    return 8 * place + (byte & -byte).bit_length() - 1
