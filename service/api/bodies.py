"""Bodies as they come from the wire: bounded, timed, strict; and the headers about them (RFC 9530, RFC 9110)."""

from __future__ import annotations

import asyncio
import base64
import binascii
import re
from collections.abc import AsyncIterator, Callable, Coroutine
from typing import Any
from urllib.parse import unquote

from fastapi import Request, Response
from fastapi.routing import APIRoute
from starlette.requests import ClientDisconnect
from starlette.types import Message, Receive

from extractor.errors import InputError
from extractor.seal import canonical
from service.api.problems import Problem, problem_of
from service.errors import BrokenTransfer

FILE_NAME_LENGTH = 200
DRAIN_BYTES = 2**32         # a refused body is read (and dropped) up to here, so that its sender gets to see the answer
_DIGEST = re.compile(r"sha-256=:([A-Za-z0-9+/]{43}=):")
_RANGE = re.compile(r"bytes=(\d{0,18})-(\d{0,18})")


def timed(receive: Receive, timeout_s: float) -> Receive:
    """`receive` that gives up when nothing comes for `timeout_s`: the server itself would wait for ever."""
    async def within() -> Message:
        try:
            async with asyncio.timeout(timeout_s):
                return await receive()
        except TimeoutError:
            raise BrokenTransfer(f"no further piece of the body came within {timeout_s:g} s",
                                 code="upload-too-slow") from None
    return within


def pieces_of(request: Request) -> AsyncIterator[bytes]:
    """The body as it comes. Errors raised: BrokenTransfer if it stalls or the line breaks."""
    async def pieces() -> AsyncIterator[bytes]:
        try:
            async for piece in request.stream():        # timed by StrictRoute
                yield piece
        except ClientDisconnect:
            raise BrokenTransfer("the line broke before the body was complete", code="upload-cut") from None
    return pieces()


async def drain(request: Request) -> None:
    """Reads a body that is not wanted: a sender that is cut off would see a broken line, not the answer."""
    total = 0
    async for piece in pieces_of(request):
        total += len(piece)
        if total > DRAIN_BYTES:
            raise BrokenTransfer("the body is too long", code="upload-too-large")


def announced_bytes(request: Request) -> int | None:
    """Content-Length, if there is one."""
    text = request.headers.get("content-length", "")
    return int(text) if text.isdecimal() and len(text) < 19 else None


def content_digest(request: Request) -> bytes:
    """The SHA-256 in Content-Digest. Errors raised: Problem 400."""
    headers = request.headers.getlist("content-digest")
    if not headers:
        raise Problem(400, "content-digest-missing",
                      "send the header Content-Digest: sha-256=:<base64 of the body's SHA-256>: (RFC 9530)")
    found = [match for part in ",".join(headers).split(",") if (match := _DIGEST.fullmatch(part.strip()))]
    if len(found) != 1:
        raise Problem(400, "content-digest-malformed", "Content-Digest holds no single sha-256=:<base64>: value")
    try:
        return base64.b64decode(found[0][1], validate=True)
    except binascii.Error:
        raise Problem(400, "content-digest-malformed", "the digest in Content-Digest is not base64") from None


def digest_header(digest: bytes) -> str:
    """A SHA-256 as RFC 9530 writes it."""
    return f"sha-256=:{base64.b64encode(digest).decode()}:"


def file_name(request: Request, given: str | None, otherwise: str) -> str:
    """What error texts call the body, one printable line: ?name=, else Content-Disposition, else `otherwise`."""
    name = given
    if name is None:
        header = request.headers.get("content-disposition", "")
        if extended := re.search(r"filename\*=UTF-8''([^;\s]+)", header, re.IGNORECASE):
            name = unquote(extended[1])
        elif plain := re.search(r'filename="?([^";]+)"?', header, re.IGNORECASE):
            name = plain[1]
    name = (name or "").replace("\\", "/").rsplit("/", 1)[-1].strip()
    return "".join(c for c in name if c.isprintable())[:FILE_NAME_LENGTH] or otherwise


def byte_range(header: str | None, size: int) -> tuple[int, int] | None:
    """(first, last) of a single byte range of a body of `size` bytes; None: send everything (also for many ranges).

    Errors raised: Problem 416 if no byte of it exists.
    """
    match = _RANGE.fullmatch((header or "").replace(" ", ""))
    if match is None or not (match[1] or match[2]):
        return None
    if match[1]:
        first = int(match[1])
        last = min(int(match[2]), size - 1) if match[2] else size - 1
        if match[2] and int(match[2]) < first:
            return None                     # RFC 9110, 14.1.1: an invalid range is ignored
    else:
        first, last = max(0, size - int(match[2])), size - 1
    if first >= size or first > last:
        raise Problem(416, "range-not-satisfiable", f"there are {size} bytes",
                      headers={"Content-Range": f"bytes */{size}"})
    return first, last


class _StrictRequest(Request):
    """JSON bodies: of bounded size and pace, and with one meaning only (no repeated keys, no NaN)."""

    async def body(self) -> bytes:
        if not hasattr(self, "_body"):
            kind = self.headers.get("content-type", "").partition(";")[0].strip().lower()
            if kind != "application/json":
                raise Problem(415, "not-json", "send the body with Content-Type: application/json")
            limit = self.app.state.parts.settings.document_bytes
            announced = announced_bytes(self)
            gathered = bytearray()
            try:
                if announced is not None and announced > limit:
                    raise BrokenTransfer(f"{announced} bytes are announced, {limit} are accepted",
                                         code="upload-too-large")
                async for piece in self.stream():
                    gathered += piece
                    if len(gathered) > limit:
                        raise BrokenTransfer(f"more than the {limit} accepted bytes arrived", code="upload-too-large")
            except BrokenTransfer as fault:
                raise problem_of(fault) from None
            self._body = bytes(gathered)
        return self._body

    async def json(self) -> Any:
        try:
            return canonical.parse(await self.body())
        except InputError as fault:
            raise Problem(400, fault.code, f"the body {fault.message}") from None


class StrictRoute(APIRoute):
    """The route class of every router of the API."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        handler = super().get_route_handler()

        async def strict(request: Request) -> Response:
            settings = request.app.state.parts.settings
            return await handler(_StrictRequest(request.scope, timed(request.receive, settings.upload_chunk_timeout_s)))

        return strict
