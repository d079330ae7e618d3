"""The audit report of a run: one JSON object that says everything about it except the rounds and the bits.

Fields of "bellassay report 1"

    format, run, summary, confidentiality
    declaration   digest, time, document
    records       rounds, segments (their number), no_clicks [a, b], planes_digest, and `files`: per segment
                  segment, digest, bytes, format, rounds, no_clicks, planes_digest
    score, diagnostics
    certificate   digest, document
    seed          source, bits, digest;             null for a refused run
    output        bits, bits_commitment, backend;   null for a refused run
    ledger        salt (opens the ledger's commitments), entries: index, kind, time, digest
    software      name -> version
    cautions

A report holds the tally and digests of the rounds. Under disclosure "confidential" it therefore stays secret as long
as the bits do, and says so. Under disclosure "public" the penalty pays for what it reveals, so it must reveal no more
than tally, no-click counts, digest of the rounds and commitment to the segments' digests: `files` is null, and drift,
which compares segments, is left out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from extractor.documents import certificate_document, declaration_document
from extractor.errors import Defect, ProofError
from extractor.model import Certificate, Declaration
from extractor.seal import canonical
from extractor.seal.entries import is_time

REPORT_FORMAT = "bellassay report 1"
FILE_FIELDS = ("segment", "digest", "bytes", "format", "rounds", "no_clicks", "planes_digest")
SEGMENT_DIAGNOSTICS = ("drift",)
_OWN_FIELDS = ("records", "score", "diagnostics", "seed", "output", "ledger", "software")
CONFIDENTIALITY = {
    "confidential":
        "Confidential: tally and digests in this report tell about the bits. Keep it, the certificate and the bundle "
        "from everybody the bits have to be secret from, for as long as they have to be.",
    "public":
        "Public: what this report reveals was paid for in the penalty. The rounds and the bits stay secret.",
}
CAUTIONS = (
    "The certificate is conditional on its assumptions: isolated stations, settings independent of the boxes, "
    "quantum theory, honest classical processing, and a seed that is independent of the boxes and was not revealed "
    "before sealing.",
    "Statistical batteries certify nothing: neither diagnostics nor tests of the bits add to the certificate.",
    "Reusing boxes that are not trusted can leak earlier outputs (memory attacks).",
    "Where a regulation or an accreditation asks for validated random number modules, that rule prevails.",
)


def build_report(run_id: str, declaration: Declaration, declaration_time: str, certificate: Certificate,
                 records: Mapping[str, Any], score: Mapping[str, Any], diagnostics: Sequence[Mapping[str, Any]],
                 seed: Mapping[str, Any] | None, output: Mapping[str, Any] | None, ledger_salt_hex: str,
                 ledger: Sequence[Mapping[str, Any]], software: Mapping[str, str]) -> dict[str, Any]:
    """The report (module text) as it is read back from its canonical bytes.

    declaration_time  of the declaration's ledger entry
    records           planes_digest of the whole run, and `segments`: mappings with at least FILE_FIELDS, in order
    seed, output      None exactly for a refused run
    ledger            this run's entries so far: mappings index, kind, time, digest of the entry's bytes
    Errors raised: Defect if the parts do not belong together.
    """
    public = declaration.disclosure == "public"
    segments = [{name: list(segment[name]) if name == "no_clicks" else segment[name] for name in FILE_FIELDS}
                for segment in records["segments"]]
    if sum(segment["rounds"] for segment in segments) != certificate.rounds:
        raise Defect("the segments of a report do not add up to the rounds of its certificate")
    if (seed is None, output is None) != (certificate.outcome == "refused",) * 2:
        raise Defect("a report has seed and output exactly if its run was certified")
    if not is_time(declaration_time):
        raise Defect("the time of a declaration is not RFC 3339 UTC in whole seconds")
    records_document = {
        "rounds": certificate.rounds,
        "segments": len(segments),
        "no_clicks": [sum(segment["no_clicks"][side] for segment in segments) for side in (0, 1)],
        "planes_digest": records["planes_digest"],
        "files": None if public else segments,
    }
    kept = [dict(one) for one in diagnostics if not (public and one["name"] in SEGMENT_DIAGNOSTICS)]
    return _assemble(
        run_id, declaration, certificate, declaration_time, records=records_document, score=dict(score),
        diagnostics=kept, seed=None if seed is None else dict(seed), output=None if output is None else dict(output),
        ledger={"salt": ledger_salt_hex, "entries": [dict(one) for one in ledger]}, software=dict(software))


def restate(report: Mapping[str, Any], declaration: Declaration, certificate: Certificate) -> dict[str, Any]:
    """The report once more, with everything that follows from declaration and certificate put in anew.

    A report that agrees with them equals the result. Errors raised: ProofError if a field of its own is missing.
    """
    try:
        return _assemble(
            report["run"], declaration, certificate, report["declaration"]["time"],
            **{name: report[name] for name in _OWN_FIELDS})
    except (KeyError, TypeError) as fault:
        raise ProofError(f"report.json lacks a field of {REPORT_FORMAT!r}: {fault}", code="bad-report") from None


def difference(found: object, expected: object, pointer: str = "") -> str | None:
    """JSON pointer of the first place where the canonical bytes of two JSON values differ, None if nowhere."""
    if isinstance(found, Mapping) and isinstance(expected, Mapping):
        for name in sorted(found.keys() | expected.keys()):
            if name not in found or name not in expected:
                return f"{pointer}/{name}"
            place = difference(found[name], expected[name], f"{pointer}/{name}")
            if place:
                return place
        return None
    if isinstance(found, list) and isinstance(expected, list) and len(found) == len(expected):
        for number, (one, other) in enumerate(zip(found, expected)):
            place = difference(one, other, f"{pointer}/{number}")
            if place:
                return place
        return None
    return None if canonical.canonical_bytes(found) == canonical.canonical_bytes(expected) else pointer or "/"


def summary(declaration: Declaration, certificate: Certificate) -> str:
    """The outcome in one sentence."""
    c = certificate
    if c.outcome == "certified":
        return (f"{c.certified_length} bits were certified from {c.rounds} rounds of {declaration.rig} by {c.method} "
                f"with soundness error {c.soundness!r}.")
    return f"The run of {c.rounds} rounds of {declaration.rig} was refused: {c.reason}."


def _assemble(run_id: str, declaration: Declaration, certificate: Certificate, declaration_time: str, *,
              records: Any, score: Any, diagnostics: Any, seed: Any, output: Any, ledger: Any,
              software: Any) -> dict[str, Any]:
    declared, stated = declaration_document(declaration), certificate_document(certificate)
    return canonical.parse(canonical.canonical_bytes({
        "format": REPORT_FORMAT,
        "run": run_id,
        "summary": summary(declaration, certificate),
        "confidentiality": CONFIDENTIALITY[declaration.disclosure],
        "declaration": {"digest": canonical.digest(declared), "time": declaration_time, "document": declared},
        "records": records,
        "score": score,
        "diagnostics": diagnostics,
        "certificate": {"digest": canonical.digest(stated), "document": stated},
        "seed": seed,
        "output": output,
        "ledger": ledger,
        "software": software,
        "cautions": list(CAUTIONS),
    }))
