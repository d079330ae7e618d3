"""Trouble as HTTP: every error of the service becomes one RFC 9457 problem document with a stable `code`.

    InputError      422 (400 where the message itself is malformed)   Unavailable    503, disk full 507
    NotFound        404                                               StorageFailed  503, and the service stops
    Conflict        409, Gone and KeyErased 410                       ProofError     500
    BrokenTransfer  400, 408, 413                                     Defect, others 500 without a word more

Only texts written for the caller go out; an unexpected exception is logged, and its text stays inside.
"""

from __future__ import annotations

import logging
import math
from collections.abc import Mapping
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

from extractor.errors import InputError, ProofError
from service.errors import BrokenTransfer, Conflict, Gone, KeyErased, NotFound, StorageFailed, Unavailable

MEDIA_TYPE = "application/problem+json"
log = logging.getLogger("bellassay.api")

TITLES = {
    400: "The request is malformed", 401: "A valid token is needed", 403: "The token does not allow this",
    404: "There is no such thing here", 405: "This address does not take that method", 406: "No acceptable form",
    408: "The request came too slowly", 409: "The request does not fit the present state", 410: "Erased for good",
    413: "The body is too large", 415: "The body must be JSON", 416: "The range cannot be served",
    422: "A value is not acceptable", 500: "The service failed", 503: "Not possible just now",
    507: "The data disk is full",
}
_MALFORMED = ("bad-json", "repeated-key", "content-digest-missing", "content-digest-malformed")
_TRANSFER = {"upload-too-slow": 408, "upload-too-large": 413}


class Problem(HTTPException):
    """A problem to answer with; `code` is stable, `detail` is for people."""

    def __init__(self, status: int, code: str, detail: str, *, errors: tuple[dict[str, Any], ...] = (),
                 headers: Mapping[str, str] | None = None, retry_after_s: float | None = None) -> None:
        self.code, self.errors = code, errors
        told = dict(headers or {})
        if retry_after_s is not None:
            told["Retry-After"] = str(max(1, math.ceil(retry_after_s)))
        super().__init__(status, detail, told)

    def response(self) -> JSONResponse:
        document: dict[str, Any] = {
            "type": f"urn:bellassay:problem:{self.code}", "title": TITLES.get(self.status_code, "Problem"),
            "status": self.status_code, "detail": self.detail, "code": self.code, "errors": list(self.errors)}
        return JSONResponse(document, self.status_code, dict(self.headers or {}), MEDIA_TYPE)


def problem_of(fault: Exception) -> Problem:
    """The problem an exception is answered with."""
    match fault:
        case Problem():
            return fault
        case InputError():
            return Problem(400 if fault.code in _MALFORMED else 422, fault.code, str(fault), errors=(_place(fault),))
        case NotFound():
            return Problem(404, fault.code, fault.message)
        case Conflict():
            return Problem(409, fault.code, fault.message, errors=fault.errors, retry_after_s=fault.retry_after_s)
        case Gone() | KeyErased():
            return Problem(410, fault.code, fault.message)
        case BrokenTransfer():
            return Problem(_TRANSFER.get(fault.code, 400), fault.code, fault.message,
                           headers={"Connection": "close"} if fault.code == "upload-too-slow" else None)
        case Unavailable():
            return Problem(507 if fault.code == "disk-full" else 503, fault.code, fault.message,
                           retry_after_s=fault.retry_after_s)
        case StorageFailed():
            return Problem(503, fault.code, "the disk failed; the service stops and the operator must act",
                           headers={"Connection": "close"})
        case ProofError():
            return Problem(500, fault.code, fault.message)
        case RequestValidationError():
            return _validation(fault)
        case HTTPException():
            code = {404: "not-found", 405: "method-not-allowed"}.get(fault.status_code, "bad-request")
            return Problem(fault.status_code, code, TITLES.get(fault.status_code, str(fault.detail)),
                           headers=fault.headers)
        case _:
            return Problem(500, "defect", "an error of the service itself; it was logged")


def _place(fault: InputError) -> dict[str, Any]:
    pointer = fault.field if fault.field and fault.field.startswith("/") else None
    place = {"pointer": pointer, "detail": fault.message, "file": fault.file, "row": fault.row,
             "field": None if pointer else fault.field}
    return {name: value for name, value in place.items() if value is not None}


def _validation(fault: RequestValidationError) -> Problem:
    """Fields that do not fit the documented types. The values sent are not repeated: they might be secret."""
    errors = []
    for error in fault.errors():
        source, *path = error["loc"] or ("body",)
        if source == "body":
            place = {"pointer": "".join(f"/{part}" for part in path) or "/"}
        else:
            place = {"field": ".".join(map(str, path))}
        errors.append({**place, "detail": error["msg"]})
    first = errors[0] if errors else {"detail": "it does not fit its type"}
    return Problem(422, "bad-request", f"{first.get('pointer') or first.get('field', '')}: {first['detail']}",
                   errors=tuple(errors))


def install(app: FastAPI) -> None:
    """Every exception that leaves a route, and every unknown address, is answered with a problem document."""
    async def answer(request: Request, fault: Exception) -> JSONResponse:
        problem = problem_of(fault)
        if problem.status_code >= 500 and not isinstance(fault, (Problem, Unavailable)):
            log.error("%s %s failed", request.method, request.url.path, exc_info=fault)
        if isinstance(fault, StorageFailed):
            request.app.state.storage_failed()
        return problem.response()

    for kind in (HTTPException, RequestValidationError, InputError, ProofError, NotFound, Conflict, Gone, KeyErased,
                 BrokenTransfer, Unavailable, StorageFailed, Exception):
        app.add_exception_handler(kind, answer)


def documented(*statuses: int) -> dict[int | str, dict[str, Any]]:
    """The `responses` of a route: which problems it can answer with, beside the usual ones."""
    return {status: {"description": TITLES[status],
                     "content": {MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}}
            for status in statuses}


def sending(media_type: str, description: str, *statuses: int) -> dict[int | str, dict[str, Any]]:
    """The `responses` of a route that sends something else than a document of `schemas`, and its problems."""
    schema = {"type": "object"} if media_type == "application/json" else {"type": "string"}
    return {200: {"description": description, "content": {media_type: {"schema": schema}}}, **documented(*statuses)}
