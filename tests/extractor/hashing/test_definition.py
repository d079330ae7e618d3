"""Every backend gives the bits of the definition."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy.linalg import matmul_toeplitz

from extractor.hashing._reference import hash_bits
from extractor.hashing.toeplitz import toeplitz_hash
from extractor.hashing.packing import pack
from tests.extractor.hashing.cases import hash_with, random_bits, seed_of


def test_definition_by_hand():
    """Three raw bits to two: y_0 = s2 x0 + s1 x1 + s0 x2 and y_1 = s3 x0 + s2 x1 + s1 x2, written out."""
    for s in itertools.product((0, 1), repeat=4):
        for x in itertools.product((0, 1), repeat=3):
            by_hand = [(s[2] & x[0]) ^ (s[1] & x[1]) ^ (s[0] & x[2]), (s[3] & x[0]) ^ (s[2] & x[1]) ^ (s[1] & x[2])]
            assert hash_bits(s, x, 2) == by_hand


def test_every_small_size(backend):
    """For all n and m up to 10, random seeds and raw strings hash as defined."""
    for n, m in itertools.product(range(1, 11), repeat=2):
        seed, raw = random_bits(n + m - 1, 10 * n + m), random_bits(n, 10 * m + n)
        assert hash_with(backend, seed, raw, m).tolist() == hash_bits(seed.tolist(), raw.tolist(), m), (n, m)


def test_every_seed_and_raw_string(backend):
    """For tiny sizes every seed meets every raw string."""
    for n, m in ((1, 1), (1, 3), (2, 2), (3, 1), (3, 2)):
        for s in itertools.product((0, 1), repeat=n + m - 1):
            for x in itertools.product((0, 1), repeat=n):
                got = hash_with(backend, np.array(s, dtype=np.uint8), np.array(x, dtype=np.uint8), m)
                assert got.tolist() == hash_bits(s, x, m)


def test_every_matrix_place(backend):
    """A seed with one bit set meets a raw string with one bit set in exactly the output bit of their diagonal."""
    n, m = 9, 7
    for k, j in itertools.product(range(n + m - 1), range(n)):
        seed, raw = np.zeros(n + m - 1, dtype=np.uint8), np.zeros(n, dtype=np.uint8)
        seed[k] = raw[j] = 1
        assert np.flatnonzero(hash_with(backend, seed, raw, m)).tolist() == [
            i for i in range(m) if i - j + n - 1 == k]


EDGES = (1, 7, 8, 9, 63, 64, 65, 127, 128, 129)


@pytest.mark.parametrize("n", EDGES)
def test_word_edges(backend, n):
    """Sizes around bytes and words hash as defined."""
    for m in EDGES:
        seed, raw = random_bits(n + m - 1, 3), random_bits(n, 4)
        assert hash_with(backend, seed, raw, m).tolist() == hash_bits(seed.tolist(), raw.tolist(), m), m


@pytest.mark.parametrize(("n", "m"), [(1023, 129), (1024, 64), (1025, 65), (1025, 1025), (511, 1025), (4097, 1),
                                      (1, 4097)])
def test_outside_check(backend, n, m):
    """scipy.linalg.matmul_toeplitz, rounded and reduced modulo 2, agrees (another program, another algorithm)."""
    seed, raw = random_bits(n + m - 1, 5), random_bits(n, 6)
    column, row = seed[n - 1:].astype(float), seed[:n][::-1].astype(float)
    product = np.rint(matmul_toeplitz((column, row), raw.astype(float))).astype(np.int64) & 1
    assert np.array_equal(hash_with(backend, seed, raw, m), product)


def test_outside_check_at_size():
    """The default backend agrees with matmul_toeplitz at 700 000 by 90 000, in pieces of odd sizes."""
    n, m = 700_000, 90_000
    seed, raw = random_bits(n + m - 1, 7), random_bits(n, 8)
    pieces = [(pack(raw[k:k + 99_991]), len(raw[k:k + 99_991])) for k in range(0, n, 99_991)]
    product = matmul_toeplitz((seed[n - 1:].astype(float), seed[:n][::-1].astype(float)), raw.astype(float))
    assert toeplitz_hash(pieces, n, m, seed_of(seed)) == pack((np.rint(product).astype(np.int64) & 1)).tobytes()
