"""Bit planes of a run: re-batching, the stored form, and the digest that names the rounds whatever file they came in.

Stored form, version 1. All numbers little endian.
    header   16 bytes   b"BELLPLANES" 0x00 version (uint8, 1) block size (uint32, BLOCK_ROUNDS)
    blocks              block k holds rounds k * BLOCK_ROUNDS and following; only the last may be shorter.
                        Each block is its planes t, x, y, a, b one after the other, ceil(r / 8) bytes each for its
                        r rounds, packed least significant bit first, bits beyond r zero
    footer   16 bytes   b"BELLEND" 0x00, rounds (uint64)
The count stands at the end because the writer streams; a file that was cut, or goes on, has a size that
disagrees with its count. Every block but the last has the same size, so block k is found without reading others.

Digest. For N rounds let D(p) be the SHA-256 of plane p of the whole run, packed into ceil(N / 8) bytes as above
(plane t is all ones when every round is a test round). The digest is
    SHA-256( "bellassay rounds " N "\\n" D(t) D(x) D(y) D(a) D(b) )
with N in decimal ASCII and the five D as 32 raw bytes each; its text is "sha256:" and 64 hexadecimal digits.
"""

from __future__ import annotations

import hashlib
import struct
from collections.abc import Iterable, Iterator, Sequence
from typing import BinaryIO

import numpy as np

from extractor.errors import InputError
from extractor.model import MAXIMUM_ROUNDS, PLANES, RoundBatch
from extractor.records.bits import packed_size, put_bits, shifted, slice_bits
from extractor.records.source import read_up_to

BLOCK_ROUNDS = 2**20
_HEADER = struct.pack("<11sBI", b"BELLPLANES", 1, BLOCK_ROUNDS)
_END = b"BELLEND\0"
_FOOTER_BYTES = 16
_PLANE_BYTES = BLOCK_ROUNDS // 8
_BLOCK_BYTES = len(PLANES) * _PLANE_BYTES


TELLING_ROUNDS = 64         # from here on two equal digests mean the same rounds; shorter stretches may be equal by chance


def slice_batch(batch: RoundBatch, start: int, rounds: int) -> RoundBatch:
    """Rounds start .. start + rounds - 1 of a batch."""
    if start == 0 and rounds == batch.rounds:
        return batch
    return RoundBatch(rounds, {name: slice_bits(batch.planes[name], start, rounds) for name in PLANES})


def cut(batches: Iterable[RoundBatch], sizes: Sequence[int]) -> Iterator[tuple[int, RoundBatch]]:
    """The rounds cut into parts of `sizes` rounds: (number of the part, piece of it), whatever batches they came in.

    Rounds beyond the last part belong to part len(sizes).
    """
    part, left = 0, sizes[0] if sizes else 0
    for batch in batches:
        position = 0
        while position < batch.rounds:
            while part < len(sizes) and not left:
                part += 1
                left = sizes[part] if part < len(sizes) else 0
            take = batch.rounds - position if part == len(sizes) else min(left, batch.rounds - position)
            yield part, slice_batch(batch, position, take)
            position += take
            left -= take


def rebatch(batches: Iterable[RoundBatch], rounds: int = BLOCK_ROUNDS) -> Iterator[RoundBatch]:
    """The same rounds in batches of exactly `rounds`, the last one shorter. Memory: one batch in, one batch out."""
    block: dict[str, np.ndarray] = {}
    fill = 0
    for batch in batches:
        position = 0
        while position < batch.rounds:
            take = min(batch.rounds - position, rounds - fill)
            part = {name: slice_bits(batch.planes[name], position, take) for name in PLANES}
            position += take
            if take == rounds:
                yield RoundBatch(rounds, part)
                continue
            if not fill:
                block = {name: np.zeros(packed_size(rounds), np.uint8) for name in PLANES}
            for name in PLANES:
                put_bits(block[name], fill, part[name], take)
            fill += take
            if fill == rounds:
                yield RoundBatch(rounds, block)
                fill = 0
    if fill:
        yield RoundBatch(fill, {name: block[name][: packed_size(fill)] for name in PLANES})


def write_planes(file: BinaryIO, batches: Iterable[RoundBatch]) -> int:
    """Write the stored form, streaming (no seek), and return the number of rounds."""
    file.write(_HEADER)
    rounds = 0
    for block in rebatch(batches):
        for name in PLANES:
            file.write(block.planes[name].tobytes())
        rounds += block.rounds
    file.write(_END + struct.pack("<Q", rounds))
    return rounds


