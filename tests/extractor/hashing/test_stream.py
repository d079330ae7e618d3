"""The streaming interface: what it accepts, what it refuses, and in which words."""

from __future__ import annotations

import numpy as np
import pytest

from extractor.errors import Defect, InputError
from extractor.hashing.packing import pack
from extractor.hashing.toeplitz import ToeplitzStream, backends, toeplitz_hash
from tests.extractor.hashing.cases import random_bits, seed_of


def _refused(code: str, action) -> None:
    with pytest.raises(InputError) as caught:
        action()
    assert caught.value.code == code


def test_backend_is_named(backend):
    """The backend that runs is reported; without a wish it is the first one present."""
    seed = seed_of(random_bits(12, 1))
    assert ToeplitzStream(10, 3, seed, backend=backend).backend_name == backend
    assert ToeplitzStream(10, 3, seed).backend_name == next(name for name, present in backends().items() if present)
    assert {"definition", "numpy-fft"} <= set(backends())


def test_bad_arguments_are_refused():
    """Sizes below one, a start beyond the end, a seed of another length and an unknown backend are input errors."""
    seed = seed_of(random_bits(12, 1))
    _refused("seed-length", lambda: ToeplitzStream(10, 4, seed))
    _refused("seed-length", lambda: ToeplitzStream(9, 3, seed))
    _refused("out-of-range", lambda: ToeplitzStream(0, 13, seed))
    _refused("out-of-range", lambda: ToeplitzStream(13, 0, seed))
    _refused("out-of-range", lambda: ToeplitzStream(10, 3, seed, start=11))
    _refused("out-of-range", lambda: ToeplitzStream(10, 3, seed, start=-1))
    _refused("out-of-range", lambda: ToeplitzStream(10, 3, seed, threads=0))
    _refused("unknown-backend", lambda: ToeplitzStream(10, 3, seed, backend="abacus"))


def test_too_many_raw_bits_are_refused(backend):
    """Pushing beyond the announced length fails and leaves the stream usable."""
    seed, raw = random_bits(12, 1), random_bits(10, 2)
    stream = ToeplitzStream(10, 3, seed_of(seed), backend=backend)
    stream.push(pack(raw[:7]), 7)
    _refused("raw-length", lambda: stream.push(pack(raw[:4]), 4))
    stream.push(pack(raw[7:]), 3)
    assert stream.partial() == toeplitz_hash([(pack(raw), 10)], 10, 3, seed_of(seed), backend="definition")


def test_malformed_pushes_are_refused(backend):
    """Set tail bits are an input error; arrays of another shape or type are a defect of the caller."""
    stream = ToeplitzStream(10, 3, seed_of(random_bits(12, 1)), backend=backend)
    _refused("tail-bits", lambda: stream.push(np.array([0x80], dtype=np.uint8), 7))
    for wrong in (np.zeros(2, dtype=np.uint8), np.zeros(1, dtype=np.int64), np.zeros((1, 1), dtype=np.uint8)):
        with pytest.raises(Defect):
            stream.push(wrong, 7)
    assert stream.position == 0


def test_nothing_pushed_is_zero(backend):
    """A partial of nothing is all zero, at any position, also twice in a row."""
    for start in (0, 5, 10):
        stream = ToeplitzStream(10, 3, seed_of(random_bits(12, 1)), start=start, backend=backend)
        stream.push(np.zeros(0, dtype=np.uint8), 0)
        assert stream.partial() == stream.partial() == b"\0" and stream.position == start


def test_input_is_not_kept(backend):
    """An array may be reused by the caller as soon as push returns."""
    seed, raw = random_bits(4200, 1), random_bits(4100, 2)
    packed = pack(raw)
    stream = ToeplitzStream(4100, 101, seed_of(seed), backend=backend)
    stream.push(packed, 4100)
    packed[:] = 0xFF
    assert stream.partial() == toeplitz_hash([(pack(raw), 4100)], 4100, 101, seed_of(seed), backend="definition")


def test_whole_string_is_demanded(backend):
    """The one-call form refuses a raw string of another length than announced."""
    seed = seed_of(random_bits(12, 1))
    _refused("raw-length", lambda: toeplitz_hash([(pack(random_bits(9, 1)), 9)], 10, 3, seed, backend=backend))
