"""The HTTP connection with the time-outs and limits that the server library leaves to a proxy.

A connection must have sent the head of a request HEAD_TIMEOUT_S after it was opened or has begun one, in at most
HEAD_BYTES; the rest of a body that was answered early must come within REST_TIMEOUT_S. Otherwise it is closed. The
pace of bodies that are read is watched where they are read (`api.bodies`); idle connections by the library itself.
"""

from __future__ import annotations

import asyncio

from uvicorn.protocols.http.httptools_impl import HttpToolsProtocol

HEAD_TIMEOUT_S = 20.0
HEAD_BYTES = 64 * 1024
REST_TIMEOUT_S = 60.0


class Connection(HttpToolsProtocol):
    """One connection. Built on the library's httptools protocol, whose parser refuses ambiguous lengths."""

    head_timeout_s, rest_timeout_s = HEAD_TIMEOUT_S, REST_TIMEOUT_S
    _deadline: asyncio.TimerHandle | None = None
    _head_bytes: int | None = 0                 # of the head being received; None outside a head

    def connection_made(self, transport: asyncio.Transport) -> None:    # type: ignore[override]
        super().connection_made(transport)
        self._close_after(self.head_timeout_s)

    def connection_lost(self, exc: Exception | None) -> None:
        self._close_after(None)
        super().connection_lost(exc)

    def data_received(self, data: bytes) -> None:
        before = self._head_bytes
        super().data_received(data)
        if before is not None and self._head_bytes is not None and not self.transport.is_closing():
            self._head_bytes += len(data)
            if self._head_bytes > HEAD_BYTES:
                self.send_400_response("The head of the request is too long.")

    def on_message_begin(self) -> None:
        super().on_message_begin()
        self._head_bytes = 0
        self._close_after(self.head_timeout_s)

    def on_headers_complete(self) -> None:
        self._head_bytes = None
        self._close_after(None)
        super().on_headers_complete()

    def on_message_complete(self) -> None:
        if self.cycle is not None and self.cycle.response_complete:
            self._close_after(None)
            self.cycle.more_body = False
        super().on_message_complete()

    def on_response_complete(self) -> None:
        super().on_response_complete()
        if self.cycle is not None and self.cycle.more_body and not self.transport.is_closing():
            self._close_after(self.rest_timeout_s)

    def _close_after(self, seconds: float | None) -> None:
        if self._deadline is not None:
            self._deadline.cancel()
        self._deadline = None if seconds is None else self.loop.call_later(seconds, self._close)

    def _close(self) -> None:
        if not self.transport.is_closing():
            self.transport.close()
