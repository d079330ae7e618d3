"""Sending what lies in a vault file: whole or a range, with a strong ETag, stopping when the run's key is erased."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import BinaryIO

from fastapi import Request, Response
from fastapi.responses import StreamingResponse

from service.api.bodies import byte_range
from service.errors import KeyErased
from service.parts import Parts

BINARY = "application/octet-stream"
PIECE_BYTES = 2**20


def send_vault_file(request: Request, parts: Parts, run_id: str, file: BinaryIO, start: int, size: int, digest: bytes,
                    headers: Mapping[str, str]) -> Response:
    """`size` bytes of an open vault file from byte `start` on, as Range asks. Closes the file in any case."""
    etag = f'"sha256:{digest.hex()}"'
    told = {"ETag": etag, "Accept-Ranges": "bytes", "Cache-Control": "no-store", **headers}
    try:
        wanted = byte_range(request.headers.get("range"), size)
        if request.headers.get("if-range", etag) != etag:
            wanted = None
    except BaseException:
        file.close()
        raise
    first, last = wanted or (0, size - 1)
    if wanted:
        told["Content-Range"] = f"bytes {first}-{last}/{size}"
    told["Content-Length"] = str(last - first + 1)
    return StreamingResponse(_pieces(parts, run_id, file, start + first, last - first + 1), 206 if wanted else 200,
                             told, BINARY)


def _pieces(parts: Parts, run_id: str, file: BinaryIO, start: int, left: int) -> Iterator[bytes]:
    with file:
        file.seek(start)
        while left:
            if not parts.keys.exists(run_id):       # collected by somebody else meanwhile
                raise KeyErased("the run's key was erased while its data was being sent")
            piece = file.read(min(left, PIECE_BYTES))
            if not piece:
                raise EOFError("a vault file is shorter than it should be")
            left -= len(piece)
            yield piece
