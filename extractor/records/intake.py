"""The one gate every format passes: which fields there are, which values they may have, and what the declaration asks.

A format module hands over columns (one byte per value) or packed planes, plus the `round` numbers if the file has
them; a `RoundBatch` comes back, or an `InputError` naming file, row and field. The earliest row at fault is the one
reported. Nothing is dropped, replaced or guessed, except that a no-click takes the outcome the declaration gave it.

Codes raised here: missing-field, unknown-field, repeated-field, empty-file, too-many-rounds, not-a-bit,
no-click-undeclared, tail-bits-set, not-a-test-round, generation-settings, missing-round, repeated-round,
round-out-of-order, bad-round-number.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from extractor.errors import Defect, InputError
from extractor.model import MAXIMUM_ROUNDS, PLANES, RoundBatch, RoundRules
from extractor.records.bits import first_set, packed_size

BATCH_ROUNDS = 2**20
NO_CLICK = 2
ROUND_NUMBER_LIMIT = 10**18       # round numbers are below this: 18 digits, safe in 64-bit integers
_REQUIRED = ("x", "y", "a", "b")
_ALL_ONES = np.full(BATCH_ROUNDS // 8, 0xFF, np.uint8)
_ALL_ONES.flags.writeable = False


class Intake:
    """Checks the rounds of one file in order and counts them.

    rounds       rounds accepted so far; row numbers in errors are 1-based
    first_round  number of the first round, last_round of the last, if the file numbers them
    no_clicks    outcomes on sides a and b that were no-clicks
    """

    def __init__(self, name: str, rules: RoundRules, limit: int = MAXIMUM_ROUNDS) -> None:
        self.name, self.rules, self.limit = name, rules, limit
        self.rounds = 0
        self.first_round: int | None = None
        self.last_round: int | None = None
        self.no_clicks = [0, 0]

    def fault(self, message: str, code: str, row: int | None = None, field: str | None = None) -> InputError:
        """An InputError about this file, to be raised by the caller."""
        return InputError(message, code=code, file=self.name, row=row, field=field)

    def check_fields(self, names: Sequence[str], numbered: bool = True) -> None:
        """Refuse a set of field names that is not x, y, a, b with, perhaps, t and (if `numbered`) round."""
        known = PLANES + (("round",) if numbered else ())
        for place, field in enumerate(names):
            if field not in known:
                raise self.fault(f"is not a known field; the fields are {', '.join(known)}",
                                 "unknown-field", field=_shown(field))
            if field in names[:place]:
                raise self.fault("stands twice", "repeated-field", field=field)
        for field in _REQUIRED:
            if field not in names:
                raise self.fault("is missing", "missing-field", field=field)
        if "t" not in names and self.rules.test_probability < 1.0:
            raise self.fault("is missing, and the declaration has generation rounds: say for each round whether "
                             "it is a test", "missing-field", field="t")

    def expect(self, rounds: int) -> None:
        """Refuse a declared number of rounds that is none or too many."""
        if rounds < 1:
            raise self.fault("holds no rounds", "empty-file")
        if rounds > self.limit:
            raise self.fault(f"holds {rounds} rounds; at most {self.limit} are accepted", "too-many-rounds")

    def values(self, columns: Mapping[str, np.ndarray], numbers: np.ndarray | None = None,
               kinds: Mapping[str, str] | None = None) -> RoundBatch:
        """A batch from one byte per value.

        columns  field -> uint8 array of shape (n,), 1 <= n <= BATCH_ROUNDS, any stride
        numbers  integer array of shape (n,): the round numbers
        kinds    field -> numpy kind "b", "u" or "i" of what the bytes were; a bool has no value 2
        """
        columns = {field: np.ascontiguousarray(column) for field, column in columns.items()}
        faults: list[tuple[int, InputError]] = []
        if numbers is not None:
            self._check_numbers(numbers, faults)
        for field, column in columns.items():
            highest = int(column.max())
            if highest <= 1:
                continue
            kind = kinds.get(field, "u") if kinds else "u"
            if field in ("a", "b") and kind != "b":
                if highest > NO_CLICK:
                    self._not_a_bit(field, column, NO_CLICK, kind, faults)
                columns[field] = self._assign_no_clicks(field, column, faults)
            else:
                self._not_a_bit(field, column, 1, kind, faults)
        rounds = columns["x"].size
        if faults:
            index, error = min(faults, key=lambda item: item[0])
            if index:       # a fault in an earlier row of another kind goes first
                before = None if numbers is None else numbers[:index]
                self.values({field: column[:index] for field, column in columns.items()}, before, kinds)
            raise error
        if numbers is not None:
            self.last_round = int(numbers[-1])
            self.first_round = int(numbers[0]) if self.first_round is None else self.first_round
        return self.planes({field: np.packbits(column, bitorder="little") for field, column in columns.items()}, rounds)

    def planes(self, planes: Mapping[str, np.ndarray], rounds: int) -> RoundBatch:
        """A batch from packed planes: field -> uint8 array of shape (ceil(rounds / 8),)."""
        if self.rounds + rounds > self.limit:
            raise self.fault(f"holds more than {self.limit} rounds, the most that are accepted", "too-many-rounds",
                             row=self.limit + 1)
        if rounds % 8:
            for field, plane in planes.items():
                if plane[-1] >> (rounds % 8):
                    raise self.fault(f"has bits set beyond its last round, {self.rounds + rounds}",
                                     "tail-bits-set", field=field)
        checked = dict(planes)
        if "t" in checked:
            self._check_generation(checked, rounds)
        else:
            checked["t"] = _ones(rounds)
        batch = RoundBatch(rounds, checked)
        self.rounds += rounds
        return batch

    def number_fault(self, row: int, expected: int | None, found: int) -> InputError:
        """What is wrong with a round number that is not the expected one."""
        if not 0 <= found < ROUND_NUMBER_LIMIT or expected is None:
            return self.fault(f"{found} is not a round number: these are whole numbers from 0 to 10^18 - 1",
                              "bad-round-number", row, "round")
        if found > expected:
            return self.fault(f"round {expected} is missing here: round {found} follows round {expected - 1}. "
                              "If it stands further down, sort the file by round", "missing-round", row, "round")
        if self.first_round is not None and found < self.first_round:
            return self.fault(f"round {found} follows round {expected - 1}, but the file began with round "
                              f"{self.first_round}: sort it by round", "round-out-of-order", row, "round")
        return self.fault(f"round {found} was there before; round {expected} should stand here",
                          "repeated-round", row, "round")

    def _check_numbers(self, numbers: np.ndarray, faults: list[tuple[int, InputError]]) -> None:
        first = int(numbers[0]) if self.last_round is None else self.last_round + 1
        row = self.rounds + 1
        if self.first_round is None:
            if not 0 <= first < ROUND_NUMBER_LIMIT:
                faults.append((0, self.number_fault(row, None, first)))
                return
            self.first_round = first
        # An unsigned number of 2^63 or more turns negative here, so it never equals an expected one.
        as_signed = numbers.astype(np.int64)
        expected = np.arange(first, first + numbers.size, dtype=np.int64)
        wrong = as_signed != expected
        if first + numbers.size > ROUND_NUMBER_LIMIT:
            wrong[ROUND_NUMBER_LIMIT - first:] = True
        if wrong.any():
            index = int(np.argmax(wrong))
            faults.append((index, self.number_fault(row + index, first + index, int(numbers[index]))))

    def _not_a_bit(self, field: str, column: np.ndarray, highest: int, kind: str,
                   faults: list[tuple[int, InputError]]) -> None:
        index = int(np.argmax(column > highest))
        value = int(column[index])
        value -= 256 if kind == "i" and value > 127 else 0
        allowed = "0, 1 or, for a no-click, 2" if highest == NO_CLICK else "0 or 1"
        faults.append((index, self.fault(f"{value} is not {allowed}", "not-a-bit", self.rounds + index + 1, field)))

    def _assign_no_clicks(self, field: str, column: np.ndarray, faults: list[tuple[int, InputError]]) -> np.ndarray:
        side = "ab".index(field)
        missed = column == NO_CLICK
        count = int(np.count_nonzero(missed))
        assigned = self.rules.no_click[side]
        if count and assigned is None:
            index = int(np.argmax(missed))
            faults.append((index, self.fault(
                "a no-click (2), but the declaration gives no-clicks on this side no outcome: set its no_click",
                "no-click-undeclared", self.rounds + index + 1, field)))
            return column
        self.no_clicks[side] += count
        return np.where(missed, np.uint8(assigned or 0), column)

    def _check_generation(self, planes: Mapping[str, np.ndarray], rounds: int) -> None:
        generation = ~planes["t"]
        if rounds % 8:
            generation[-1] &= 0xFF >> (-rounds % 8)
        if self.rules.test_probability >= 1.0:
            index = first_set(generation)
            if index is not None:
                raise self.fault("a generation round (t = 0), but the declaration says every round is a test round",
                                 "not-a-test-round", self.rounds + index + 1, "t")
            return
        wrong = {}
        for field, value in zip("xy", self.rules.generation_settings):
            index = first_set(generation & (~planes[field] if value else planes[field]))
            if index is not None:
                wrong[field] = index
        if wrong:
            field = min(wrong, key=lambda name: wrong[name])
            x, y = self.rules.generation_settings
            raise self.fault("a generation round (t = 0) that does not have the declared generation settings "
                             f"x = {x}, y = {y}", "generation-settings", self.rounds + wrong[field] + 1, field)

    def finish(self) -> None:
        """To be called after the last batch. Errors raised: InputError if there was none."""
        if not self.rounds:
            raise self.fault("holds no rounds", "empty-file")


def _ones(rounds: int) -> np.ndarray:
    size = packed_size(rounds)
    if size > _ALL_ONES.size:
        raise Defect(f"a batch of {rounds} rounds is larger than {BATCH_ROUNDS}")
    if rounds % 8 == 0:
        return _ALL_ONES[:size]
    plane = _ALL_ONES[:size].copy()
    plane[-1] = 0xFF >> (-rounds % 8)
    return plane


def _shown(field: str) -> str:
    """A field name fit for a message: short, printable."""
    text = "".join(c if c.isprintable() else "?" for c in field[:40])
    return text or "(empty name)"
