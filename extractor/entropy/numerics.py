"""Arithmetic for certified numbers: decimal, 60 digits, identical on every machine.

Python's `decimal` rounds ln, exp and sqrt correctly (General Decimal Arithmetic; `Context.ln`, `Context.exp`,
`Context.sqrt` in the library's reference), so a certificate does not depend on a processor or a C
library. One operation errs by at most 10**-59 relative. A certified number is the end of fewer than 10**4 such
operations, no intermediate value exceeds 10**25, and no divisor is below 2**-52, so the error of a number of bits stays
far below GUARD; GUARD is taken off (or put on) wherever a number is rounded against us.
The general power is avoided: the standard asks less of it than correct rounding.
"""

from __future__ import annotations

import decimal
import math
from decimal import Decimal

_CONTEXT = decimal.Context(
    prec=60, rounding=decimal.ROUND_HALF_EVEN, Emin=-10**15, Emax=10**15,
    traps=[decimal.InvalidOperation, decimal.DivisionByZero, decimal.Overflow],
)
GUARD = Decimal("1e-15")
ZERO, ONE, TWO = Decimal(0), Decimal(1), Decimal(2)


def exactly():
    """Context manager: the arithmetic described above, whatever the caller's decimal context is."""
    return decimal.localcontext(_CONTEXT)


with exactly():
    LN2 = TWO.ln()
    SQRT2 = TWO.sqrt()
    TSIRELSON_SCORE = (TWO + SQRT2) / 4 + Decimal("1e-58")   # winning probability (2 + sqrt 2)/4, rounded up
LOCAL_SCORE = Decimal("0.75")


def number(value: float | int | Decimal) -> Decimal:
    """The exact value of a float or whole number."""
    return value if isinstance(value, Decimal) else Decimal(value)


def log2(value: Decimal) -> Decimal:
    return value.ln() / LN2


def exp2(value: Decimal) -> Decimal:
    return (value * LN2).exp()


def power(base: Decimal, exponent: Decimal) -> Decimal:
    """base**exponent for base >= 0, exponent > 0."""
    return (exponent * base.ln()).exp() if base > 0 else ZERO


def down(value: Decimal) -> float:
    """Largest float not above value."""
    nearest = float(value)
    return nearest if Decimal(nearest) <= value else math.nextafter(nearest, -math.inf)


def up(value: Decimal) -> float:
    """Smallest float not below value."""
    return -down(-value)


def floor_bits(value: Decimal) -> int:
    """Whole bits in value, rounded down after the guard is taken off."""
    return int((value - GUARD).to_integral_value(rounding=decimal.ROUND_FLOOR))
