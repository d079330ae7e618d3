"""Re-batching, the stored form and the digest of a run."""

from __future__ import annotations

import hashlib
import io
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.errors import InputError
from extractor.model import PLANES, RoundBatch
from extractor.records.bits import first_set, put_bits, shifted, slice_bits
from extractor.records.planes import (
    BLOCK_ROUNDS, PlaneDigest, digest_of, read_blocks, read_planes, rebatch, stored_rounds, write_planes,
)
from tests.extractor.records.samples import batch_of, columns_of, joined, same

QUICK = settings(derandomize=True, deadline=None, max_examples=40, database=None)


def _split(columns: dict[str, np.ndarray], sizes: list[int]) -> list[RoundBatch]:
    """The rounds cut into batches of the given sizes, over and over until none are left."""
    batches, start, turn, total = [], 0, 0, len(columns["x"])
    while start < total:
        stop = min(total, start + sizes[turn % len(sizes)])
        batches.append(batch_of({name: column[start:stop] for name, column in columns.items()}))
        start, turn = stop, turn + 1
    return batches


@QUICK
@given(rounds=st.integers(1, 500), sizes=st.lists(st.integers(1, 90), min_size=1, max_size=6), to=st.integers(1, 200),
       seed=st.integers(0, 2**32))
def test_rebatching_keeps_the_rounds(rounds, sizes, to, seed):
    """Batches of any sizes become batches of one size, the last one shorter, with the same rounds and digest."""
    columns = columns_of(rounds, seed)
    batches = _split(columns, sizes)
    result = list(rebatch(iter(batches), to))
    assert all(batch.rounds == to for batch in result[:-1]) and 1 <= result[-1].rounds <= to
    assert same(joined(result), columns)
    assert digest_of(result) == digest_of(batches) == digest_of([batch_of(columns)])


@QUICK
@given(data=st.data(), size=st.integers(1, 40))
def test_shifts_against_single_bits(data, size):
    """Slicing, shifting and joining of packed bits do what the same on single bits does."""
    bits = np.array(data.draw(st.lists(st.integers(0, 1), min_size=8 * size, max_size=8 * size)), np.uint8)
    plane = np.packbits(bits, bitorder="little")
    start = data.draw(st.integers(0, bits.size - 1))
    count = data.draw(st.integers(1, bits.size - start))
    part = slice_bits(plane, start, count)
    assert np.array_equal(part, np.packbits(bits[start : start + count], bitorder="little"))
    left = data.draw(st.integers(1, 7))
    moved = np.concatenate([np.zeros(left, np.uint8), bits, np.zeros(8 - left, np.uint8)])
    assert np.array_equal(shifted(plane, left), np.packbits(moved, bitorder="little"))
    block = np.zeros(size + 3, np.uint8)
    fill = data.draw(st.integers(0, 8 * block.size - count))
    put_bits(block, fill, part, count)
    expected = np.zeros(8 * block.size, np.uint8)
    expected[fill : fill + count] = bits[start : start + count]
    assert np.array_equal(np.unpackbits(block, bitorder="little"), expected)
    ones = np.flatnonzero(bits)
    assert first_set(plane) == (int(ones[0]) if ones.size else None)


def test_whole_blocks_pass_without_a_copy():
    """A batch that is a block already is handed on as it is."""
    batch = batch_of(columns_of(64))
    assert next(rebatch([batch], 64)).planes["x"].base is batch.planes["x"]


def test_digest_is_what_the_module_text_says():
    """The digest equals its definition, computed here from the definition alone, for full and started bytes."""
    for rounds in (1, 7, 8, 9, 1_000):
        columns = columns_of(rounds)
        total = hashlib.sha256(f"bellassay rounds {rounds}\n".encode())
        for name in ("t", "x", "y", "a", "b"):
            total.update(hashlib.sha256(np.packbits(columns[name], bitorder="little").tobytes()).digest())
        assert digest_of(_split(columns, [3, 64, 5])) == "sha256:" + total.hexdigest()


def test_digest_depends_on_every_bit_and_on_the_count():
    """A changed bit of any plane, exchanged planes, and a further round of zeros give another digest."""
    columns = columns_of(20)
    seen = {digest_of([batch_of(columns)])}
    for name in PLANES:
        for row in range(20):
            changed = columns | {name: columns[name].copy()}
            changed[name][row] ^= 1
            seen.add(digest_of([batch_of(changed)]))
    assert len(seen) == 101
    seen.add(digest_of([batch_of(columns | {"a": columns["b"], "b": columns["a"]})]))
    seen.add(digest_of([batch_of({name: np.append(column, np.uint8(0)) for name, column in columns.items()})]))
    assert len(seen) == 103


