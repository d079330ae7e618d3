"""/v1/runs/{run}/certificate, /report, /bundle, /bits, /collection: what comes out of a run."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

from fastapi import APIRouter, Request, Response
from fastapi.responses import FileResponse, StreamingResponse

from service.api import schemas
from service.api.auth import Collector, PartsOf, Reader
from service.api.bodies import StrictRoute, digest_header
from service.api.problems import Problem, documented, sending
from service.api.sending import BINARY, send_vault_file
from service.collection import confirm, open_bits
from service.errors import Conflict
from service.parts import Parts
from service.runs import owned_run
from service.store.contracts import RunRow

router = APIRouter(prefix="/v1/runs", tags=["results"], route_class=StrictRoute)
JSON, ZIP = "application/json", "application/zip"
_PENDING = ("open", "sealed", "working")


@router.get("/{run}/certificate", operation_id="read_certificate", response_class=Response,
            summary="The certificate or refusal, canonical JSON",
            responses=sending(JSON, "RFC 8785 bytes, as committed to in the ledger", 401, 403, 404, 409))
def certificate(run: schemas.RunId, parts: PartsOf, identity: Reader) -> Any:
    """What is certified and how it was computed: terms, credits of the cells, assumptions. A refusal is a
    certificate of length 0 with its reason."""
    row = _run(parts, run, identity)
    if row.certificate is None:
        raise _not_yet(parts, row, "certificate")
    return Response(row.certificate, media_type=JSON, headers=_digests(hashlib.sha256(row.certificate).digest()))


@router.get("/{run}/report", operation_id="read_report", response_class=Response, summary="The audit report",
            responses=sending(JSON, "RFC 8785 bytes", 401, 403, 404, 406, 409))
def report(run: schemas.RunId, request: Request, parts: PartsOf, identity: Reader) -> Any:
    """Declaration, certificate, score, diagnostics, digests and the versions that computed them in one signed
    document."""
    row = _run(parts, run, identity)
    if not _accepts(request.headers.get("accept", "*/*"), JSON):
        raise Problem(406, "not-acceptable", f"the report is available as {JSON}")
    if row.report_digest is None or row.state in _PENDING:
        raise _not_yet(parts, row, "report")
    data = parts.blobs.report_path(run).read_bytes()
    return Response(data, media_type=JSON, headers={**_digests(hashlib.sha256(data).digest()), "Vary": "Accept"})


@router.get("/{run}/bundle", operation_id="read_bundle", response_class=FileResponse,
            summary="Report, proofs and what else an offline check needs, as a zip file",
            responses=sending(ZIP, "zip file", 401, 403, 404, 409))
def bundle(run: schemas.RunId, parts: PartsOf, identity: Reader) -> Any:
    """Everything `bellassay verify` needs to check the run without asking anybody."""
    row = _run(parts, run, identity)
    if row.report_digest is None or row.state in _PENDING:
        raise _not_yet(parts, row, "bundle")
    path = parts.blobs.bundle_path(run)
    return FileResponse(path, media_type=ZIP, filename=f"{run}.zip", headers=_digests(_file_digest(path)))


@router.get("/{run}/bits", operation_id="read_bits", response_class=StreamingResponse,
            summary="The certified bits (Range honoured)",
            responses={**sending(BINARY, "the bits, packed from the least significant bit of each byte on; the header "
                                         "Bits-Salt opens the commitment", 401, 403, 404, 409, 410, 416),
                       206: {"description": "the range asked for"}})
def bits(run: schemas.RunId, request: Request, parts: PartsOf, identity: Collector) -> Any:
    """May be fetched as often as needed until the collection is confirmed; from then on nobody can get them again."""
    stored = open_bits(parts, _run(parts, run, identity))
    headers = {"Repr-Digest": digest_header(stored.digest), "Bits-Salt": stored.salt.hex()}
    return send_vault_file(request, parts, run, stored.file, stored.start, stored.bytes, stored.digest, headers)


@router.post("/{run}/collection", response_model=schemas.Collection, operation_id="confirm_collection",
             summary="Confirm that the bits are safely stored: the run's key is erased",
             responses=documented(400, 401, 403, 404, 409, 415, 422))
def collection(run: schemas.RunId, body: schemas.CollectionRequest, parts: PartsOf, identity: Collector) -> Any:
    """Of many callers exactly one wins. Rounds, seed and bits of the run cannot be read by anybody afterwards."""
    row, index = confirm(parts, _run(parts, run, identity), bytes.fromhex(body.digest.removeprefix("sha256:")))
    return {"collected": row.collected_time, "ledger_index": index}


def _run(parts: Parts, run: str, identity: Any) -> RunRow:
    with parts.store.read() as reading:
        return owned_run(reading, run, identity)


def _not_yet(parts: Parts, row: RunRow, what: str) -> Conflict:
    if row.state in _PENDING:
        return Conflict(f"the run is {row.state}; its {what} does not exist yet", code=f"{what}-pending",
                        retry_after_s=None if row.state == "open" else parts.settings.poll_s)
    return Conflict(f"the run is {row.state}; it has no {what}", code=f"no-{what}")


def _digests(digest: bytes) -> dict[str, str]:
    return {"ETag": f'"sha256:{digest.hex()}"', "Repr-Digest": digest_header(digest), "Cache-Control": "no-cache"}


def _file_digest(path: Path) -> bytes:
    with open(path, "rb") as file:
        return hashlib.file_digest(file, "sha256").digest()


def _accepts(header: str, kind: str) -> bool:
    """Whether an Accept header takes a media type (RFC 9110, 12.5.1): the most specific range that matches decides."""
    best = (-1, 0.0)
    for part in header.split(","):
        name, *parameters = (piece.strip() for piece in part.split(";"))
        rank = {kind: 2, kind.split("/")[0] + "/*": 1, "*/*": 0}.get(name.lower(), -1)
        quality = next((value.partition("=")[2] for value in parameters if value.lower().startswith("q=")), "1")
        try:
            best = max(best, (rank, float(quality))) if rank >= 0 else best
        except ValueError:
            continue
    return best[0] >= 0 and best[1] > 0
