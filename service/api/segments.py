"""/v1/runs/{run}/segments and /seed: round files and seeds as raw bodies with a digest."""

from __future__ import annotations

from typing import Annotated, Any

from anyio.to_thread import run_sync
from fastapi import APIRouter, Path, Query, Request, Response
from fastapi.responses import StreamingResponse

from extractor.documents import tally_counts
from extractor.model import Tally
from service.api import schemas
from service.api.auth import Anybody, PartsOf, Reader, Submitter
from service.api.bodies import (
    StrictRoute, announced_bytes, content_digest, digest_header, drain, file_name, pieces_of,
)
from service.api.problems import documented, sending
from service.api.sending import BINARY, send_vault_file
from service.custody.vault import open_vault
from service.errors import Conflict, Gone, KeyErased
from service.parts import Parts
from service.runs import declaration_of, owned_run
from service.store.blobs import SEED, segment_name
from service.store.contracts import RunRow, SegmentRow
from service.uploads import (
    UploadRoom, check_number, receive, refuse_if_sealed, same_seed, seed_length, segment_differs, take_seed,
    take_segment,
)

router = APIRouter(prefix="/v1/runs", tags=["rounds and seeds"], route_class=StrictRoute)
_OCTETS = {"requestBody": {"required": True, "content": {BINARY: {"schema": {"type": "string", "format": "binary"}}}},
           "parameters": [{"name": "Content-Digest", "in": "header", "required": True, "schema": {"type": "string"},
                           "description": "RFC 9530",
                           "example": "sha-256=:n4bQgYhMfWWaL+qgxVrQFaO/TxsrC4Is0V1sFbDwCgg=:"}]}
Name = Annotated[str | None, Query(max_length=500, description="file name for error texts")]
Number = Annotated[int, Path(description="1, 2, ... in the order in which the rounds were taken", examples=[1])]


@router.put("/{run}/segments/{number}", status_code=201, response_model=schemas.Segment, operation_id="upload_segment",
            summary="Upload a round file as a segment of the run", openapi_extra=_OCTETS,
            responses={200: {"model": schemas.Segment, "description": "this segment had arrived before"},
                       **documented(400, 401, 403, 404, 408, 409, 410, 413, 422, 503, 507)})
async def put_segment(run: schemas.RunId, number: Number, request: Request, response: Response, parts: PartsOf,
                      identity: Submitter, name: Name = None) -> Any:
    """Any accepted format (NPY, NPZ, CSV). The body is streamed to encrypted storage; once its digest agrees, the
    rounds are read, checked, packed and counted. 201 means all of that is done and durable. Repeating the request is
    harmless."""
    digest = content_digest(request)
    check_number(parts, number)

    def look() -> tuple[RunRow, SegmentRow | None, Any]:
        with parts.store.read() as reading:
            row = owned_run(reading, run, identity)
            return row, reading.get_segment(run, number), declaration_of(reading, row)

    row, found, declaration = await run_sync(look)
    if found is not None and found.digest == "sha256:" + digest.hex():
        await drain(request)
        response.status_code = 200
        return _shown(found)
    try:
        refuse_if_sealed(row)
        if found is not None:
            raise segment_differs(number)
    except Conflict:
        await drain(request)
        raise
    room: UploadRoom = request.app.state.uploads
    with room.place():
        async with receive(parts, room, run, segment_name(number), pieces_of(request), digest=digest,
                           limit_bytes=parts.settings.segment_bytes, announced_bytes=announced_bytes(request)) as body:
            made, new = await room.start(
                take_segment, parts, row, declaration, number, body, file_name(request, name, f"segment {number}"))
    response.status_code = 201 if new else 200
    return _shown(made)


@router.get("/{run}/segments", response_model=schemas.Segments, operation_id="list_segments",
            summary="What has arrived; send what is missing", responses=documented(401, 404))
def list_segments(run: schemas.RunId, parts: PartsOf, identity: Anybody) -> Any:
    """The segments that are stored, with digest, number of rounds and counts. After an interruption a sender
    compares the digests and sends only what is missing."""
    with parts.store.read() as reading:
        owned_run(reading, run, identity)
        rows = reading.list_segments(run)
    return {"segments": [_shown(row) for row in rows], "rounds": sum(row.rounds for row in rows)}


@router.put("/{run}/seed", response_model=schemas.SeedReceipt, operation_id="upload_seed",
            summary="Upload the seed of a waiting run",
            openapi_extra=_OCTETS, responses=documented(400, 401, 403, 404, 408, 409, 410, 413, 422, 503, 507))
async def put_seed(run: schemas.RunId, request: Request, parts: PartsOf, identity: Submitter) -> Any:
    """Exactly `seed.bits_needed` uniform bits of the run, packed from the least significant bit of each byte on, tail
    bits zero. Nobody may have known them before the run was sealed."""
    digest = content_digest(request)

    def look() -> RunRow:
        with parts.store.read() as reading:
            return owned_run(reading, run, identity)

    row = await run_sync(look)
    if row.seed_source == "upload" and row.seed_digest is not None:
        await drain(request)
        return _receipt(same_seed(row, "sha256:" + digest.hex()))
    try:
        bits = seed_length(parts, row)
    except Conflict:
        await drain(request)
        raise
    room: UploadRoom = request.app.state.uploads
    with room.place():
        async with receive(parts, room, run, SEED, pieces_of(request), digest=digest, limit_bytes=(bits + 7) // 8 + 1,
                           announced_bytes=announced_bytes(request)) as body:
            row = await room.start(take_seed, parts, run, bits, body)
    return _receipt(row)


@router.get("/{run}/seed", operation_id="read_seed", summary="The seed that was used", response_class=StreamingResponse,
            responses=sending(BINARY, "the seed, packed", 401, 403, 404, 409, 410))
def get_seed(run: schemas.RunId, request: Request, parts: PartsOf, identity: Reader) -> Any:
    """For an audit: the seed that was drawn by the service or uploaded. It can be read from the time it is fixed
    until the bits are collected. Range is honoured."""
    with parts.store.read() as reading:
        row = owned_run(reading, run, identity)
    if row.state in ("collected", "erased"):
        raise _erased()
    if row.seed_digest is None:
        working = row.state in ("sealed", "working")
        code = "seed-pending" if working or row.state == "open" else "no-seed"
        raise Conflict("the run has no seed (yet)", code=code, retry_after_s=parts.settings.poll_s if working else None)
    return _seed_file(request, parts, row, bytes.fromhex(row.seed_digest.removeprefix("sha256:")))


def _seed_file(request: Request, parts: Parts, row: RunRow, digest: bytes) -> Response:
    try:
        file = open_vault(parts.blobs.path(row.id, SEED), parts.keys.load(row.id), SEED)
    except (KeyErased, FileNotFoundError):
        raise _erased() from None
    size = ((row.seed_bits or 0) + 7) // 8
    return send_vault_file(request, parts, row.id, file, 0, size, digest, {"Repr-Digest": digest_header(digest)})


def _erased() -> Gone:
    return Gone("the seed was erased when the bits were collected", code="bits-collected")


def _receipt(row: RunRow) -> dict[str, Any]:
    return {"bits": row.seed_bits, "digest": row.seed_digest}


def _shown(row: SegmentRow) -> dict[str, Any]:
    return {"segment": row.number, "digest": row.digest, "bytes": row.bytes, "format": row.format, "rounds": row.rounds,
            "planes_digest": row.planes_digest, "first_round": row.first_round, "last_round": row.last_round,
            "no_clicks": list(row.no_clicks), "file_name": row.file_name, "received": row.received,
            "tally": tally_counts(Tally(row.tally))}
