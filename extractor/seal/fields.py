"""The fields of a report that nothing else in the bundle repeats: do they have the right form, and add up?"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from extractor.errors import ProofError
from extractor.model import Certificate, Declaration
from extractor.seal.canonical import EXACT_WHOLE
from extractor.seal.report import FILE_FIELDS

_DIGEST = re.compile(r"sha256:[0-9a-f]{64}\Z")
_COMMITMENT = re.compile(r"hmac-sha256:[0-9a-f]{64}\Z")
_SALT = re.compile(r"[0-9a-f]{64}\Z")


def check_fields(report: Mapping[str, Any], declaration: Declaration, certificate: Certificate) -> None:
    """Raise ProofError, naming the field, unless the report's own fields are well formed and fit the certificate."""
    _need(certificate.outcome in ("certified", "refused"), "/certificate/document/outcome")
    _need(_is_text(report["run"]), "/run")
    _need(isinstance(report["score"], dict), "/score")
    _need(_is_list_of(report["diagnostics"], dict), "/diagnostics")
    software = report["software"]
    _need(isinstance(software, dict) and all(isinstance(version, str) for version in software.values()), "/software")
    ledger = _object(report["ledger"], ("salt", "entries"), "/ledger")
    _need(_matches(_SALT, ledger["salt"]), "/ledger/salt")
    _need(_is_list_of(ledger["entries"], dict), "/ledger/entries")
    _check_records(report["records"], declaration, certificate)
    if certificate.outcome == "certified":
        seed = _object(report["seed"], ("source", "bits", "digest"), "/seed")
        _need(seed["source"] == declaration.seed_source, "/seed/source")
        _need(_is_whole(seed["bits"]) and seed["bits"] == certificate.seed_bits, "/seed/bits")
        _need(_matches(_DIGEST, seed["digest"]), "/seed/digest")
        output = _object(report["output"], ("bits", "bits_commitment", "backend"), "/output")
        _need(_is_whole(output["bits"]) and output["bits"] == certificate.certified_length, "/output/bits")
        _need(_matches(_COMMITMENT, output["bits_commitment"]), "/output/bits_commitment")
        _need(_is_text(output["backend"]), "/output/backend")
    else:
        _need(report["seed"] is None, "/seed")
        _need(report["output"] is None, "/output")


def _check_records(value: object, declaration: Declaration, certificate: Certificate) -> None:
    at = "/records"
    records = _object(value, ("rounds", "segments", "no_clicks", "planes_digest", "files"), at)
    _need(_is_whole(records["rounds"]) and records["rounds"] == certificate.rounds, f"{at}/rounds")
    _need(_is_whole(records["segments"]) and records["segments"] >= 1, f"{at}/segments")
    _need(_is_pair(records["no_clicks"]), f"{at}/no_clicks")
    _need(_matches(_DIGEST, records["planes_digest"]), f"{at}/planes_digest")
    files = records["files"]
    if declaration.disclosure == "public":
        _need(files is None, f"{at}/files")
        return
    _need(_is_list_of(files, dict) and len(files) == records["segments"], f"{at}/files")
    for number, file in enumerate(files, 1):
        place = f"{at}/files/{number - 1}"
        _object(file, FILE_FIELDS, place)
        _need(_is_whole(file["segment"]) and file["segment"] == number, f"{place}/segment")
        _need(_is_whole(file["bytes"]), f"{place}/bytes")
        _need(_is_whole(file["rounds"]), f"{place}/rounds")
        _need(_is_text(file["format"]), f"{place}/format")
        _need(_is_pair(file["no_clicks"]), f"{place}/no_clicks")
        for name in ("digest", "planes_digest"):
            _need(_matches(_DIGEST, file[name]), f"{place}/{name}")
    _need(sum(file["rounds"] for file in files) == records["rounds"], f"{at}/rounds")
    totals = [sum(file["no_clicks"][side] for file in files) for side in (0, 1)]
    _need(totals == records["no_clicks"], f"{at}/no_clicks")
    _need(len(files) > 1 or files[0]["planes_digest"] == records["planes_digest"], f"{at}/planes_digest")


def _need(right: bool, pointer: str) -> None:
    if not right:
        raise ProofError(f"report.json is malformed, or contradicts itself or the certificate, at {pointer}",
                         code="bad-report")


def _object(value: object, names: tuple[str, ...], pointer: str) -> dict[str, Any]:
    if not isinstance(value, dict) or set(value) != set(names):
        raise ProofError(f"report.json needs an object of {', '.join(names)} at {pointer}", code="bad-report")
    return value


def _is_whole(value: object) -> bool:
    return type(value) is int and 0 <= value <= EXACT_WHOLE


def _is_pair(value: object) -> bool:
    return isinstance(value, list) and len(value) == 2 and all(map(_is_whole, value))


def _is_text(value: object) -> bool:
    return isinstance(value, str) and 1 <= len(value) <= 200


def _is_list_of(value: object, kind: type) -> bool:
    return isinstance(value, list) and all(isinstance(one, kind) for one in value)


def _matches(pattern: re.Pattern[str], value: object) -> bool:
    return isinstance(value, str) and pattern.match(value) is not None
