"""From a body on the wire to durable, counted rounds (or a seed): never whole in memory, never in the clear on disk.

    pieces ──receive──▶ encrypted raw copy + SHA-256 ──take_segment──▶ canonical planes, digest, tally, row
                                                     └──take_seed────▶ seed, ledger entry, the waiting run goes on

A body is first stored as it came, because only a whole body whose digest agrees may be read as rounds, and zip files
need seeking. Everything that computes or touches the disk runs in the threads of `UploadRoom`, never on the event loop.
What is acknowledged was synced before; of two bodies for one place the first in the write transaction wins.
"""

from __future__ import annotations

import asyncio
import contextlib
import hashlib
import os
from collections.abc import AsyncIterator, Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from extractor.errors import InputError
from extractor.hashing.seeds import SeedFile
from extractor.model import Declaration, RoundBatch, Tally
from extractor.records.planes import PlaneDigest, write_planes
from extractor.records.rounds import RoundFile, open_rounds
from extractor.tally import tally_batch
from service.clock import now_text
from service.custody.vault import VaultWriter, open_vault
from service.errors import BrokenTransfer, Conflict, Unavailable
from service.jobs import states
from service.parts import Parts
from service.runs import declaration_of
from service.store.blobs import SEED, segment_name
from service.store.contracts import RunRow, SegmentRow
from service.store.durable import storage_errors, sync_folder, temporary_path

WRITE_BYTES = 2**20             # pieces are gathered to this size before a thread takes them to disk
ROOM_CHECK_BYTES = 2**26        # how often a growing body is held against the free room
_T = TypeVar("_T")


class UploadRoom:
    """Threads for uploads and the limit on how many are received at once."""

    def __init__(self, places: int) -> None:
        self._places, self.taken = places, 0
        self._threads = ThreadPoolExecutor(places, thread_name_prefix="upload")

    @contextlib.contextmanager
    def place(self) -> Iterator[None]:
        """One place for the length of the block. Errors raised: Unavailable (code "too-many-uploads")."""
        if self.taken >= self._places:          # only the event loop comes here, so looking and taking cannot be parted
            raise Unavailable(f"{self.taken} uploads are being received, no more at once", code="too-many-uploads",
                              retry_after_s=1.0)
        self.taken += 1
        try:
            yield
        finally:
            self.taken -= 1

    def start(self, work: Callable[..., _T], *arguments: object) -> asyncio.Future[_T]:
        """Begins `work` in a thread."""
        return asyncio.get_running_loop().run_in_executor(self._threads, work, *arguments)

    def close(self) -> None:
        self._threads.shutdown(wait=True)


@dataclass(frozen=True)
class RawBody:
    """A body as it came, encrypted under the run's key; `path` goes when the `receive` block ends."""

    path: Path
    vault_name: str
    digest: bytes
    bytes: int


class _Sink:
    """One body on its way to disk; used by one thread at a time."""

    def __init__(self, parts: Parts, run_id: str, name: str) -> None:
        self._blobs, self._since_check = parts.blobs, 0
        self.path, self.vault_name = temporary_path(parts.blobs.path(run_id, name)), f"body of {name}"
        self._writer = VaultWriter(self.path, parts.keys.load(run_id), self.vault_name)
        self._hash = hashlib.sha256()

    def write(self, data: bytes) -> None:
        self._since_check += len(data)
        if self._since_check >= ROOM_CHECK_BYTES:
            self._blobs.need(0)
            self._since_check = 0
        self._hash.update(data)
        self._writer.write(data)

    def finish(self) -> RawBody:
        self._writer.commit()
        return RawBody(self.path, self.vault_name, self._hash.digest(), self._writer.bytes)

    def remove(self) -> None:
        self._writer.abort()
        self.path.unlink(missing_ok=True)


