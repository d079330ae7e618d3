"""Runs as others see them: opening one, and the document that the API, events and pages show."""

from __future__ import annotations

import secrets
from collections.abc import Sequence
from typing import Any

from extractor.documents import declaration_from
from extractor.errors import Defect
from extractor.model import Declaration
from service.clock import now_text
from service.custody.tokens import Identity
from service.errors import NotFound
from service.parts import Parts
from service.store.contracts import DeclarationRow, Reading, RunRow, SegmentTotals, Transaction

SALT_BYTES = 32
PARTS_OF_A_RUN = ("segments", "seal", "seed", "events", "certificate", "report", "bundle", "bits", "collection")


def new_id(letter: str) -> str:
    """A fresh object id: a letter for the kind and 64 random bits."""
    return letter + secrets.token_hex(8)


def rounds_used_before(reading: Reading, row: RunRow, planes_digests: Sequence[str]) -> str | None:
    """A sentence if rounds with one of these digests are in another sealed run, else None.

    Two hashes of the same rounds together hold more bits than any certificate covers, and rounds that were sealed before
    are older than a declaration made since. A run that failed may be repeated under its own declaration.
    """
    for other in reading.runs_with_rounds(planes_digests, other_than=row.id):
        if other.state == "failed" and other.declaration_id == row.declaration_id:
            continue
        where = f"run {other.id}" if other.owner == row.owner else "another run"
        return (f"rounds of this run were sealed before, in {where}; the same rounds are never certified twice, because two "
                "outputs together would hold more bits than the rounds")
    return None


def prepare_run(parts: Parts, run_id: str) -> None:
    """Folders and key of a run about to be opened. If the run is never opened, an unused key stays behind."""
    parts.blobs.make(run_id)
    parts.keys.create(run_id)


def insert_run(transaction: Transaction, run_id: str, owner: str, declaration: DeclarationRow) -> RunRow:
    """Opens the run: row and first event."""
    row = transaction.insert_run(RunRow(
        id=run_id, owner=owner, declaration_id=declaration.id, created=now_text(),
        ledger_salt=secrets.token_bytes(SALT_BYTES), seed_source=declaration.document["seed_source"]))
    tell(transaction, run_id)
    return row


def owned_run(reading: Reading, run_id: str, identity: Identity) -> RunRow:
    """The run if it is the caller's (or the caller is an admin). Errors raised: NotFound."""
    row = reading.get_run(run_id)
    if row is None or not (row.owner == identity.owner or identity.may("admin")):
        raise NotFound("run")
    return row


def owned_declaration(reading: Reading, declaration_id: str, identity: Identity) -> DeclarationRow:
    """The declaration if it is the caller's (or the caller is an admin). Errors raised: NotFound."""
    row = reading.get_declaration(declaration_id)
    if row is None or not (row.owner == identity.owner or identity.may("admin")):
        raise NotFound("declaration")
    return row


def declaration_of(reading: Reading, row: RunRow) -> Declaration:
    """The declaration a run was opened under."""
    found = reading.get_declaration(row.declaration_id)
    if found is None:
        raise Defect(f"run {row.id} has no declaration")
    return declaration_from(found.document)


def run_document(row: RunRow, totals: SegmentTotals) -> dict[str, Any]:
    """The run as JSON; holds nothing secret."""
    sealed = None
    if row.sealed_time is not None:
        sealed = {"segments": row.sealed_segments, "rounds": row.sealed_rounds, "time": row.sealed_time}
    base = f"/v1/runs/{row.id}"
    return {
        "id": row.id,
        "declaration": row.declaration_id,
        "state": row.state,
        "stage": row.stage,
        "fraction": row.fraction,
        "eta_s": row.eta_s,
        "message": row.message,
        "created": row.created,
        "segments_received": totals.segments,
        "rounds_received": totals.rounds,
        "sealed": sealed,
        "certified_length": row.certified_length,
        "available_bits": row.available_bits,
        "seed": {"source": row.seed_source, "bits_needed": row.seed_bits, "received": row.seed_digest is not None},
        "waiting_for": row.waiting_for,
        "score": row.score,
        "diagnostics": row.diagnostics,
        "stage_seconds": row.stage_seconds,
        "finished": row.finished_time,
        "collected": row.collected_time,
        "erased": row.erased_time,
        "links": {"self": base, "declaration": f"/v1/declarations/{row.declaration_id}",
                  **{name: f"{base}/{name}" for name in PARTS_OF_A_RUN}},
    }


def describe(reading: Reading, rows: list[RunRow]) -> list[dict[str, Any]]:
    """Documents of several runs."""
    totals = reading.segment_totals(row.id for row in rows)
    return [run_document(row, totals[row.id]) for row in rows]


def tell(transaction: Transaction, run_id: str) -> None:
    """Adds the run as it now is to its events, within the transaction that changed it."""
    row = transaction.get_run(run_id)
    if row is None:
        raise Defect(f"run {run_id} is gone")
    transaction.append_event(run_id, describe(transaction, [row])[0])
