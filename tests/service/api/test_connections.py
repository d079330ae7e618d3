"""Connections that dawdle, or say too much, are closed; ambiguous requests are refused."""

from __future__ import annotations

import socket
from urllib.parse import urlsplit

import pytest

from service.connections import HEAD_BYTES, Connection
from tests.service.harness import Caller, Service, digest_header, npz


def dial(service: Service, data: bytes = b"") -> socket.socket:
    parts = urlsplit(service.url)
    line = socket.create_connection((parts.hostname, parts.port), timeout=20)
    line.sendall(data)
    return line


def rest(line: socket.socket) -> bytes:
    """Everything until the other side closes."""
    text = b""
    try:
        while piece := line.recv(65536):
            text += piece
    except ConnectionResetError:
        pass
    return text


@pytest.mark.parametrize("begun", [b"", b"GET /livez HT", b"GET /livez HTTP/1.1\r\nHost: fog\r\nX-Slow: "])
def test_a_head_that_does_not_come_ends_the_connection(service: Service, monkeypatch, begun: bytes) -> None:
    """A connection that sends nothing, or only the beginning of a request, is closed after a while."""
    monkeypatch.setattr(Connection, "head_timeout_s", 0.2)
    assert rest(dial(service, begun)) == b""


def test_a_trickling_head_ends_too(service: Service, monkeypatch) -> None:
    """The time for the head is one for all its pieces, not one for each."""
    monkeypatch.setattr(Connection, "head_timeout_s", 0.4)
    line = dial(service, b"GET /livez HTTP/1.1\r\n")
    line.settimeout(0.05)
    with pytest.raises((BrokenPipeError, ConnectionResetError)):
        for _ in range(400):
            line.sendall(b"X: y\r\n")
            try:
                if not line.recv(100):
                    raise ConnectionResetError
            except TimeoutError:
                continue


def test_an_endless_head_is_refused(service: Service) -> None:
    """More than the allowed bytes of head are never gathered."""
    line = dial(service, b"GET /livez HTTP/1.1\r\nHost: fog\r\n")
    try:
        line.sendall(b"X-Long: " + b"a" * (4 * HEAD_BYTES))
        line.sendall(b"a" * HEAD_BYTES)
    except (BrokenPipeError, ConnectionResetError):
        pass
    text = rest(line)
    assert text == b"" or text.startswith(b"HTTP/1.1 400")


def test_the_rest_of_an_unwanted_body_must_come(service: Service, monkeypatch) -> None:
    """A body that was answered before its end is read and dropped, but not waited for for ever."""
    monkeypatch.setattr(Connection, "rest_timeout_s", 0.2)
    line = dial(service, b"PUT /v1/runs/r0/segments/1 HTTP/1.1\r\nHost: fog\r\nContent-Length: 1000\r\n\r\n" + b"x" * 10)
    text = rest(line)
    assert text.startswith(b"HTTP/1.1 401")


def test_an_early_answer_keeps_the_connection(service: Service) -> None:
    """When the rest of the body does come, the next request on the same connection is served."""
    line = dial(service, b"PUT /v1/runs/r0/segments/1 HTTP/1.1\r\nHost: fog\r\nContent-Length: 20\r\n\r\n" + b"x" * 10)
    assert line.recv(65536).startswith(b"HTTP/1.1 401")
    line.sendall(b"x" * 10 + b"GET /livez HTTP/1.1\r\nHost: fog\r\nConnection: close\r\n\r\n")
    assert b"HTTP/1.1 200" in rest(line)


@pytest.mark.parametrize("head", [
    b"Content-Length: 5\r\nTransfer-Encoding: chunked", b"Content-Length: 5\r\nContent-Length: 6", b"Content-Length: +5",
    b"Content-Length: -1", b"Transfer-Encoding: xchunked", b"Bad Name: 1", b"Transfer-Encoding: chunked, identity"])
def test_ambiguous_requests_are_refused(service: Service, north: Caller, head: bytes) -> None:
    """What a proxy could read in another way than this service never becomes an upload."""
    run = north.open_run()
    line = dial(service, f"PUT /v1/runs/{run}/segments/1 HTTP/1.1\r\nHost: fog\r\nAuthorization: Bearer {north.token}\r\n"
                         f"Content-Digest: {digest_header(npz())}\r\n".encode() + head + b"\r\n\r\n0\r\n\r\n")
    line.shutdown(socket.SHUT_WR)
    assert b" 201 " not in rest(line) and b" 200 " not in rest(line)
    assert north.get(f"/v1/runs/{run}/segments").json()["segments"] == []