def test_digest_may_be_asked_for_on_the_way():
    """Asking does not end the digest: each prefix has its own, and the rest may follow."""
    columns = columns_of(50)
    digest = PlaneDigest()
    for stop, batch in enumerate(_split(columns, [1]), 1):
        digest.update(batch)
        assert digest.rounds == stop
        assert digest.hexdigest() == digest_of([batch_of({name: c[:stop] for name, c in columns.items()})])
    assert re.fullmatch("sha256:[0-9a-f]{64}", digest.hexdigest())


def _stored(columns: dict[str, np.ndarray], sizes: list[int]) -> bytes:
    file = io.BytesIO()
    assert write_planes(file, iter(_split(columns, sizes))) == len(columns["x"])
    return file.getvalue()


@QUICK
@given(rounds=st.integers(1, 300), sizes=st.lists(st.integers(1, 90), min_size=1, max_size=4))
def test_stored_form_is_canonical(rounds, sizes):
    """Any split of the rounds is stored as the same bytes and read back as the same rounds."""
    columns = columns_of(rounds)
    data = _stored(columns, sizes)
    assert data == _stored(columns, [rounds])
    assert stored_rounds(io.BytesIO(data)) == rounds
    assert same(joined(read_planes(io.BytesIO(data))), columns)


@pytest.mark.parametrize("rounds", [BLOCK_ROUNDS - 1, BLOCK_ROUNDS, BLOCK_ROUNDS + 1, 3 * BLOCK_ROUNDS + 77])
def test_stored_blocks(rounds):
    """Blocks can be read from any one on, and some planes without the others."""
    columns = columns_of(rounds)
    file = io.BytesIO(_stored(columns, [700_001]))
    blocks = -(-rounds // BLOCK_ROUNDS)
    for first in range(blocks):
        rest = {name: column[first * BLOCK_ROUNDS :] for name, column in columns.items()}
        assert same(joined(read_planes(file, first_block=first)), rest)
        assert same(joined(read_planes(file, first, 1)), {name: c[:BLOCK_ROUNDS] for name, c in rest.items()})
        for count, planes in read_blocks(file, ("b", "x"), first, 1):
            assert set(planes) == {"b", "x"} and count == min(BLOCK_ROUNDS, rounds - first * BLOCK_ROUNDS)
            assert np.array_equal(np.unpackbits(planes["b"], count=count, bitorder="little"), rest["b"][:count])
    assert list(read_planes(file, first_block=blocks)) == []
    for first in (-1, blocks + 1):
        with pytest.raises(InputError) as caught:
            list(read_planes(file, first_block=first))
        assert caught.value.code == "out-of-range"


def test_stored_form_of_no_rounds():
    """No rounds are stored as header and footer, and read back as no batch."""
    file = io.BytesIO()
    assert write_planes(file, []) == 0
    assert stored_rounds(file) == 0 and list(read_planes(file)) == []


class _Readings(io.BytesIO):
    """Counts the bytes that are read."""

    read_bytes = 0

    def read(self, size: int | None = -1) -> bytes:
        data = super().read(size)
        self.read_bytes += len(data)
        return data


def test_only_what_is_asked_for_is_read():
    """One plane of the last block costs its bytes, header and footer, no more."""
    file = _Readings(_stored(columns_of(2 * BLOCK_ROUNDS + 800), [BLOCK_ROUNDS]))
    assert [count for count, _ in read_blocks(file, ("a",), 2)] == [800]
    assert file.read_bytes == 16 + 16 + 100


def test_damaged_stored_form():
    """Every cut, an added byte, and changes of header, footer and tail bits are refused with a code."""
    data = _stored(columns_of(77), [77])

    def code(changed: bytes) -> str:
        with pytest.raises(InputError) as caught:
            list(read_planes(io.BytesIO(changed), name="run"))
        assert caught.value.file == "run"
        return caught.value.code

    for length in range(len(data)):
        assert code(data[:length]) in ("truncated-file", "unknown-format")
    assert code(data + b"\0") == "truncated-file"
    assert code(data[:20] + b"\0" + data[20:]) == "bytes-after-end"
    for place in range(16):
        assert code(data[:place] + bytes([data[place] ^ 1]) + data[place + 1 :]) == "unknown-format"
    for place in range(len(data) - 16, len(data)):
        changed = data[:place] + bytes([data[place] ^ 0x80]) + data[place + 1 :]
        assert code(changed) in ("truncated-file", "too-many-rounds")
    for plane in range(5):
        place = 16 + 10 * plane + 9
        assert code(data[:place] + bytes([data[place] | 0x80]) + data[place + 1 :]) == "tail-bits-set"