@contextlib.asynccontextmanager
async def receive(parts: Parts, room: UploadRoom, run_id: str, name: str, pieces: AsyncIterator[bytes], *,
                  digest: bytes,
                  limit_bytes: int, announced_bytes: int | None) -> AsyncIterator[RawBody]:
    """Stores a body that must have the SHA-256 `digest`; it is removed again when the block ends.

    name             vault name of what the body is for; the raw copy lies beside it under a temporary name
    announced_bytes  length if the sender gave one: refused before the first byte if there is no room for it
    Errors raised: BrokenTransfer; Unavailable (disk full); KeyErased; whatever `pieces` raises.
    """
    if announced_bytes is not None and announced_bytes > limit_bytes:
        raise BrokenTransfer(f"{announced_bytes} bytes are announced, {limit_bytes} are accepted",
                             code="upload-too-large")
    parts.blobs.need(announced_bytes or 0)
    sink = await room.start(_Sink, parts, run_id, name)
    writing: asyncio.Future | None = None
    try:
        gathered, total = bytearray(), 0
        async for piece in pieces:
            total += len(piece)
            if total > limit_bytes:
                raise BrokenTransfer(f"more than the {limit_bytes} accepted bytes arrived", code="upload-too-large")
            gathered += piece
            if len(gathered) >= WRITE_BYTES:
                if writing is not None:
                    await writing               # the disk is slower than the line: stop reading from the line
                writing, gathered = room.start(sink.write, bytes(gathered)), bytearray()
        if writing is not None:
            await writing
        writing = room.start(sink.write, bytes(gathered))
        await writing
        writing = room.start(sink.finish)
        body = await writing
        if body.digest != digest:
            raise BrokenTransfer(f"the {body.bytes} bytes that arrived do not have the digest in Content-Digest; "
                                 "send them again", code="digest-mismatch")
        yield body
    finally:
        if writing is not None and not writing.done():      # no file is pulled from under a thread
            await asyncio.wait([writing])
        await room.start(sink.remove)


def take_segment(parts: Parts, row: RunRow, declaration: Declaration, number: int, body: RawBody,
                 file_name: str) -> tuple[SegmentRow, bool]:
    """Reads, checks, packs and counts a received body and records it as segment `number`; (row, whether it is new).

    Errors raised: InputError (file, row and field at fault); Conflict "segment-differs", "run-sealed",
    "too-many-rounds"; Unavailable (disk full).
    """
    key, name = parts.keys.load(row.id), segment_name(number)
    final = parts.blobs.path(row.id, name)
    with parts.store.read() as reading:
        before = reading.segment_totals([row.id])[row.id].rounds
    packed = temporary_path(final)
    try:
        with open_vault(body.path, key, body.vault_name) as file, VaultWriter(packed, key, name) as writer:
            opened = open_rounds(file, file_name, declaration.rules)
            counted = _Counted(opened, declaration.rounds, before)
            write_planes(writer, counted)
            writer.commit()
        made = SegmentRow(
            run_id=row.id, number=number, digest="sha256:" + body.digest.hex(), bytes=body.bytes, format=opened.format,
            rounds=opened.rounds, planes_digest=counted.digest.hexdigest(), tally=counted.tally.counts,
            first_round=opened.first_round, last_round=opened.last_round, no_clicks=opened.no_clicks,
            file_name=file_name, received=now_text())
        return _record(parts, made, declaration.rounds, packed, final)
    finally:
        packed.unlink(missing_ok=True)


class _Counted:
    """The batches of a round file, counted and digested as they pass."""

    def __init__(self, opened: RoundFile, declared: int, before: int) -> None:
        self._opened, self._declared, self._before = opened, declared, before
        self.tally, self.digest = Tally.empty(), PlaneDigest()

    def __iter__(self) -> Iterator[RoundBatch]:
        for batch in self._opened.batches():
            self.tally += tally_batch(batch)
            self.digest.update(batch)
            if self._before + self.digest.rounds > self._declared:     # no use in reading on
                raise _too_many(self._declared, self._before, f"at least {self.digest.rounds}")
            yield batch


def _too_many(declared: int, before: int, more: str | int) -> Conflict:
    return Conflict(f"the declaration names {declared} rounds; {before} were received and this segment holds {more}",
                    code="too-many-rounds")