def stored_rounds(file: BinaryIO, name: str = "planes") -> int:
    """Number of rounds in a stored form, from header and footer. Errors raised: InputError unless the file is whole."""
    size = file.seek(0, 2)
    file.seek(0)
    header = read_up_to(file, len(_HEADER))
    if header != _HEADER:
        raise InputError("does not begin like stored bit planes of version 1", code="unknown-format", file=name)
    footer = b""
    if size >= len(_HEADER) + _FOOTER_BYTES:
        file.seek(size - _FOOTER_BYTES)
        footer = read_up_to(file, _FOOTER_BYTES)
    if len(footer) != _FOOTER_BYTES or not footer.startswith(_END):
        raise InputError("does not end with the footer of stored bit planes: it was cut, or has bytes after its end",
                         code="truncated-file", file=name)
    rounds: int = struct.unpack("<Q", footer[len(_END):])[0]
    if rounds > MAXIMUM_ROUNDS:
        raise InputError(f"declares {rounds} rounds, more than 2^50", code="too-many-rounds", file=name)
    whole, rest = divmod(rounds, BLOCK_ROUNDS)
    expected = len(_HEADER) + whole * _BLOCK_BYTES + len(PLANES) * packed_size(rest) + _FOOTER_BYTES
    if size != expected:
        code = "truncated-file" if size < expected else "bytes-after-end"
        raise InputError(f"has {size} bytes, but its {rounds} rounds take {expected}", code=code, file=name)
    return rounds


def read_blocks(file: BinaryIO, names: Sequence[str] = PLANES, first_block: int = 0, blocks: int | None = None,
                name: str = "planes") -> Iterator[tuple[int, dict[str, np.ndarray]]]:
    """The named planes only, block by block from `first_block` on, at most `blocks` of them.

    Yields (rounds of the block, plane name -> packed uint8 array). Nothing but the named planes is read.
    Errors raised: InputError if the file is not a whole stored form, or a plane has bits beyond the last round.
    """
    rounds = stored_rounds(file, name)
    end = -(-rounds // BLOCK_ROUNDS)
    if not 0 <= first_block <= end:
        raise InputError(f"has {end} blocks, so none can be read from block {first_block} on",
                         code="out-of-range", file=name)
    if blocks is not None:
        end = min(end, first_block + blocks)
    for k in range(first_block, end):
        count = min(BLOCK_ROUNDS, rounds - k * BLOCK_ROUNDS)
        size, start = packed_size(count), len(_HEADER) + k * _BLOCK_BYTES
        planes = {}
        for plane in names:
            file.seek(start + PLANES.index(plane) * size)
            data = read_up_to(file, size)
            if len(data) != size:
                raise InputError("became shorter while it was read", code="truncated-file", file=name, field=plane)
            if count % 8 and data[-1] >> (count % 8):
                raise InputError(f"has bits set beyond its last round, {rounds}", code="tail-bits-set",
                                 file=name, field=plane)
            planes[plane] = np.frombuffer(data, np.uint8)
        yield count, planes


def read_planes(file: BinaryIO, first_block: int = 0, blocks: int | None = None,
                name: str = "planes") -> Iterator[RoundBatch]:
    """Stored rounds as batches of BLOCK_ROUNDS, from block `first_block` on. Errors raised: as `read_blocks`."""
    for count, planes in read_blocks(file, PLANES, first_block, blocks, name):
        yield RoundBatch(count, planes)


class PlaneDigest:
    """Streaming digest of a run (see the module text): it depends on the rounds only, not on file, format or split."""

    def __init__(self) -> None:
        self.rounds = 0
        self._hashes = {name: hashlib.sha256() for name in PLANES}
        self._carry = dict.fromkeys(PLANES, 0)          # the started byte of each plane: rounds % 8 bits

    def update(self, batch: RoundBatch) -> None:
        """Append the rounds of `batch`."""
        filled = self.rounds % 8
        self.rounds += batch.rounds
        whole, started = divmod(filled + batch.rounds, 8)
        for name in PLANES:
            plane = np.ascontiguousarray(batch.planes[name])
            if filled:
                plane = shifted(plane, filled)
                plane[0] |= self._carry[name]
            self._hashes[name].update(plane[:whole])
            self._carry[name] = int(plane[whole]) if started else 0

    def hexdigest(self) -> str:
        """The digest of the rounds so far as text, "sha256:" and 64 hexadecimal digits; more rounds may follow."""
        total = hashlib.sha256(f"bellassay rounds {self.rounds}\n".encode())
        for name in PLANES:
            plane = self._hashes[name].copy()
            if self.rounds % 8:
                plane.update(bytes([self._carry[name]]))
            total.update(plane.digest())
        return f"sha256:{total.hexdigest()}"


def digest_of(batches: Iterable[RoundBatch]) -> str:
    """Digest of all rounds of `batches`, as `PlaneDigest.hexdigest`."""
    digest = PlaneDigest()
    for batch in batches:
        digest.update(batch)
    return digest.hexdigest()
