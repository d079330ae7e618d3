"""/v1/runs/{run}/events: the run as server-sent events; a watcher can go on where it stopped.

Every change of state or stage is an event with an id. In between, the share done is told by events without an id: they
are not kept, and a watcher that comes back does not need them. Silence is filled with comments.
"""

from __future__ import annotations

import asyncio
import json
import time
from collections.abc import AsyncIterator
from typing import Annotated, Any

from anyio.to_thread import run_sync
from fastapi import APIRouter, Header, Request
from fastapi.responses import StreamingResponse

from service.api import schemas
from service.api.auth import Anybody, PartsOf
from service.api.bodies import StrictRoute
from service.api.problems import sending
from service.jobs.states import FINAL_STATES
from service.parts import Parts
from service.runs import describe, owned_run
from service.store.contracts import EventRow

router = APIRouter(prefix="/v1/runs", tags=["runs"], route_class=StrictRoute)
MEDIA_TYPE = "text/event-stream"
PAGE = 100
_LAST = Header(alias="Last-Event-ID", max_length=18, pattern=r"^\d*$",
               description="number of the last event already seen")


@router.get("/{run}/events", operation_id="watch_run", summary="The run as server-sent events, until it is final",
            response_class=StreamingResponse, responses=sending(
                MEDIA_TYPE, "events named `run`: data is the Run as JSON, id its number within the run", 401, 404, 422))
def events(run: schemas.RunId, request: Request, parts: PartsOf, identity: Anybody,
           last: Annotated[str | None, _LAST] = None) -> Any:
    """Every change of state or stage is an event with an id; the share done in between comes in events without
    one. After a broken line send the last id as Last-Event-ID, and nothing is missed. The stream ends with a final
    state."""
    with parts.store.read() as reading:
        owned_run(reading, run, identity)
    return StreamingResponse(_stream(request, parts, run, int(last or 0)), media_type=MEDIA_TYPE,
                             headers={"Cache-Control": "no-store", "X-Accel-Buffering": "no"})


async def _stream(request: Request, parts: Parts, run_id: str, seq: int) -> AsyncIterator[bytes]:
    settings, told, spoke = parts.settings, None, time.monotonic()
    yield b": the run as it changes\n\n"
    while not request.app.state.stopping.is_set():
        rows, now = await run_sync(_news, parts, run_id, seq)
        for row in rows:
            seq, told, spoke = row.seq, row.document, time.monotonic()
            yield _event(row.document, row.seq)
        if len(rows) == PAGE:                   # far behind: what it is now comes at the end
            continue
        if now != told:
            told, spoke = now, time.monotonic()
            yield _event(now, None)
        if now["state"] in FINAL_STATES:
            return
        if time.monotonic() - spoke > settings.event_keepalive_s:
            spoke = time.monotonic()
            yield b": still here\n\n"
        await asyncio.sleep(settings.event_poll_s)


def _news(parts: Parts, run_id: str, seq: int) -> tuple[list[EventRow], dict[str, Any]]:
    with parts.store.read() as reading:
        row = reading.get_run(run_id)
        return reading.events_after(run_id, seq, limit=PAGE), describe(reading, [row] if row else [])[0]


def _event(document: dict[str, Any], seq: int | None) -> bytes:
    number = f"id: {seq}\n" if seq is not None else ""
    return f"{number}event: run\ndata: {json.dumps(document, separators=(',', ':'))}\n\n".encode()