def _record(parts: Parts, made: SegmentRow, declared: int, packed: Path, final: Path) -> tuple[SegmentRow, bool]:
    """Row and file under their final names, in one step that excludes every other writer."""
    with parts.store.write() as transaction:
        found = transaction.get_segment(made.run_id, made.number)
        if found is not None and found.digest == made.digest:
            return found, False
        row = transaction.get_run(made.run_id)
        refuse_if_sealed(row)
        if found is not None:
            raise segment_differs(made.number)
        before = transaction.segment_totals([made.run_id])[made.run_id].rounds
        if before + made.rounds > declared:
            raise _too_many(declared, before, made.rounds)
        # The name before the row: a row never promises a file that is not there; a file without a row counts nothing.
        _rename(packed, final)
        transaction.insert_segment(made)
    return made, True


def refuse_if_sealed(row: RunRow | None) -> None:
    """Errors raised: Conflict (code "run-sealed") unless the run still takes segments."""
    if row is None or row.state != "open":
        raise Conflict("the run is sealed: it takes no more rounds", code="run-sealed")


def segment_differs(number: int) -> Conflict:
    return Conflict(f"segment {number} was received with another digest and cannot be replaced; use the next number, "
                    "or open a new run", code="segment-differs")


def _rename(source: Path, final: Path) -> None:
    with storage_errors(final):
        os.rename(source, final)
    sync_folder(final.parent)


def seed_length(parts: Parts, row: RunRow) -> int:
    """Bits a seed uploaded now must have. Errors raised: Conflict that says why none can be taken (yet)."""
    if row.seed_source != "upload":
        raise Conflict("the declaration says the seed is drawn by the service", code="seed-not-expected")
    if row.state == "open":
        raise Conflict("the run is not sealed: a seed that is known before its rounds are fixed is worth nothing",
                       code="run-not-sealed")
    if row.seed_bits is None and row.state in ("sealed", "working"):
        raise Conflict("the certificate is not made yet, so the length of the seed is not known",
                       code="certificate-pending",
                       retry_after_s=parts.settings.poll_s)
    if not row.seed_bits:
        raise Conflict(f"the run is {row.state} and needs no seed", code="seed-not-needed")
    return row.seed_bits


def take_seed(parts: Parts, run_id: str, bits: int, body: RawBody) -> RunRow:
    """Checks a received body as the seed of a waiting run, and lets the run go on.

    Errors raised: InputError "seed-length", "seed-tail"; Conflict "seed-differs", "seed-not-needed", "run-busy".
    """
    key, final = parts.keys.load(run_id), parts.blobs.path(run_id, SEED)
    sealed = temporary_path(final)
    digest = "sha256:" + body.digest.hex()
    try:
        with open_vault(body.path, key, body.vault_name) as file, VaultWriter(sealed, key, SEED) as writer:
            SeedFile(file, bits, "seed")        # length and tail bits
            file.seek(0)
            while piece := file.read(WRITE_BYTES):
                writer.write(piece)
            writer.commit()
        with parts.store.write() as transaction:
            row = transaction.get_run(run_id)
            if row is not None and row.seed_digest is not None:
                return same_seed(row, digest)
            if row is None or row.state != "working" or row.stage != "seed" or row.waiting_for != "seed":
                raise Conflict("the run does not wait for its seed just now; look at it again", code="run-busy",
                               retry_after_s=1.0)
            _rename(sealed, final)
            states.record_seed(transaction, parts.ledger, row, "upload", digest)
            return transaction.get_run(run_id) or row
    finally:
        sealed.unlink(missing_ok=True)


def same_seed(row: RunRow, digest: str) -> RunRow:
    """The run, if its seed has this digest. Errors raised: Conflict (code "seed-differs")."""
    if row.seed_digest != digest:
        raise Conflict("another seed was received for this run and cannot be replaced", code="seed-differs")
    return row


def declaration_for(parts: Parts, row: RunRow) -> Declaration:
    """The declaration of a run, read on its own."""
    with parts.store.read() as reading:
        return declaration_of(reading, row)


def check_number(parts: Parts, number: int) -> None:
    """Errors raised: InputError unless 1 <= number <= segments_per_run."""
    most = parts.settings.segments_per_run
    if not 1 <= number <= most:
        raise InputError(f"segments are numbered 1 to {most}", code="out-of-range", field="number")
