"""The last stage: report and bundle, and with them the end of the job.

    report.json durable ──▶ ledger entry "result" with its digest ──▶ bundle.zip durable ──▶ certified | refused

The report is written once: when its digest is in the ledger, a repeated stage takes it as it is. The bundle can always
be made again from report and ledger, and is, when the collection has added entries.
"""

from __future__ import annotations

import platform
from importlib import metadata
from typing import Any

from extractor.documents import certificate_from
from extractor.errors import Defect
from extractor.model import Certificate
from extractor.seal import bundle, canonical
from extractor.seal.report import build_report
from service.errors import DamagedFile
from service.jobs.work import Work
from service.parts import Parts
from service.runs import declaration_of
from service.store.blobs import PARTIAL
from service.store.contracts import LedgerEntryRow, Reading, RunRow
from service.store.durable import write_durably

PACKAGES = ("bellassay", "numpy", "scipy", "cryptography")


def publish(work: Work, row: RunRow) -> None:
    """Report, ledger entry, bundle, and the run's final state."""
    parts = work.parts
    if row.report_digest is None:
        data = canonical.canonical_bytes(_report(parts, row))
        write_durably(parts.blobs.report_path(row.id), data)
        digest = canonical.bytes_digest(data)
        work.record(row, {"report_digest": digest}, ("result", {"report_digest": digest}))
    write_bundle(parts, row.id)
    parts.blobs.remove(row.id, PARTIAL)
    work.finish(row, "certified" if row.certified_length else "refused", {})


def write_bundle(parts: Parts, run_id: str) -> None:
    """The bundle with proofs against the newest checkpoint; replaces an older one. Errors raised: DamagedFile."""
    with parts.store.read() as reading:
        row, head = reading.get_run(run_id), reading.ledger_head()
        if row is None or head is None or row.report_digest is None:
            raise Defect(f"run {run_id} has no report to bundle")
        entries = _entries(reading, row)
        proofs = [parts.ledger.prove(reading, entry.index, head.size) for entry in entries]
    data = parts.blobs.report_path(run_id).read_bytes()
    if canonical.bytes_digest(data) != row.report_digest:
        raise DamagedFile("the stored report is not the one in the ledger", code="report-damaged")
    numbered = [(entry.index, entry.entry) for entry in entries]
    archive = bundle.build(canonical.parse(data), numbered, proofs, head.checkpoint, parts.ledger.signer)
    write_durably(parts.blobs.bundle_path(run_id), archive)


def certificate_of(row: RunRow) -> Certificate:
    """The certificate as it was committed to."""
    return certificate_from(canonical.parse(row.certificate or b"", require_canonical=True))


def _entries(reading: Reading, row: RunRow) -> list[LedgerEntryRow]:
    """The declaration's ledger entry and all of the run so far, in order."""
    return [*reading.ledger_entries_about(row.declaration_id)[:1], *reading.ledger_entries_about(row.id)]


def _report(parts: Parts, row: RunRow) -> dict[str, Any]:
    with parts.store.read() as reading:
        declaration, segments = declaration_of(reading, row), reading.list_segments(row.id)
        entries = _entries(reading, row)
    seed = output = None
    if row.certified_length:
        seed = {"source": row.seed_source, "bits": row.seed_bits, "digest": row.seed_digest}
        output = {"bits": row.certified_length, "bits_commitment": row.bits_commitment, "backend": row.backend}
    records = {"planes_digest": row.planes_digest, "segments": [
        {"segment": one.number, "digest": one.digest, "bytes": one.bytes, "format": one.format, "rounds": one.rounds,
         "no_clicks": list(one.no_clicks), "planes_digest": one.planes_digest} for one in segments]}
    listed = [{"index": one.index, "kind": one.kind, "time": one.time, "digest": canonical.bytes_digest(one.entry)}
              for one in entries]
    return build_report(
        row.id, declaration, entries[0].time, certificate_of(row), records, row.score or {}, row.diagnostics or [],
        seed, output, row.ledger_salt.hex(), listed, software())


def software() -> dict[str, str]:
    """What computed: name -> version."""
    versions = {"python": platform.python_version()}
    for name in PACKAGES:
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:       # run from a source folder
            versions[name] = "unknown"
    return versions
