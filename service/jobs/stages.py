"""The five stages of a job. Each reads what is durable, computes, and commits in one transaction what it established.

A stage may be killed at any instant and is then done again from its beginning (hash: from its last stored partial);
what it wrote to disk before its commit counts for nothing and is written again. The seed counts from its ledger entry
on, so no bits are ever made from two seeds; bits can be fetched only after publish has committed.
"""

from __future__ import annotations

import hashlib
import hmac
import os
from collections.abc import Callable, Iterator

from extractor import pipeline
from extractor.bell.diagnostics import diagnose_drift
from extractor.documents import certificate_document
from extractor.errors import InputError, ProofError
from extractor.hashing.seeds import SeedFile
from extractor.model import PLANES, Declaration, RoundBatch, Tally
from extractor.records.bits import slice_bits
from extractor.records.planes import BLOCK_ROUNDS, PlaneDigest, read_planes, rebatch
from extractor.seal import canonical
from extractor.seal.entries import certificate_commitment
from extractor.tally import tally_batch
from service.collection import store_bits
from service.custody.vault import VaultWriter, open_vault, read_vault, write_vault
from service.errors import DamagedFile
from service.jobs.publishing import certificate_of, publish
from service.jobs.work import Work
from service.parts import Parts
from service.store.blobs import PARTIAL, SEED, segment_name
from service.store.contracts import RunRow, SegmentRow

PIECE_BYTES = 2**20
Stage = Callable[[Work, RunRow], None]


def enter(stage: str) -> Stage:
    """The function of a stage; every stage of every run is looked up here."""
    return {"tally": tally, "certify": certify, "seed": draw_seed, "hash": hash_rounds, "publish": publish}[stage]


# ---- tally

def tally(work: Work, row: RunRow) -> None:
    """Reads all stored rounds again: they must still be what was acknowledged, segment by segment and as a whole."""
    declaration = work.declaration(row)
    with work.parts.store.read() as reading:
        segments = reading.list_segments(row.id)
    total, whole, seen = Tally.empty(), PlaneDigest(), 0
    for segment in segments:
        own, counted = PlaneDigest(), Tally.empty()
        for batch in _stored_batches(work.parts, row.id, segment):
            own.update(batch)
            whole.update(batch)
            counted += tally_batch(batch)
            seen += batch.rounds
            work.progress(row, seen, row.sealed_rounds or 0)
        if own.hexdigest() != segment.planes_digest or counted.counts != segment.tally:
            raise ProofError(f"the stored rounds of segment {segment.number} are not those that were received",
                             code="segment-damaged")
        total += counted
    if len(segments) != row.sealed_segments or total.rounds != row.sealed_rounds:
        raise ProofError(f"{len(segments)} segments with {total.rounds} rounds are stored, {row.sealed_segments} with "
                         f"{row.sealed_rounds} were sealed", code="segments-damaged")
    work.advance(row, "certify", {"tally": total.counts, "planes_digest": whole.hexdigest(),
                                  **_look(declaration, total, segments)})


def _look(declaration: Declaration, total: Tally, segments: list[SegmentRow]) -> dict[str, object]:
    """Score and diagnostics for people to read; they certify nothing, so a tally they cannot judge stops nothing."""
    try:
        score, diagnostics = pipeline.look(declaration, total)
    except InputError:
        return {"score": None, "diagnostics": None}
    made = list(diagnostics)
    if len(segments) > 1:
        made.append(diagnose_drift([Tally(segment.tally) for segment in segments], declaration.convention))
    return {"score": score.document(), "diagnostics": [one.document() for one in made]}


def _stored_batches(parts: Parts, run_id: str, segment: SegmentRow, first_block: int = 0) -> Iterator[RoundBatch]:
    """The stored rounds of a segment, from a block of it on. Errors raised: DamagedFile naming the segment."""
    name = segment_name(segment.number)
    try:
        with open_vault(parts.blobs.path(run_id, name), parts.keys.load(run_id), name) as file:
            yield from read_planes(file, first_block, name=f"segment {segment.number}")
    except FileNotFoundError:
        raise DamagedFile(f"the stored rounds of segment {segment.number} are missing",
                          code="segment-missing") from None
    except InputError as fault:
        raise DamagedFile(f"the stored rounds of segment {segment.number} cannot be read: {fault.message}") from None


# ---- certify

def certify(work: Work, row: RunRow) -> None:
    """The certificate or refusal, which depends on declaration and tally alone; its commitment goes into the ledger."""
    certificate = pipeline.certify(work.declaration(row), Tally(row.tally or ()))
    data = canonical.canonical_bytes(certificate_document(certificate))
    certified = certificate.outcome == "certified"
    entry = ("certificate" if certified else "refusal", {
        "certificate_commitment": certificate_commitment(row.ledger_salt, data), "outcome": certificate.outcome,
        "length": certificate.certified_length})
    work.advance(row, "seed" if certified else "publish", {
        "certificate": data, "certified_length": certificate.certified_length,
        "available_bits": certificate.available_bits,
        "seed_bits": certificate.seed_bits, "message": certificate.reason or ""}, [entry])


# ---- seed

