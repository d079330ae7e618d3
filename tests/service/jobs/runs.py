"""Making runs directly in the store, the way the API does it."""

from __future__ import annotations

import hashlib
import secrets
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from extractor.documents import declaration_from
from extractor.seal import canonical
from service.clock import now_text
from service.collection import open_stored_bits
from service.custody.vault import write_vault
from service.parts import Parts
from service.runs import insert_run, new_id, prepare_run
from service.sealing import seal
from service.store.blobs import segment_name
from service.store.contracts import DeclarationRow, RunRow
from service.uploads import RawBody, take_segment
from tests.service.harness import document, split_npz


class SealedRuns:
    """Sealed runs in opened parts."""

    def __init__(self, parts: Parts) -> None:
        self.parts = parts

    def make(self, files: Sequence[bytes] | None = None, **changed: Any) -> str:
        parts, body = self.parts, document(**changed)
        digest, declaration_id = canonical.digest(body), new_id("d")
        with parts.store.write() as transaction:
            index = parts.ledger.append(transaction, "declaration", declaration_id, {"digest": digest}, now_text())
            declared = transaction.insert_declaration(
                DeclarationRow(declaration_id, "north", digest, now_text(), index, body))
        run_id = new_id("r")
        prepare_run(parts, run_id)
        with parts.store.write() as transaction:
            row = insert_run(transaction, run_id, "north", declared)
        total = 0
        for number, data in enumerate(files or split_npz(7_000), 1):
            total += self._segment(row, body, number, data)
        seal(parts, run_id, number, total)
        return run_id

    def _segment(self, row: RunRow, body: dict[str, Any], number: int, data: bytes) -> int:
        path = self.parts.blobs.folder(row.id) / f"body-{secrets.token_hex(4)}"
        write_vault(path, self.parts.keys.load(row.id), "body", data)
        raw = RawBody(path, "body", hashlib.sha256(data).digest(), len(data))
        made, _ = take_segment(self.parts, row, declaration_from(body), number, raw, f"file {number}")
        path.unlink()
        return made.rounds


def row_of(parts: Parts, run_id: str) -> RunRow:
    with parts.store.read() as reading:
        return reading.get_run(run_id)


def kinds_of(parts: Parts, run_id: str) -> list[str]:
    """Kinds of the ledger entries about a run."""
    with parts.store.read() as reading:
        return [entry.kind for entry in reading.ledger_entries_about(run_id)]


def steps_of(parts: Parts, run_id: str) -> list[tuple[str, str | None]]:
    """State and stage of every event."""
    with parts.store.read() as reading:
        return [(event.document["state"], event.document["stage"]) for event in reading.events_after(run_id)]


def bits_of(parts: Parts, run_id: str) -> bytes:
    stored = open_stored_bits(parts, run_id)
    with stored.file:
        return stored.read_at(0, stored.bytes)


def damage(parts: Parts, run_id: str, name: str, at: int = -40) -> Path:
    """Flips a bit of a stored file."""
    path = parts.blobs.path(run_id, name)
    data = bytearray(path.read_bytes())
    data[at] ^= 1
    path.write_bytes(data)
    return path


SEGMENT = segment_name
