"""Kinds of trouble, and who must act.

InputError    something handed in is wrong          the caller corrects it
ProofError    evidence does not hold                the reader stops trusting it
Defect        our own arithmetic or order is broken we correct the program
A run that earns too little is none of these: it is a result (`Certificate.outcome == "refused"`).
"""

from __future__ import annotations


class InputError(ValueError):
    """Something handed in is wrong: what, where and what to do about it.

    code   stable word for programs, kebab-case, e.g. "not-a-bit"
    file   name of the file at fault, if any
    row    round (data row) within that file, counted from 1, if any
    field  field at fault: a plane ("x", "y", "a", "b", "t", "round") or a JSON pointer ("/soundness")
    """

    def __init__(self, message: str, *, code: str = "bad-input", file: str | None = None,
                 row: int | None = None, field: str | None = None) -> None:
        self.message, self.code, self.file, self.row, self.field = message, code, file, row, field
        place = ", ".join(
            part for part in (
                f"file {file}" if file else "",
                f"row {row}" if row is not None else "",
                f"field {field}" if field else "",
            ) if part
        )
        super().__init__(f"{place}: {message}" if place else message)


class ProofError(Exception):
    """A digest, signature, proof or recomputed number does not agree with what is claimed."""

    def __init__(self, message: str, *, code: str = "proof-failed") -> None:
        self.message, self.code = message, code
        super().__init__(message)


class Defect(RuntimeError):
    """An invariant of our own is broken; never the fault of the input."""
