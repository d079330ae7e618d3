"""The HTTP application around opened parts: routers, problems, OpenAPI, and what surrounds every request."""

from __future__ import annotations

import asyncio
import threading
from collections import Counter
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any

from anyio.to_thread import run_sync
from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.api import (
    declarations, docs, events, ledger, operations, plans, problems, results, runs, schemas, segments,
)
from service.clock import now_s
from service.collection import finish_erasures
from service.parts import Parts
from service.uploads import UploadRoom

VERSION = "0.1.0"
ROUTERS = (declarations, runs, segments, events, results, plans, ledger, operations, docs)
LEFTOVERS_AFTER_S = 86_400.0        # unfinished files older than this belong to nobody any more
_SAFETY = ((b"x-content-type-options", b"nosniff"), (b"referrer-policy", b"no-referrer"))
_ALWAYS_OPEN = ("/livez", "/readyz")
_DESCRIPTION = """Rounds of a Bell test in, certified random bits and an audit report out.

Record a **declaration** before the rounds exist, open a **run** under it, upload its **segments**, **seal** it, watch
it, and collect certificate, report, bundle and **bits**; confirming the **collection** erases everything the bits
could be made from.

Every error is an RFC 9457 problem with a stable `code`. A certificate is conditional on the assumptions it lists."""


def build(parts: Parts) -> FastAPI:
    """The application. `app.state.stopping` ends event streams; `app.state.on_failure` is called if the disk fails."""
    app = FastAPI(title="bellassay", version=VERSION, description=_DESCRIPTION, lifespan=_life,
                  docs_url=None, redoc_url=None, separate_input_output_schemas=False)
    state = app.state
    state.parts, state.uploads = parts, UploadRoom(parts.settings.uploads_at_once)
    state.stopping, state.failed = threading.Event(), threading.Event()
    state.touched, state.answers = {}, Counter()
    state.on_failure = _nothing

    def storage_failed() -> None:
        if not state.failed.is_set():
            state.failed.set()
            state.on_failure()

    state.storage_failed = storage_failed
    problems.install(app)
    for module in ROUTERS:
        app.include_router(module.router)
    app.add_middleware(Surroundings, app=app)
    app.openapi = lambda: _openapi(app)         # type: ignore[method-assign]
    return app


def _nothing() -> None:
    pass


@asynccontextmanager
async def _life(app: FastAPI) -> AsyncIterator[None]:
    parts: Parts = app.state.parts
    await run_sync(finish_erasures, parts)
    await run_sync(parts.blobs.sweep, now_s() - LEFTOVERS_AFTER_S)
    yield
    app.state.stopping.set()
    await asyncio.to_thread(app.state.uploads.close)
    await asyncio.to_thread(parts.close)


class Surroundings:
    """What every request meets first: counting, protective headers, and a closed door once the disk has failed."""

    def __init__(self, inner: ASGIApp, app: FastAPI) -> None:
        self._inner, self._state = inner, app.state

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._inner(scope, receive, send)
            return

        async def observed(message: Message) -> None:
            if message["type"] == "http.response.start":
                self._state.answers[message["status"] // 100] += 1
                message["headers"] = [*message.get("headers", ()), *_SAFETY]
            await send(message)

        if self._state.failed.is_set() and scope["path"] not in _ALWAYS_OPEN:
            closed = problems.Problem(503, "storage-failed", "the disk failed; the service is stopping",
                                      headers={"Connection": "close"})
            await closed.response()(scope, receive, observed)
            return
        await self._inner(scope, receive, observed)


def _openapi(app: FastAPI) -> dict[str, Any]:
    """The generated description, with the problem document as the one shape of every error."""
    if app.openapi_schema is None:
        made = get_openapi(title=app.title, version=app.version, description=app.description, routes=app.routes)
        known = made.setdefault("components", {}).setdefault("schemas", {})
        template = "#/components/schemas/{model}"
        for model in (schemas.ProblemPlace, schemas.Problem):
            document = model.model_json_schema(ref_template=template)
            document.pop("$defs", None)
            known[model.__name__] = document
        for unused in ("HTTPValidationError", "ValidationError"):
            known.pop(unused, None)
        for operation in (one for path in made["paths"].values() for one in path.values()):
            _only_problems(operation)
        app.openapi_schema = made
    return app.openapi_schema


def _only_problems(operation: dict[str, Any]) -> None:
    """The framework documents its own 422; ours is a problem like the others. Any operation may find the service busy."""
    operation["responses"].setdefault("default", {"description": "any other problem"})
    for status, answer in operation.get("responses", {}).items():
        if status.startswith(("4", "5", "default")):
            answer["content"] = {problems.MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}


