"""The elementary functions behind table certificates keep the errors they state."""

from __future__ import annotations

from decimal import Decimal

import numpy as np

from extractor.entropy import portable
from extractor.entropy.numerics import exactly


def test_log_and_expm1_keep_their_errors():
    """Against 60-digit arithmetic: 8 U (1 + |ln x|) for log; 8 U relative near 0 and 8 U (1 + |x|) e^x beyond for
    expm1."""
    rng = np.random.default_rng(1)
    x = np.concatenate([np.exp(rng.uniform(-40, 1, 1500)), 1 + rng.normal(size=500) * 1e-7])
    with exactly():
        for value, got in zip(x, portable.log(x)):
            assert abs(float(Decimal(value).ln() - Decimal(got))) <= 8 * portable.U * (1 + abs(got))
        x = np.concatenate([rng.uniform(-30, 30, 1500), rng.normal(size=500) * 1e-9, rng.uniform(-0.33, 0.33, 500)])
        for value, got in zip(x, portable.expm1(x)):
            error = abs(float(Decimal(value).exp() - 1 - Decimal(got)))
            allowed = 8 * abs(got) if abs(value) < 1 / 3 else 8 * (1 + abs(value)) * float(np.exp(value)) + 4
            assert error <= allowed * portable.U


def test_the_quarter_turn():
    """cos and sin are within 4 U, squares add up to 1, ends are exact to rounding."""
    part = np.arange(0, 2**16 + 1, 7) / 2**16
    c, s = portable.quarter_turn(part)
    assert np.max(np.abs(c - np.cos(part * np.pi / 2))) <= 4 * portable.U
    assert np.max(np.abs(s - np.sin(part * np.pi / 2))) <= 4 * portable.U
    assert portable.quarter_turn(np.array([0.0, 1.0]))[0].tolist() == [1.0, 0.0]


def test_jacobi_diagonalises():
    """Six sweeps diagonalise random symmetric matrices and the rotation reproduces them."""
    rng = np.random.default_rng(2)
    k = rng.normal(size=(4, 4, 200))
    k = k + k.transpose(1, 0, 2)
    start, v = k.copy(), np.zeros((4, 4, 200))
    v[range(4), range(4)] = 1
    portable.rotate_towards_diagonal(k, v, 6)
    off = k.copy()
    off[range(4), range(4)] = 0
    assert np.max(np.abs(off)) < 1e-13
    assert np.max(np.abs(np.einsum("ian,abn,jbn->ijn", v, k, v) - start)) < 1e-13
