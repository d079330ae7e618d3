"""Handing out the bits once: who may have them, the one confirmation that wins, and the erasing of the run's key.

    certified ──confirm (digest agrees, ledger entry)──▶ collected ──key erased, ledger entry──▶ erased

Whatever happens between the two arrows, `finish_erasures` (at every start, and by every idle worker) goes on from
there.
"""

from __future__ import annotations

import hmac
import io
import struct
from dataclasses import dataclass
from typing import BinaryIO

from service.clock import now_text
from service.custody.vault import VaultWriter, open_vault
from service.errors import Conflict, DamagedFile, Gone, KeyErased
from service.jobs import states
from service.jobs.publishing import write_bundle
from service.parts import Parts
from service.store.blobs import BITS
from service.store.contracts import RunRow

SALT_BYTES = DIGEST_BYTES = 32
_HEADER = struct.Struct(f">16s{SALT_BYTES}s{DIGEST_BYTES}s")
_MAGIC = b"bellassay bits 1"
ERASED_AT_ONCE = 100


@dataclass(frozen=True)
class BitsFile:
    """The bits, readable from `start` of the open vault file on; everything here is secret."""

    file: BinaryIO
    salt: bytes
    digest: bytes
    bytes: int
    start: int = _HEADER.size

    def read_at(self, offset: int, size: int) -> bytes:
        """Up to `size` bytes of the bits from byte `offset` on."""
        self.file.seek(self.start + offset)
        return self.file.read(size)

    def close(self) -> None:
        self.file.close()


def store_bits(parts: Parts, run_id: str, bits: bytes, salt: bytes, digest: bytes) -> None:
    """Salt, digest and bits in one vault file, so that they are there together or not at all."""
    with VaultWriter(parts.blobs.path(run_id, BITS), parts.keys.load(run_id), BITS) as writer:
        writer.write(_HEADER.pack(_MAGIC, salt, digest))
        writer.write(bits)
        writer.commit()


def open_stored_bits(parts: Parts, run_id: str) -> BitsFile:
    """The stored bits. Errors raised: KeyErased, DamagedFile, FileNotFoundError."""
    file = open_vault(parts.blobs.path(run_id, BITS), parts.keys.load(run_id), BITS)
    try:
        header = file.read(_HEADER.size)
        if len(header) != _HEADER.size or not header.startswith(_MAGIC):
            raise DamagedFile("the bits do not begin as they were written")
        _, salt, digest = _HEADER.unpack(header)
        return BitsFile(file, salt, digest, file.seek(0, io.SEEK_END) - _HEADER.size)
    except BaseException:
        file.close()
        raise


def open_bits(parts: Parts, row: RunRow) -> BitsFile:
    """The bits of a certified run, for its collector.

    Errors raised: Conflict "not-certified" (not yet, or never: the text says which); Gone "bits-collected".
    """
    refuse_unless_certified(parts, row)
    try:
        return open_stored_bits(parts, row.id)
    except (KeyErased, FileNotFoundError):         # collected between looking and opening
        raise _collected() from None


def refuse_unless_certified(parts: Parts, row: RunRow) -> None:
    if row.state in ("collected", "erased"):
        raise _collected()
    if row.state in ("refused", "failed"):
        raise Conflict(f"the run is {row.state}: it has no bits", code="no-bits")
    if row.state != "certified":
        raise Conflict(f"the run is {row.state}; its bits exist when it is certified", code="not-certified",
                       retry_after_s=max(1.0, parts.settings.poll_s))


def _collected() -> Gone:
    return Gone("the bits were collected and everything they could be made from is erased", code="bits-collected")


def confirm(parts: Parts, row: RunRow, digest: bytes) -> tuple[RunRow, int]:
    """The collector holds bits with this SHA-256: of many callers one wins. (run, index of its ledger entry)

    Errors raised: Conflict "already-collected", "digest-mismatch", "not-certified", "no-bits".
    """
    if row.state in ("collected", "erased"):
        raise _already()
    refuse_unless_certified(parts, row)
    try:
        bits = open_stored_bits(parts, row.id)
    except (KeyErased, FileNotFoundError):
        raise _already() from None
    bits.close()
    if not hmac.compare_digest(bits.digest, digest):
        raise Conflict("the digest is not that of the bits: fetch them again", code="digest-mismatch",
                       errors=({"pointer": "/digest", "detail": "does not agree"},))
    with parts.store.write() as transaction:
        now = parts.ledger.time(transaction, now_text())
        if not states.move(transaction, row, "collected", {"collected_time": now}):
            raise _already()
        index = parts.ledger.append(transaction, "collection", row.id, {"bits_commitment": row.bits_commitment}, now)
    erase(parts, row.id)
    with parts.store.read() as reading:
        return reading.get_run(row.id) or row, index


def _already() -> Conflict:
    return Conflict("the bits were collected before", code="already-collected")


def erase(parts: Parts, run_id: str) -> None:
    """Destroys the key of a collected run, then its encrypted files, then says so; may be repeated."""
    parts.keys.erase(run_id)
    parts.blobs.remove_secrets(run_id)
    with parts.store.write() as transaction:
        row, now = transaction.get_run(run_id), parts.ledger.time(transaction, now_text())
        if row is None or row.state != "collected" or not states.move(transaction, row, "erased", {"erased_time": now}):
            return
        parts.ledger.append(transaction, "erasure", run_id, {}, now)
    write_bundle(parts, run_id)         # now with the collection in it; the older one, if we end here, is as true


def finish_erasures(parts: Parts) -> int:
    """Completes collections that were interrupted between confirmation and erasure; how many."""
    with parts.store.read() as reading:
        waiting = reading.list_runs(states=["collected"], limit=ERASED_AT_ONCE)
    for row in waiting:
        erase(parts, row.id)
    return len(waiting)
