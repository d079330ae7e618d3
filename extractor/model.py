"""The frozen values that travel along the arrows of `pipeline.py`.

Nothing here computes a bound or touches a file. Invariants are checked on construction and a
broken one is an `InputError` naming the field, so that every later stage may rely on them.

Cells. A cell is a value of (t, x, y, a, b); its index is 16 t + 8 x + 4 y + 2 a + b, 0..31.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from extractor.errors import Defect, InputError

CELLS = 32
SETTING_PAIRS = ((0, 0), (0, 1), (1, 0), (1, 1))
PLANES = ("t", "x", "y", "a", "b")
MAXIMUM_ROUNDS = 2**50          # counts stay exact in JSON numbers and in float64
LEAST_ORDER = 1 + 1e-10         # what the largest run could use is above it
LEAST_SETTING = 1e-9            # probability of a setting pair in a test round
MOST_CREDIT = 1e9               # bits per round
FACTOR_METHODS = ("factor-table", "factor-closed")
METHODS = FACTOR_METHODS + ("eat-2018", "eat-2019")


def cell_index(t: int, x: int, y: int, a: int, b: int) -> int:
    """Index 0..31 of the cell (t, x, y, a, b)."""
    return 16 * t + 8 * x + 4 * y + 2 * a + b


def cells() -> Iterator[tuple[int, tuple[int, int, int, int, int]]]:
    """All 32 cells as (index, (t, x, y, a, b)), in index order."""
    for i in range(CELLS):
        yield i, (i >> 4 & 1, i >> 3 & 1, i >> 2 & 1, i >> 1 & 1, i & 1)


def _number(value: object, field: str, low: float, high: float, *, low_open: bool = False, high_open: bool = False) -> None:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise InputError(f"{value!r} is not a number", code="bad-number", field=field)
    if isinstance(value, int) and abs(value) > 2**53 or not math.isfinite(value):     # a long integer would not even become a float
        raise InputError("is not a finite number of ordinary size", code="bad-number", field=field)
    if value < low or value > high or (low_open and value == low) or (high_open and value == high):
        left, right = "(" if low_open else "[", ")" if high_open else "]"
        raise InputError(f"{value!r} is outside {left}{low:.12g}, {high:.7g}{right}", code="out-of-range", field=field)


def _whole(value: object, field: str, low: int, high: int) -> None:
    if isinstance(value, bool) or not isinstance(value, int):
        raise InputError(f"{value!r} is not a whole number", code="bad-number", field=field)
    if not low <= value <= high:
        raise InputError(f"{value} is outside {low}..{high}", code="out-of-range", field=field)


def _choice(value: object, field: str, choices: tuple[str, ...]) -> None:
    if value not in choices:
        raise InputError(f"{value!r} is none of {', '.join(choices)}", code="bad-choice", field=field)


def _pair(value: tuple, field: str) -> None:
    if tuple(value) not in SETTING_PAIRS or any(type(bit) is not int for bit in value):
        raise InputError(f"{value!r} is not a setting pair such as [0, 1]", code="bad-settings", field=field)


@dataclass(frozen=True)
class RoundBatch:
    """A bounded run of rounds as packed bit planes.

    rounds  number of rounds, >= 1
    planes  name in PLANES -> uint8 array of shape (ceil(rounds / 8),); bit i of the batch is
            bit (i mod 8), counted from the least significant, of byte i // 8; bits beyond `rounds` are zero
    """

    rounds: int
    planes: dict[str, np.ndarray]

    def __post_init__(self) -> None:
        size = (self.rounds + 7) // 8
        if self.rounds < 1 or set(self.planes) != set(PLANES):
            raise Defect("a batch needs at least one round and exactly the planes t, x, y, a, b")
        for name, plane in self.planes.items():
            if plane.dtype != np.uint8 or plane.shape != (size,):
                raise Defect(f"plane {name} has shape {plane.shape} {plane.dtype}, not ({size},) uint8")
            if self.rounds % 8 and plane[-1] >> (self.rounds % 8):
                raise Defect(f"plane {name} has bits set beyond round {self.rounds}")


@dataclass(frozen=True)
class RoundRules:
    """What a declaration says about how a round file is to be read.

    test_probability     1.0: every round is a test round and a t field is optional (all ones);
                         below 1: a t field is required and t = 0 rounds must carry `generation_settings`
    no_click             outcome assigned to a no-click (the value 2 in a file) on side a, b; None = refuse it
    """

    test_probability: float = 1.0
    generation_settings: tuple[int, int] = (0, 0)
    no_click: tuple[int | None, int | None] = (None, None)


@dataclass(frozen=True)
class Tally:
    """Counts of rounds per cell, shape (32,) by `cell_index`. Tallies of disjoint rounds add."""

    counts: tuple[int, ...]

    def __post_init__(self) -> None:
        if len(self.counts) != CELLS:
            raise InputError(f"a tally has {CELLS} counts, not {len(self.counts)}", code="bad-tally")
        for count in self.counts:
            if not isinstance(count, int) or isinstance(count, bool) or not 0 <= count <= MAXIMUM_ROUNDS:
                raise InputError(f"count {count!r} is not a whole number in 0..2^50", code="bad-tally")

    @classmethod
    def empty(cls) -> Tally:
        return cls((0,) * CELLS)

    @property
    def rounds(self) -> int:
        return sum(self.counts)

    def __add__(self, other: Tally) -> Tally:
        return Tally(tuple(p + q for p, q in zip(self.counts, other.counts)))

    def count(self, t: int, x: int, y: int, a: int, b: int) -> int:
        return self.counts[cell_index(t, x, y, a, b)]

    def test_counts(self) -> np.ndarray:
        """Counts of the test rounds, int64 array of shape (2, 2, 2, 2) indexed [x, y, a, b]."""
        return np.array(self.counts[16:], dtype=np.int64).reshape(2, 2, 2, 2)


@dataclass(frozen=True)
class Convention:
    """Which of the eight CHSH expressions is meant.

    minus  the setting pair whose correlator enters S with a minus sign
    flip   True: Bob's outcome is read inverted, which turns the sign of S
    A test round is won when a XOR b = [(x, y) = minus] XOR flip; S = 8 w - 4 for uniform settings.
    """

    minus: tuple[int, int] = (1, 1)
    flip: bool = False

    def __post_init__(self) -> None:
        _pair(self.minus, "/convention/minus")

    def wins(self, x: int, y: int, a: int, b: int) -> bool:
        return (a ^ b) == (((x, y) == self.minus) ^ self.flip)

    def sign(self, x: int, y: int) -> int:
        """Sign of E_xy in S: +1 or -1."""
        return -1 if ((x, y) == self.minus) ^ self.flip else 1


@dataclass(frozen=True)
class Settings:
    """How the settings of a round come about.

    test_probability  gamma = P(t = 1), in (0, 1]
    distribution      P(x, y | t = 1) for (0,0), (0,1), (1,0), (1,1)
    generation        the fixed settings of t = 0 rounds
    bias              tau >= 0: given everything before it, each setting bit of a test round may have a
                      probability off by up to tau from what `distribution` says
    """

    test_probability: float = 1.0
    distribution: tuple[float, float, float, float] = (0.25, 0.25, 0.25, 0.25)
    generation: tuple[int, int] = (0, 0)
    bias: float = 0.0

    def __post_init__(self) -> None:
        _number(self.test_probability, "/settings/test_probability", 0.0, 1.0, low_open=True)
        if len(self.distribution) != 4:
            raise InputError("four probabilities are needed", code="bad-settings", field="/settings/distribution")
        for p in self.distribution:
            _number(p, "/settings/distribution", LEAST_SETTING, 1.0)
        if abs(math.fsum(self.distribution) - 1.0) > 1e-12:
            raise InputError(f"the four probabilities add up to {math.fsum(self.distribution)!r}, not 1",
                             code="bad-settings", field="/settings/distribution")
        _pair(self.generation, "/settings/generation")
        _number(self.bias, "/settings/bias", 0.0, 0.25)

    @property
    def uniform(self) -> bool:
        return self.distribution == (0.25,) * 4 and self.bias == 0.0

    def allowed(self) -> tuple[tuple[Fraction, Fraction, Fraction, Fraction], ...]:
        """Extreme points of the test settings' allowed distributions, exact, each summing to 1, ordered like `distribution`.

        With a bias tau, P(first bit) and P(second bit | first) may each move by up to tau, with either station's bit first;
        the convex hull of these points holds every distribution the declaration allows. Raises InputError if a setting
        could stop varying, because then local boxes could win every round.
        """
        total = sum(map(Fraction, self.distribution))
        p00, p01, p10, p11 = (Fraction(p) / total for p in self.distribution)
        if self.bias == 0:
            return ((p00, p01, p10, p11),)
        tau = Fraction(self.bias)
        found: dict[tuple[Fraction, ...], None] = {}
        for (p, q, r, s), x_first in (((p00, p01, p10, p11), True), ((p00, p10, p01, p11), False)):
            for signs in itertools.product((-tau, tau), repeat=3):
                u, v, w = (chance + sign for chance, sign in zip((p + q, p / (p + q), r / (r + s)), signs))
                if not all(0 < chance < 1 for chance in (u, v, w)):
                    raise InputError("a setting could stop varying at this bias; lower the bias or use a more even distribution",
                                     code="bias-too-large", field="/settings/bias")
                p0, p1, p2, p3 = u * v, u * (1 - v), (1 - u) * w, (1 - u) * (1 - w)
                found[(p0, p1, p2, p3) if x_first else (p0, p2, p1, p3)] = None
        return tuple(found)


@dataclass(frozen=True)
class ScoreTable:
    """Credits of a declared score table, in bits per round: f = log2(F) / (order - 1).

    order       alpha, in (1, 2]
    test        16 credits of the test cells, index 8 x + 4 y + 2 a + b
    generation  4 credits of the generation cells, index 2 a + b
    """

    order: float
    test: tuple[float, ...]
    generation: tuple[float, float, float, float]

    def __post_init__(self) -> None:
        _number(self.order, "/order", LEAST_ORDER, 2.0)
        if len(self.test) != 16 or len(self.generation) != 4:
            raise InputError("a table has 16 test and 4 generation credits", code="bad-table", field="/table")
        for credit in self.test + self.generation:
            _number(credit, "/table", -MOST_CREDIT, MOST_CREDIT)


@dataclass(frozen=True)
class Acceptance:
    """The event on which a published accumulation bound rests, fixed before the data.

    count    "wins": accept if won test rounds >= limit; "losses": accept if lost test rounds <= limit
    limit    whole number of rounds
    tangent  winning probability in (3/4, (2 + sqrt 2)/4) at which the bound's tangent is taken
    """

    count: str
    limit: int
    tangent: float

    def __post_init__(self) -> None:
        if self.count not in ("wins", "losses"):
            raise InputError(f"{self.count!r} is neither wins nor losses", code="bad-acceptance", field="/acceptance/count")
        _whole(self.limit, "/acceptance/limit", 0, MAXIMUM_ROUNDS)
        _number(self.tangent, "/acceptance/tangent", 0.75, (2 + math.sqrt(2)) / 4, low_open=True, high_open=True)


@dataclass(frozen=True)
class Declaration:
    """Everything that is fixed before the rounds exist. Field texts: README, "A declaration by hand"."""

    rig: str
    rounds: int
    method: str
    soundness: float
    output_rule: str                     # "fixed": exactly output_bits or refusal; "credit": as many as earned, at most output_bits
    output_bits: int
    settings: Settings = Settings()
    convention: Convention = Convention()
    no_click: tuple[int | None, int | None] = (None, None)
    order: float | None = None           # alpha of the factor methods and eat-2019
    table: ScoreTable | None = None      # factor-table, factor-closed
    acceptance: Acceptance | None = None  # eat-2018, eat-2019
    disclosure: str = "confidential"     # "public": what report and tally reveal is paid for in the penalty
    seed_source: str = "system"          # or "upload"
    purpose: str = ""
    expected_score: float | None = None  # winning probability the rig was expected at
    calibration_digest: str | None = None
    calibration_rounds: int | None = None

    def __post_init__(self) -> None:
        for text, field, least in ((self.rig, "/rig", 1), (self.purpose, "/purpose", 0)):
            if not isinstance(text, str) or not least <= len(text) <= 200 or not text.isprintable():
                raise InputError(f"needs {least} to 200 characters, all printable", code="bad-declaration", field=field)
        _whole(self.rounds, "/rounds", 1, MAXIMUM_ROUNDS)
        _number(self.soundness, "/soundness", 0.0, 1.0, low_open=True, high_open=True)
        _choice(self.method, "/method", METHODS)
        _choice(self.output_rule, "/output/rule", ("fixed", "credit"))
        _whole(self.output_bits, "/output/bits", 1, 2 * self.rounds)
        _choice(self.disclosure, "/disclosure", ("confidential", "public"))
        _choice(self.seed_source, "/seed_source", ("system", "upload"))
        for value in self.no_click:
            if value is not None and (type(value) is not int or value not in (0, 1)):
                raise InputError(f"{value!r} is neither 0, 1 nor null", code="bad-declaration", field="/no_click")
        if self.expected_score is not None:
            _number(self.expected_score, "/expected_score", 0.0, 1.0)
        factor = self.method in FACTOR_METHODS
        if factor != (self.table is not None):
            raise InputError("the factor methods need a score table, the eat methods take none", code="bad-declaration", field="/table")
        if factor == (self.acceptance is not None):
            raise InputError("the eat methods need an acceptance rule, the factor methods take none",
                             code="bad-declaration", field="/acceptance")
        if self.method == "eat-2018":
            if self.order is not None:
                raise InputError("eat-2018 has no order; leave it null", code="bad-declaration", field="/order")
        else:
            if self.order is None:
                raise InputError(f"{self.method} needs an order between 1 and 2", code="bad-declaration", field="/order")
            _number(self.order, "/order", LEAST_ORDER, 2.0, high_open=self.method == "eat-2019")
        if self.table is not None and self.table.order != self.order:
            raise InputError("the table was made for another order", code="bad-declaration", field="/table")

    @property
    def raw_bits(self) -> int:
        """Length n of the raw string: both outcomes of every declared round, zero padded after an early stop."""
        return 2 * self.rounds

    @property
    def rules(self) -> RoundRules:
        return RoundRules(self.settings.test_probability, self.settings.generation, self.no_click)


@dataclass(frozen=True)
class Term:
    """One line of a certificate: signed bits, already rounded against us, and where the formula comes from."""

    name: str
    bits: float
    meaning: str
    source: str


@dataclass(frozen=True)
class CellCredit:
    """What one cell earned: `rounds` rounds at `credit_bits` bits per round."""

    t: int
    x: int
    y: int
    a: int
    b: int
    rounds: int
    credit_bits: float


@dataclass(frozen=True)
class Certificate:
    """The statement. It depends on nothing but the declaration and the tally.

    outcome            "certified" or "refused"
    reason             one sentence if refused, else None
    certified_length   bits that may be extracted; 0 if refused
    available_bits     what credit and penalty add up to, rounded down; may be negative
    terms              signed terms that add up to available_bits (before rounding down)
    cells              credit per occupied cell (factor methods), empty otherwise
    numbers            further declared or derived numbers of the method, name -> value
    """

    outcome: str
    reason: str | None
    method: str
    soundness: float
    rounds: int
    declared_rounds: int
    certified_length: int
    available_bits: int
    raw_bits: int
    tally: Tally
    terms: tuple[Term, ...]
    cells: tuple[CellCredit, ...]
    numbers: dict[str, float | int | str]
    assumptions: tuple[str, ...]
    cautions: tuple[str, ...]

    @property
    def seed_bits(self) -> int:
        """Uniform bits the Toeplitz matrix takes: n + m - 1, or 0 if nothing is extracted."""
        return self.raw_bits + self.certified_length - 1 if self.certified_length else 0