def draw_seed(work: Work, row: RunRow) -> None:
    """Draws the seed from the operating system, or lets the run wait for the one that will be uploaded."""
    if row.seed_source == "upload":
        work.wait_for_seed(row)
        return
    parts, bits, digest = work.parts, row.seed_bits or 0, hashlib.sha256()
    size = (bits + 7) // 8
    parts.blobs.need(size)
    with VaultWriter(parts.blobs.path(row.id, SEED), parts.keys.load(row.id), SEED) as writer:
        for start in range(0, size, PIECE_BYTES):
            piece = bytearray(os.urandom(min(PIECE_BYTES, size - start)))
            if start + len(piece) == size and bits % 8:
                piece[-1] &= (1 << bits % 8) - 1
            digest.update(piece)
            writer.write(piece)
            work.progress(row, start, size)
        writer.commit()
    work.record_seed(row, f"sha256:{digest.hexdigest()}")


# ---- hash

def hash_rounds(work: Work, row: RunRow) -> None:
    """The bits: Toeplitz hash of both outcome planes, with partial sums stored on the way."""
    parts, settings = work.parts, work.parts.settings
    declaration, certificate = work.declaration(row), certificate_of(row)
    with parts.store.read() as reading:
        segments = reading.list_segments(row.id)
    key = parts.keys.load(row.id)
    resume = _stored_partial(parts, row, key, (certificate.certified_length + 7) // 8)
    began = resume.rounds if resume else 0

    def keep(partial: pipeline.PartialHash) -> None:
        write_vault(parts.blobs.path(row.id, PARTIAL), key, PARTIAL, _partial_head(row, partial.rounds) + partial.bits)
        work.note(row, {"hash_rounds": partial.rounds, "attempts": 0})

    try:
        with open_vault(parts.blobs.path(row.id, SEED), key, SEED) as seed:
            _check_seed(work, row, seed)
            bits = pipeline.extract(
                declaration, certificate, lambda first: _batches_from(parts, row.id, segments, first),
                SeedFile(seed, certificate.seed_bits),
                resume=resume, on_partial=keep, partial_every_rounds=settings.partial_rounds,
                on_progress=lambda done, total: work.progress(row, done, total, began),
                threads=settings.hash_threads or os.cpu_count() or 1)
    except FileNotFoundError:
        raise DamagedFile("the stored seed is missing", code="seed-missing") from None
    # From the run's key, not drawn: a worker that lost its lease unawares writes the same file, not another salt.
    salt = hmac.digest(key, b"bellassay bits salt 1", "sha256")
    parts.blobs.need(len(bits))
    store_bits(parts, row.id, bits, salt, hashlib.sha256(bits).digest())
    work.advance(row, "publish", {"bits_commitment": canonical.commitment(salt, bits),
                                  "backend": pipeline.backend_name(),
                                  "hash_rounds": certificate.rounds})


def _check_seed(work: Work, row: RunRow, seed: object) -> None:
    """The stored seed must be the one in the ledger."""
    digest = hashlib.sha256()
    while piece := seed.read(PIECE_BYTES):      # type: ignore[attr-defined]
        digest.update(piece)
        work.check()
    if f"sha256:{digest.hexdigest()}" != row.seed_digest:
        raise ProofError("the stored seed is not the one in the ledger", code="seed-damaged")


def _batches_from(parts: Parts, run_id: str, segments: list[SegmentRow], first: int) -> Iterator[RoundBatch]:
    """The run's rounds from round `first` on (a multiple of BLOCK_ROUNDS), in blocks of BLOCK_ROUNDS."""
    def one_by_one() -> Iterator[RoundBatch]:
        begins = 0
        for segment in segments:
            if begins + segment.rounds > first:
                yield from _from_round(_stored_batches(parts, run_id, segment, max(0, first - begins) // BLOCK_ROUNDS),
                                       max(0, first - begins) % BLOCK_ROUNDS)
            begins += segment.rounds
    return rebatch(one_by_one())


def _from_round(batches: Iterator[RoundBatch], skip: int) -> Iterator[RoundBatch]:
    """Without the first `skip` rounds, fewer than one block: segments need not begin at a block of the run."""
    for batch in batches:
        drop, skip = min(skip, batch.rounds), 0
        left = batch.rounds - drop
        if drop and left:
            yield RoundBatch(left, {name: slice_bits(batch.planes[name], drop, left) for name in PLANES})
        elif left:
            yield batch


def _partial_head(row: RunRow, rounds: int) -> bytes:
    """Binds a stored partial to seed and certificate, so that none is ever continued with another."""
    bound = hashlib.sha256((row.seed_digest or "").encode() + (row.certificate or b"")).digest()
    return b"bellassay partial 1" + bound + rounds.to_bytes(8, "big")


def _stored_partial(parts: Parts, row: RunRow, key: bytes, size: int) -> pipeline.PartialHash | None:
    """The newest stored partial, None if there is none of this certificate and seed."""
    try:
        data = read_vault(parts.blobs.path(row.id, PARTIAL), key, PARTIAL, limit=size + 1000)
    except FileNotFoundError:
        return None
    cut = len(_partial_head(row, 0))
    rounds = int.from_bytes(data[cut - 8:cut], "big")
    if data[:cut] != _partial_head(row, rounds) or len(data) != cut + size:
        return None
    return pipeline.PartialHash(rounds, data[cut:])
