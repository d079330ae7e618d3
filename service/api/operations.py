"""/livez, /readyz (open to everybody) and /metrics: is it running, can it work, how much is there."""

from __future__ import annotations

from typing import Any

from fastapi import APIRouter, Request
from fastapi.responses import PlainTextResponse

from service.api import schemas
from service.api.auth import Auditor, PartsOf
from service.api.problems import Problem, documented, sending

router = APIRouter(tags=["operation"])
OPENMETRICS = "application/openmetrics-text; version=1.0.0; charset=utf-8"


@router.get("/livez", response_model=schemas.Health, operation_id="livez", summary="The process runs",
            responses=documented(503))
def livez(request: Request) -> Any:
    """Open to everybody. 503 means that the disk failed and the service must be started again."""
    if request.app.state.failed.is_set():
        raise Problem(503, "storage-failed",
                      "the disk failed; the service must be started again after the operator has acted")
    return {"status": "alive"}


@router.get("/readyz", response_model=schemas.Health, operation_id="readyz", summary="Requests can be served",
            responses=documented(503, 507))
def readyz(request: Request, parts: PartsOf) -> Any:
    """Open to everybody. 503 or 507: not just now, because the service is stopping, its database is busy or its
    disk is full."""
    livez(request)
    if request.app.state.stopping.is_set():
        raise Problem(503, "stopping", "the service is being stopped")
    parts.store.check()
    parts.blobs.need(0)
    return {"status": "ready"}


@router.get("/metrics", operation_id="metrics", summary="Numbers for monitoring (scope audit)",
            response_class=PlainTextResponse,
            responses=sending("application/openmetrics-text", "OpenMetrics text", 401, 403))
def metrics(request: Request, parts: PartsOf, identity: Auditor) -> Any:
    """Runs by state, size of the ledger, free disk, uploads and answers, as OpenMetrics text."""
    with parts.store.read() as reading:
        runs, head = reading.count_runs(), reading.ledger_head()
    state = request.app.state
    lines = [
        "# TYPE bellassay_runs gauge", "# HELP bellassay_runs Runs by state.",
        *(f'bellassay_runs{{state="{name}"}} {count}' for name, count in runs.items()),
        "# TYPE bellassay_ledger_entries gauge", "# HELP bellassay_ledger_entries Entries of the ledger.",
        f"bellassay_ledger_entries {head.size if head else 0}",
        "# TYPE bellassay_disk_free_bytes gauge", "# UNIT bellassay_disk_free_bytes bytes",
        "# HELP bellassay_disk_free_bytes Free room on the data disk.",
        f"bellassay_disk_free_bytes {parts.blobs.free_bytes()}",
        "# TYPE bellassay_uploads gauge", "# HELP bellassay_uploads Uploads being received.",
        f"bellassay_uploads {state.uploads.taken}",
        "# TYPE bellassay_answers counter", "# HELP bellassay_answers Answers by status class.",
        *(f'bellassay_answers_total{{status="{kind}xx"}} {count}' for kind, count in sorted(state.answers.items())),
        "# EOF", ""]
    return PlainTextResponse("\n".join(lines), media_type=OPENMETRICS)
