"""/v1/runs: opening a run, its state, its seal."""

from __future__ import annotations

import math
from typing import Annotated, Any

from fastapi import APIRouter, Query, Response

from service.api import schemas
from service.api.auth import Anybody, PartsOf, Submitter
from service.api.bodies import StrictRoute
from service.api.idempotency import IdempotencyKey, once
from service.api.paging import Before, Limit, next_page
from service.api.problems import documented
from service.runs import describe, insert_run, new_id, owned_declaration, owned_run, prepare_run
from service.sealing import seal
from service.store.contracts import Transaction

router = APIRouter(prefix="/v1/runs", tags=["runs"], route_class=StrictRoute)


@router.post("", status_code=201, response_model=schemas.Run, operation_id="open_run",
             summary="Open a run under a declaration",
             responses=documented(400, 401, 403, 404, 415, 422, 507))
def open_(body: schemas.NewRun, parts: PartsOf, identity: Submitter, response: Response,
          key: IdempotencyKey = None) -> Any:
    """Makes an empty run that takes segments until it is sealed. Every run is made under one declaration and never
    changes to another. With an Idempotency-Key a repeated request gives the same run."""
    with parts.store.read() as reading:
        declaration = owned_declaration(reading, body.declaration, identity)
    parts.blobs.need(0)
    run_id = new_id("r")
    prepare_run(parts, run_id)

    def make(transaction: Transaction) -> dict[str, Any]:
        row = insert_run(transaction, run_id, identity.owner, declaration)
        return describe(transaction, [row])[0]

    answer = None
    try:
        answer = once(parts, identity, key, "runs", body.model_dump(), make)
    finally:
        if answer is None or answer["id"] != run_id:        # answered before, or not at all: the new key is of no use
            parts.keys.erase(run_id)
            parts.blobs.discard(run_id)
    response.headers["Location"] = f"/v1/runs/{answer['id']}"
    return answer


@router.get("", response_model=schemas.Runs, operation_id="list_runs", summary="Your runs, newest first",
            responses=documented(401, 422))
def list_(parts: PartsOf, identity: Anybody, response: Response, limit: Limit = 50, before: Before = None,
          state: Annotated[list[schemas.State] | None, Query(description="only runs in one of these states")] = None,
          declaration: Annotated[str | None,
                                 Query(max_length=64, description="only runs under this declaration")] = None,
          everybody: Annotated[bool, Query(description="of all owners (admin only)")] = False) -> Any:
    """Newest first, a page at a time; `next` is the address of the next page."""
    limit = min(limit, parts.settings.page_items)
    owner = None if everybody and identity.may("admin") else identity.owner
    with parts.store.read() as reading:
        rows = reading.list_runs(owner, states=state, declaration_id=declaration, before=before, limit=limit + 1)
        shown = describe(reading, rows[:limit])
    others = {"state": state, "declaration": declaration, "everybody": everybody or None}
    return {"runs": shown, "next": next_page(response, "/v1/runs", rows, limit, others)}


@router.get("/{run}", response_model=schemas.Run, operation_id="read_run",
            summary="State, stage, share done, time left",
            responses=documented(401, 404))
def read(run: schemas.RunId, parts: PartsOf, identity: Anybody) -> Any:
    """What the run is doing now, how far it has come, what it waits for, and what came out. Ask as often as you
    like, or watch its events instead."""
    with parts.store.read() as reading:
        return describe(reading, [owned_run(reading, run, identity)])[0]


@router.post("/{run}/seal", status_code=202, response_model=schemas.Run, operation_id="seal_run",
             summary="No more rounds: fixes what arrived in the ledger and starts the job",
             responses=documented(400, 401, 403, 404, 409, 415, 422))
def seal_(run: schemas.RunId, body: schemas.SealRequest, parts: PartsOf, identity: Submitter,
          response: Response) -> Any:
    """The numbers must be what arrived. Repeating the call is harmless. Ask Location again after Retry-After seconds,
    or watch the events."""
    with parts.store.read() as reading:
        owned_run(reading, run, identity)
    row = seal(parts, run, body.segments, body.rounds)
    response.headers["Location"] = f"/v1/runs/{run}"
    response.headers["Retry-After"] = str(max(1, math.ceil(parts.settings.poll_s)))
    with parts.store.read() as reading:
        return describe(reading, [row])[0]
