"""Elementary functions that give the same bits on every machine, for arrays of float64.

Only operations are used that IEEE 754 rounds correctly (+ - * / and the square root), or that are exact (frexp, ldexp,
rint, comparison). numpy applies each to one array element at a time, so neither a C library, a linear algebra library
nor the width of a vector unit can change a result. No sum is left to a library: sums are written out.

U is half the distance from 1 to the next float. Errors are stated for arguments met here and were compared with
40-digit
arithmetic in the tests.
"""

from __future__ import annotations

import numpy as np

U = 2.0**-53
_LN2_HIGH = float.fromhex("0x1.62e42fee00000p-1")     # ln 2, 33 bits: whole multiples up to 2^20 are exact
_LN2_LOW = float.fromhex("0x1.a39ef35793c76p-33")     # the rest
_SQRT_HALF = float.fromhex("0x1.6a09e667f3bcdp-1")
_LOG = [1.0 / (2 * n + 1) for n in range(11)]         # ln((1+s)/(1-s)) = 2 s (1 + s^2/3 + s^4/5 + ...), |s| < 0.1716
_FACTORIAL = [1.0]
for _n in range(1, 20):
    _FACTORIAL.append(_FACTORIAL[-1] * _n)            # exact: 19! < 2^57 is a multiple of 2^16
_EXP = [1.0 / f for f in _FACTORIAL[1:16]]            # (e^r - 1)/r, |r| < 0.347
_SIN = [(-1) ** n / _FACTORIAL[2 * n + 1] for n in range(9)]
_COS = [(-1) ** n / _FACTORIAL[2 * n] for n in range(9)]
_HALF_PI = float.fromhex("0x1.921fb54442d18p+0")


def _horner(coefficients: list[float], x: np.ndarray) -> np.ndarray:
    total = np.full_like(x, coefficients[-1])
    for c in reversed(coefficients[:-1]):
        total *= x
        total += c
    return total


def log(x: np.ndarray) -> np.ndarray:
    """Natural logarithm of normal numbers > 0: absolute error below 8 U (1 + |ln x|)."""
    mantissa, exponent = np.frexp(x)
    small = mantissa < _SQRT_HALF
    mantissa = np.where(small, 2 * mantissa, mantissa)
    exponent = exponent - small
    s = (mantissa - 1) / (mantissa + 1)
    return exponent * _LN2_HIGH + (exponent * _LN2_LOW + 2 * s * _horner(_LOG, s * s))


def expm1(x: np.ndarray) -> np.ndarray:
    """e^x - 1 for |x| < 700: error below 8 U |e^x - 1| for |x| < 1/3, else below 8 U (1 + |x|) e^x + 4 U."""
    k = np.rint(x * (1 / (_LN2_HIGH + _LN2_LOW)))
    r = (x - k * _LN2_HIGH) - k * _LN2_LOW
    scale = np.ldexp(1.0, k.astype(np.int64))
    return scale * (r * _horner(_EXP, r)) + (scale - 1)


def quarter_turn(fraction: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """cos and sin of fraction * pi/2, 0 <= fraction <= 1 with few digits (1 - fraction exact): absolute error below 4
    U."""
    swap = fraction > 0.5
    angle = np.where(swap, 1 - fraction, fraction) * _HALF_PI
    square = angle * angle
    c, s = _horner(_COS, square), angle * _horner(_SIN, square)
    return np.where(swap, s, c), np.where(swap, c, s)


_ROUNDS = (((0, 2), (1, 3)), ((0, 1), (2, 3)),
        ((0, 1), (3, 2)))     # (first of each pair), (second): two disjoint pairs at a time


def rotate_towards_diagonal(k: np.ndarray, v: np.ndarray, sweeps: int) -> None:
    """Jacobi sweeps on symmetric 4x4 matrices k (4, 4, nodes), in place; v (4, 4, nodes) becomes v times the
    rotation."""
    for _ in range(sweeps):
        for left, right in _ROUNDS:
            left, right = list(left), list(right)
            off = k[left, right]
            tiny = np.abs(off) < 1e-290
            ratio = (k[right, right] - k[left, left]) / (2 * np.where(tiny, 1.0, off))
            ratio = np.minimum(np.maximum(ratio, -1e150), 1e150)
            tangent = np.where(ratio < 0, -1.0, 1.0) / (np.abs(ratio) + np.sqrt(1 + ratio * ratio))
            tangent = np.where(tiny, 0.0, tangent)
            c = 1 / np.sqrt(1 + tangent * tangent)
            s = tangent * c
            for matrix in (k, v):
                one, two = matrix[:, left], matrix[:, right]
                matrix[:, left], matrix[:, right] = c * one - s * two, s * one + c * two
            one, two = k[left], k[right]
            k[left], k[right] = c[:, None] * one - s[:, None] * two, s[:, None] * one + c[:, None] * two
