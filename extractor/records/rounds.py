"""Start here: `open_rounds` turns a round file of any accepted format into checked, packed batches.

A new format is one module with NAME, `matches(head)` and `read(file, intake)`, entered in FORMATS.
"""

from __future__ import annotations

from collections.abc import Iterator
from types import ModuleType
from typing import BinaryIO

from extractor.errors import InputError
from extractor.model import MAXIMUM_ROUNDS, RoundBatch, RoundRules
from extractor.records import csv, npy, npz
from extractor.records.intake import Intake
from extractor.records.source import read_up_to

FORMATS: tuple[ModuleType, ...] = (npy, npz, csv)
_HEAD_BYTES = 256


class RoundFile:
    """One round file. Iterating reads it from the start and checks everything.

    Batches hold at most 2^20 rounds. They are provisional until the iteration has ended without an error: checksums,
    lengths and ends can only be judged then. The attributes below are set at that moment.

    format       "npy", "npz" or "csv"
    rounds       number of rounds
    first_round  number of the first round and last_round of the last, if the file has a round field, else None
    no_clicks    how many outcomes on side a and on side b were no-clicks and took the declared outcome
    """

    def __init__(self, file: BinaryIO, name: str, rules: RoundRules, reader: ModuleType, limit: int) -> None:
        self._file, self._name, self._rules, self._reader, self._limit = file, name, rules, reader, limit
        self.format: str = reader.NAME
        self.rounds = 0
        self.first_round: int | None = None
        self.last_round: int | None = None
        self.no_clicks: tuple[int, int] = (0, 0)

    def batches(self) -> Iterator[RoundBatch]:
        """The rounds in order. Errors raised: InputError with code, file, row (1-based) and field."""
        intake = Intake(self._name, self._rules, self._limit)
        yield from self._reader.read(self._file, intake)
        intake.finish()
        self.rounds, self.first_round, self.last_round = intake.rounds, intake.first_round, intake.last_round
        self.no_clicks = (intake.no_clicks[0], intake.no_clicks[1])

    def __iter__(self) -> Iterator[RoundBatch]:
        return self.batches()


def open_rounds(file: BinaryIO, name: str, rules: RoundRules, limit: int = MAXIMUM_ROUNDS) -> RoundFile:
    """A round file by its first bytes.

    file   seekable binary file object (anything with read and seek); it stays open and belongs to the caller
    name   what error texts call the file
    limit  most rounds that are accepted
    Errors raised: InputError "empty-file" or "unknown-format".
    """
    file.seek(0)
    head = read_up_to(file, _HEAD_BYTES)
    if not head:
        raise InputError("is empty", code="empty-file", file=name)
    for reader in FORMATS:
        if reader.matches(head):
            return RoundFile(file, name, rules, reader, limit)
    raise InputError("is none of NPY, NPZ and CSV", code="unknown-format", file=name)
