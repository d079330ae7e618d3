"""Model values as JSON documents and back; the one place that knows the field names on the wire and on paper.

Documents are plain dicts of str, int, float, bool, None, list; `seal.canonical` turns them into bytes.
Reading is strict: an unknown or missing field is an `InputError` with a JSON pointer.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from extractor.errors import InputError
from extractor.model import (
    CELLS, MAXIMUM_ROUNDS, Acceptance, CellCredit, Certificate, Convention, Declaration, ScoreTable, Settings, Tally, Term,
    cell_index, cells,
)

DECLARATION_FORMAT = "bellassay declaration 1"
CERTIFICATE_FORMAT = "bellassay certificate 1"
_REQUIRED = object()


class _Fields:
    """One JSON object being read: hands out each field once, then insists that nothing is left."""

    def __init__(self, value: object, pointer: str) -> None:
        if not isinstance(value, Mapping):
            raise InputError("a JSON object is needed here", code="bad-document", field=pointer or "/")
        self._left, self._pointer = dict(value), pointer

    def take(self, name: str, default: object = _REQUIRED) -> Any:
        value = self._left.pop(name, default)
        if value is _REQUIRED:
            raise InputError("is missing", code="missing-field", field=f"{self._pointer}/{name}")
        return value

    def items(self, name: str, length: int, default: object = _REQUIRED) -> tuple:
        value = self.take(name, default)
        if not isinstance(value, (list, tuple)) or len(value) != length:
            raise InputError(f"a list of {length} values is needed here", code="bad-document", field=f"{self._pointer}/{name}")
        return tuple(value)

    def done(self) -> None:
        for name in self._left:
            raise InputError("is not a known field", code="unknown-field", field=f"{self._pointer}/{name}")


def declaration_document(declaration: Declaration) -> dict[str, Any]:
    d, s = declaration, declaration.settings
    return {
        "format": DECLARATION_FORMAT,
        "rig": d.rig,
        "purpose": d.purpose,
        "rounds": d.rounds,
        "settings": {
            "test_probability": s.test_probability,
            "distribution": list(s.distribution),
            "generation": list(s.generation),
            "bias": s.bias,
        },
        "convention": {"minus": list(d.convention.minus), "flip": d.convention.flip},
        "no_click": {"a": d.no_click[0], "b": d.no_click[1]},
        "method": d.method,
        "order": d.order,
        "soundness": d.soundness,
        "output": {"rule": d.output_rule, "bits": d.output_bits},
        "table": None if d.table is None else {"test": list(d.table.test), "generation": list(d.table.generation)},
        "acceptance": None if d.acceptance is None else {
            "count": d.acceptance.count, "limit": d.acceptance.limit, "tangent": d.acceptance.tangent},
        "disclosure": d.disclosure,
        "seed_source": d.seed_source,
        "expected_score": d.expected_score,
        "calibration": None if d.calibration_digest is None else {
            "digest": d.calibration_digest, "rounds": d.calibration_rounds},
    }


def declaration_from(document: object) -> Declaration:
    """The declaration in a document. Errors raised: InputError with the JSON pointer of the field at fault."""
    top = _Fields(document, "")
    if top.take("format") != DECLARATION_FORMAT:
        raise InputError(f"is not {DECLARATION_FORMAT!r}", code="bad-format", field="/format")
    settings = _Fields(top.take("settings"), "/settings")
    convention = _Fields(top.take("convention", {}), "/convention")
    no_click = _Fields(top.take("no_click", {}), "/no_click")
    output = _Fields(top.take("output"), "/output")
    order = top.take("order", None)
    table_value, acceptance_value = top.take("table", None), top.take("acceptance", None)
    calibration_value = top.take("calibration", None)
    table = acceptance = None
    if table_value is not None:
        table_fields = _Fields(table_value, "/table")
        if order is None:
            raise InputError("a table needs an order", code="missing-field", field="/order")
        table = ScoreTable(order, table_fields.items("test", 16), table_fields.items("generation", 4))
        table_fields.done()
    if acceptance_value is not None:
        rule = _Fields(acceptance_value, "/acceptance")
        acceptance = Acceptance(rule.take("count"), rule.take("limit"), rule.take("tangent"))
        rule.done()
    digest = calibration_rounds = None
    if calibration_value is not None:
        calibration = _Fields(calibration_value, "/calibration")
        digest, calibration_rounds = calibration.take("digest"), calibration.take("rounds")
        calibration.done()
        if not isinstance(digest, str) or not re.fullmatch(r"sha256:[0-9a-f]{64}", digest):
            raise InputError("is not sha256: and 64 hexadecimal digits", code="bad-digest", field="/calibration/digest")
        if type(calibration_rounds) is not int or not 1 <= calibration_rounds <= MAXIMUM_ROUNDS:
            raise InputError("is not a number of rounds", code="bad-number", field="/calibration/rounds")
    flip = convention.take("flip", False)
    if not isinstance(flip, bool):
        raise InputError("is neither true nor false", code="bad-document", field="/convention/flip")
    declaration = Declaration(
        rig=top.take("rig"),
        purpose=top.take("purpose", ""),
        rounds=top.take("rounds"),
        settings=Settings(
            settings.take("test_probability", 1.0),
            settings.items("distribution", 4, (0.25,) * 4),
            settings.items("generation", 2, (0, 0)),
            settings.take("bias", 0.0),
        ),
        convention=Convention(convention.items("minus", 2, (1, 1)), flip),
        no_click=(no_click.take("a", None), no_click.take("b", None)),
        method=top.take("method"),
        order=order,
        soundness=top.take("soundness"),
        output_rule=output.take("rule"),
        output_bits=output.take("bits"),
        table=table,
        acceptance=acceptance,
        disclosure=top.take("disclosure", "confidential"),
        seed_source=top.take("seed_source", "system"),
        expected_score=top.take("expected_score", None),
        calibration_digest=digest,
        calibration_rounds=calibration_rounds,
    )
    for fields in (settings, convention, no_click, output, top):
        fields.done()
    return declaration


def tally_counts(tally: Tally) -> list[dict[str, int]]:
    """The occupied cells as objects t, x, y, a, b, n, in index order."""
    return [dict(zip("txyab", cell)) | {"n": tally.counts[i]} for i, cell in cells() if tally.counts[i]]


def tally_from(document: object, pointer: str = "/counts") -> Tally:
    """A tally from a list of objects t, x, y, a, b, n (t may be left out: 1), or from an object with such a list as `counts`."""
    if isinstance(document, Mapping):
        document = document.get("counts")
    if not isinstance(document, list):
        raise InputError("a list of objects t, x, y, a, b, n is needed", code="bad-tally", field=pointer)
    counts = [0] * CELLS
    for place, item in enumerate(document):
        fields = _Fields(item, f"{pointer}/{place}")
        cell = (fields.take("t", 1), *(fields.take(name) for name in "xyab"))
        n = fields.take("n")
        fields.done()
        if any(type(bit) is not int or bit not in (0, 1) for bit in cell):
            raise InputError(f"{cell} is not a cell: t, x, y, a, b are 0 or 1", code="bad-tally", field=f"{pointer}/{place}")
        if counts[cell_index(*cell)]:
            raise InputError("the cell stands twice", code="bad-tally", field=f"{pointer}/{place}")
        counts[cell_index(*cell)] = n
    return Tally(tuple(counts))


def certificate_document(certificate: Certificate) -> dict[str, Any]:
    c = certificate
    return {
        "format": CERTIFICATE_FORMAT,
        "outcome": c.outcome,
        "reason": c.reason,
        "method": c.method,
        "soundness": c.soundness,
        "rounds": c.rounds,
        "declared_rounds": c.declared_rounds,
        "certified_length": c.certified_length,
        "available_bits": c.available_bits,
        "raw_bits": c.raw_bits,
        "seed_bits": c.seed_bits,
        "tally": tally_counts(c.tally),
        "terms": [{"name": t.name, "bits": t.bits, "meaning": t.meaning, "source": t.source} for t in c.terms],
        "cells": [
            {"t": k.t, "x": k.x, "y": k.y, "a": k.a, "b": k.b, "n": k.rounds, "credit_bits": k.credit_bits}
            for k in c.cells
        ],
        "numbers": dict(c.numbers),
        "assumptions": list(c.assumptions),
        "cautions": list(c.cautions),
    }


def certificate_from(document: object) -> Certificate:
    """The certificate in a document; whether it is a true one is for `seal.verify` to say."""
    top = _Fields(document, "")
    if top.take("format") != CERTIFICATE_FORMAT:
        raise InputError(f"is not {CERTIFICATE_FORMAT!r}", code="bad-format", field="/format")
    top.take("seed_bits")
    try:
        certificate = Certificate(
            outcome=top.take("outcome"), reason=top.take("reason"), method=top.take("method"),
            soundness=top.take("soundness"), rounds=top.take("rounds"), declared_rounds=top.take("declared_rounds"),
            certified_length=top.take("certified_length"), available_bits=top.take("available_bits"),
            raw_bits=top.take("raw_bits"), tally=tally_from(top.take("tally"), "/tally"),
            terms=tuple(Term(**term) for term in top.take("terms")),
            cells=tuple(
                CellCredit(k["t"], k["x"], k["y"], k["a"], k["b"], k["n"], k["credit_bits"]) for k in top.take("cells")),
            numbers=dict(top.take("numbers")),
            assumptions=tuple(top.take("assumptions")), cautions=tuple(top.take("cautions")),
        )
    except (TypeError, KeyError) as fault:
        raise InputError(f"is not a certificate: {fault}", code="bad-document", field="/") from None
    top.done()
    return certificate
