"""The stages: what they establish, what damage they find, and that being cut off anywhere changes no byte."""

from __future__ import annotations

import hashlib
import io
import os
import signal
from collections.abc import Callable
from pathlib import Path

import pytest

from extractor import pipeline
from extractor.documents import certificate_document, declaration_from
from extractor.hashing.seeds import SeedBytes
from extractor.records.planes import digest_of, rebatch
from extractor.seal import canonical
from extractor.seal.verify import verify_bundle
from extractor.tally import tally_batches
from service.custody.vault import read_vault, write_vault
from service.jobs import stages
from service.jobs.worker import Worker
from service.parts import Parts
from service.store.blobs import PARTIAL, SEED, segment_name
from tests.service.jobs import killed_worker
from tests.service.harness import document, npz, opened, rounds, split_npz
from tests.service.jobs.runs import SealedRuns, bits_of, damage, kinds_of, row_of, steps_of

STAGES = [("working", stage) for stage in ("tally", "certify", "seed", "hash", "publish")]
STEPS = [("open", None), ("sealed", None), *STAGES, ("certified", None)]
KINDS = ["seal", "certificate", "seed", "result"]
LARGE = 2**21 + 50_001              # three blocks, so that partial hashes are stored


def expected(count: int | None = None, **changed) -> tuple[bytes, int]:
    """Certificate of the rounds as the extractor alone gives it, and the number of seed bits."""
    batches = rounds() if count is None else rounds(count)
    certificate = pipeline.certify(declaration_from(document(**changed)), tally_batches(batches))
    return canonical.canonical_bytes(certificate_document(certificate)), certificate.seed_bits


