"""The bundle of a run: everything an auditor needs, in one archive that can be checked offline (`seal.verify`).

Files of "bellassay bundle 1": README.txt says what each is. report.json, declaration.json, certificate.json and
ledger.json are canonical JSON; SHA256SUMS lists the others in the form sha256sum reads.

ledger.json holds format "bellassay ledger extract 1", checkpoint (the signed note) and entries, a list of
    index, entry (the canonical JSON as a string), proof (hashes of the inclusion proof in base64, leaf first).
All proofs lead to the one checkpoint, so the entries are of one ledger, in one order.
"""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Mapping, Sequence
from typing import Any

from extractor.errors import InputError
from extractor.seal import note
from extractor.seal.archive import pack, unpack
from extractor.seal.canonical import canonical_bytes
from extractor.seal.readme import README
from extractor.seal.report import REPORT_FORMAT

__all__ = ["EXTRACT_FORMAT", "FILES", "build", "contents", "pack", "report_note_text", "sums", "unpack"]

EXTRACT_FORMAT = "bellassay ledger extract 1"
SUMS = "SHA256SUMS"
FILES = frozenset({"README.txt", SUMS, "certificate.json", "declaration.json", "key.txt", "ledger.json", "report.json",
                   "report.note"})


def build(report: Mapping[str, Any], entries: Sequence[tuple[int, bytes]], proofs: Sequence[Sequence[bytes]],
          checkpoint_note: str, signer: note.Signer) -> bytes:
    """The bundle's archive. Same arguments, same bytes.

    report           from `report.build_report`
    entries          this run's ledger entries (index, canonical bytes) in order; may go beyond those in the report
    proofs           inclusion proof of each entry in the tree of the checkpoint
    checkpoint_note  signed checkpoint
    signer           signs the report; its verifier key is the one in key.txt and must be that of the checkpoint
    """
    return pack(contents(report, entries, proofs, checkpoint_note, signer))


def contents(report: Mapping[str, Any], entries: Sequence[tuple[int, bytes]], proofs: Sequence[Sequence[bytes]],
             checkpoint_note: str, signer: note.Signer) -> dict[str, bytes]:
    """The files of a bundle by name, arguments as `build`. Errors raised: InputError if an entry has no proof."""
    if len(entries) != len(proofs):
        raise InputError("each ledger entry needs its proof", code="bad-bundle")
    report_bytes = canonical_bytes(report)
    files = {
        "README.txt": README.encode(),
        "certificate.json": canonical_bytes(report["certificate"]["document"]),
        "declaration.json": canonical_bytes(report["declaration"]["document"]),
        "key.txt": f"{signer.verifier_text}\n".encode(),
        "ledger.json": canonical_bytes({
            "format": EXTRACT_FORMAT,
            "checkpoint": checkpoint_note,
            "entries": [
                {"index": index, "entry": entry.decode(), "proof": [base64.b64encode(one).decode() for one in proof]}
                for (index, entry), proof in zip(entries, proofs)],
        }),
        "report.json": report_bytes,
        "report.note": note.sign(report_note_text(report_bytes), signer).encode(),
    }
    return files | {SUMS: sums(files)}


def report_note_text(report_bytes: bytes) -> str:
    """What is signed for a report: its format and the SHA-256 of its bytes, one line each."""
    return f"{REPORT_FORMAT}\n{hashlib.sha256(report_bytes).hexdigest()}\n"


def sums(files: Mapping[str, bytes]) -> bytes:
    """SHA256SUMS of the files other than itself."""
    lines = (f"{hashlib.sha256(files[name]).hexdigest()}  {name}\n" for name in sorted(files) if name != SUMS)
    return "".join(lines).encode()