def expected_bits(parts: Parts, run: str, batches=None, **changed) -> bytes:
    """The bits that the stored seed and the rounds give."""
    declaration = declaration_from(document(**changed))
    batches = list(rebatch(rounds() if batches is None else batches))
    certificate = pipeline.certify(declaration, tally_batches(batches))
    seed = read_vault(parts.blobs.path(run, SEED), parts.keys.load(run), SEED)
    return pipeline.extract(declaration, certificate, lambda first: batches[first // 2**20:],
                            SeedBytes(seed, certificate.seed_bits))


def assert_certified(parts: Parts, run: str) -> None:
    row = row_of(parts, run)
    assert row.state == "certified", row.message
    assert kinds_of(parts, run) == KINDS
    assert row.certificate == expected()[0]
    assert bits_of(parts, run) == expected_bits(parts, run)
    assert row.lease_holder is None and row.stage is None
    archive = parts.blobs.bundle_path(run).read_bytes()
    assert verify_bundle(archive, rounds=[(io.BytesIO(npz()), "rounds")], say=lambda _: None).ok


def test_a_run_goes_through_its_stages(parts: Parts, sealed) -> None:
    """Tally, digest, certificate, seed, bits and documents are what the extractor gives for the same rounds."""
    run = sealed()
    assert Worker(parts).run(once=True) == 1
    assert_certified(parts, run)
    row = row_of(parts, run)
    assert steps_of(parts, run) == STEPS
    assert row.tally == tally_batches(rounds()).counts and row.planes_digest == digest_of(rounds())
    assert set(row.stage_seconds) == {"tally", "certify", "seed", "hash", "publish"}
    assert any(one["name"] == "drift" for one in row.diagnostics)
    assert not parts.blobs.path(run, PARTIAL).exists()
    assert Worker(parts).run(once=True) == 0


def test_a_seed_is_drawn_once_per_run(parts: Parts, sealed) -> None:
    """Two runs of the same rounds get the same certificate and different seeds and bits."""
    one, other = sealed(), sealed()
    Worker(parts).run(once=True)
    assert row_of(parts, one).certificate == row_of(parts, other).certificate
    assert row_of(parts, one).seed_digest != row_of(parts, other).seed_digest
    assert bits_of(parts, one) != bits_of(parts, other)


def worker(folder: Path, point: str) -> int:
    """Runs a worker process up to the point where it kills itself; its return code."""
    return killed_worker.run(folder / "data", point)


@pytest.mark.parametrize("stage", ["tally", "certify", "seed", "hash", "publish"])
def test_killed_in_a_stage(tmp_path: Path, parts: Parts, sealed, stage: str) -> None:
    """Killed when a stage begins, before its commit, or after it: the next worker gives the same results."""
    runs = {point: sealed() for point in (f"enter:{stage}", f"before-commit:{stage}", f"after-commit:{stage}")}
    for point in runs:
        # The longest waiting run comes first; the one killed before is finished on the way.
        assert worker(tmp_path, point) == -signal.SIGKILL
    Worker(parts).run(once=True)
    for run in runs.values():
        assert_certified(parts, run)
        assert steps_of(parts, run) == STEPS


def test_killed_again_and_again(tmp_path: Path, parts: Parts, sealed) -> None:
    """Killed at one durable write after the other: one certificate, one seed, one result in the ledger."""
    run = sealed()
    kills = 0
    while worker(tmp_path, f"write:{4 + kills % 4}") == -signal.SIGKILL:
        kills += 1
        assert kills < 40
    assert kills >= 2
    assert_certified(parts, run)


def test_a_killed_hash_goes_on_from_its_partial(tmp_path: Path) -> None:
    """A worker killed after storing a partial hash: the next one continues there and gives the same bits."""
    parts = opened(tmp_path)
    files = split_npz(700_001, LARGE)
    run = SealedRuns(parts).make(files, rounds=LARGE)
    assert worker(tmp_path, "partial") == -signal.SIGKILL
    assert row_of(parts, run).stage == "hash"
    started: list[int] = []
    real = pipeline.extract

    def watched(*arguments, resume=None, **options):
        started.append(resume.rounds if resume else 0)
        return real(*arguments, resume=resume, **options)

    stages.pipeline.extract = watched
    try:
        Worker(parts).run(once=True)
    finally:
        stages.pipeline.extract = real
    assert started == [2**20]
    assert row_of(parts, run).state == "certified"
    assert row_of(parts, run).certificate == expected(LARGE, rounds=LARGE)[0]
    assert bits_of(parts, run) == expected_bits(parts, run, rounds(LARGE), rounds=LARGE)
    parts.close()


def test_a_partial_of_another_seed_is_not_continued(parts: Parts, sealed) -> None:
    """A stored partial that does not belong to this seed and certificate is dropped, never mixed in."""
    run = sealed()
    key = parts.keys.load(run)
    size = (row_bits(document()) + 7) // 8
    foreign = b"bellassay partial 1" + bytes(32) + (2**20).to_bytes(8, "big") + bytes(size)
    write_vault(parts.blobs.path(run, PARTIAL), key, PARTIAL, foreign)
    Worker(parts).run(once=True)
    assert_certified(parts, run)


def row_bits(body: dict) -> int:
    return body["output"]["bits"]


def shorten(parts: Parts, run: str) -> None:
    path = parts.blobs.path(run, segment_name(2))
    path.write_bytes(path.read_bytes()[:-100])


def exchange(parts: Parts, run: str) -> None:
    first, second = (parts.blobs.path(run, segment_name(k)) for k in (1, 2))
    data = first.read_bytes()
    first.write_bytes(second.read_bytes())
    second.write_bytes(data)


def replace(parts: Parts, run: str) -> None:
    """A valid vault file of the right name with other rounds, as somebody holding the key could make."""
    key, name = parts.keys.load(run), segment_name(1)
    data = bytearray(read_vault(parts.blobs.path(run, name), key, name))
    data[2000] ^= 1
    write_vault(parts.blobs.path(run, name), key, name, bytes(data))


@pytest.mark.parametrize("harm, code", [
    (lambda parts, run: damage(parts, run, segment_name(2)), "damaged-file"), (shorten, "damaged-file"),
    (exchange, "damaged-file"),
    (replace, "segment-damaged"), (lambda parts, run: parts.blobs.remove(run, segment_name(3)), "segment-missing"),
    (lambda parts, run: parts.keys.erase(run), "key-erased")])
def test_damage_is_found_before_anything_is_certified(parts: Parts, sealed, harm: Callable[[Parts, str], object],
                                                      code: str) -> None:
    """Any change of the stored rounds fails the run with its code; no certificate, no seed, no bits."""
    run = sealed()
    harm(parts, run)
    Worker(parts).run(once=True)
    row = row_of(parts, run)
    assert row.state == "failed" and row.message.endswith(f"({code})"), row.message
    assert kinds_of(parts, run) == ["seal"] and row.certificate is None
    assert row.lease_holder is None
    assert Worker(parts).run(once=True) == 0


def test_a_damaged_seed_is_found(parts: Parts, sealed, monkeypatch) -> None:
    """A seed that is not the one in the ledger never makes bits."""
    run = sealed()
    real = stages.enter

    def enter(stage: str):
        if stage == "hash":
            size = len(read_vault(parts.blobs.path(run, SEED), parts.keys.load(run), SEED))
            write_vault(parts.blobs.path(run, SEED), parts.keys.load(run), SEED, bytes(size))
        return real(stage)

    monkeypatch.setattr(stages, "enter", enter)
    Worker(parts).run(once=True)
    assert row_of(parts, run).message.endswith("(seed-damaged)")
    with pytest.raises(FileNotFoundError):
        bits_of(parts, run)


def test_an_early_stop_under_a_fixed_acceptance_is_refused(parts: Parts, sealed) -> None:
    """The eat methods refuse a run of fewer rounds than declared; it can be sealed, and the certificate says so."""
    run = sealed(split_npz(7_000)[:2], method="eat-2019")
    Worker(parts).run(once=True)
    assert row_of(parts, run).state == "refused" and row_of(parts, run).message
    assert kinds_of(parts, run) == ["seal", "refusal", "result"]


def test_bits_commitment_and_digests_agree(parts: Parts, sealed) -> None:
    """What the ledger and the row say about seed and report is the digest of what lies on disk."""
    run = sealed()
    Worker(parts).run(once=True)
    row = row_of(parts, run)
    seed = read_vault(parts.blobs.path(run, SEED), parts.keys.load(run), SEED)
    assert row.seed_digest == "sha256:" + hashlib.sha256(seed).hexdigest()
    assert len(seed) == (row.seed_bits + 7) // 8 and seed[-1] >> (row.seed_bits % 8 or 8) == 0
    assert row.report_digest == "sha256:" + hashlib.sha256(parts.blobs.report_path(run).read_bytes()).hexdigest()
    assert os.stat(parts.blobs.bundle_path(run)).st_size > 1000
