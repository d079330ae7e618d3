"""The client on a bad line: a scripted server misbehaves in ways a healthy service never would."""

from __future__ import annotations

import base64
import hashlib
import json
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from urllib.parse import urlsplit

import pytest

from service.client import Client, ServiceProblem
from service.transport import digest_field, parse_events

BITS = bytes(range(256)) * 10_000  # more than two pieces of a download
CUT = 2_500_000


class Request:
    """One request as the script sees it, and how it may answer."""

    def __init__(self, handler: BaseHTTPRequestHandler) -> None:
        self._handler = handler
        self.method, self.target = handler.command, handler.path
        self.path, self.headers = urlsplit(handler.path).path, handler.headers
        self.length = int(handler.headers.get("Content-Length") or 0)

    def body(self, size: int | None = None) -> bytes:
        return self._handler.rfile.read(self.length if size is None else size)

    def answer(self, status: int, body: bytes, promised_length: int | None = None, **headers: str) -> None:
        self._handler.send_response(status)
        self._handler.send_header("Content-Length", str(promised_length or len(body)))
        for name, value in headers.items():
            self._handler.send_header(name.replace("_", "-"), value)
        self._handler.end_headers()
        self._handler.wfile.write(body)
        if promised_length:
            self.hang_up()

    def json(self, status: int, document: object, kind: str = "application/json", **headers: str) -> None:
        self.answer(status, json.dumps(document).encode(), Content_Type=kind, **headers)

    def hang_up(self) -> None:
        self._handler.close_connection = True
        self._handler.wfile.flush()
        self._handler.connection.shutdown(2)


@contextmanager
def scripted(*steps: Callable[[Request], None]) -> Iterator[tuple[str, list[Request]]]:
    """A server that treats the k-th request with the k-th step; yields its address and the requests seen."""
    seen: list[Request] = []

    class Handler(BaseHTTPRequestHandler):
        def handle_any(self) -> None:
            request = Request(self)
            seen.append(request)
            self.close_connection = True
            if len(seen) > len(steps):
                request.json(500, {"code": "script-over", "title": "the script has no answer to this"})
                return
            steps[len(seen) - 1](request)

        do_GET = do_PUT = do_POST = handle_any

        def log_message(self, *_: object) -> None:
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01}, daemon=True)
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.server_address[1]}", seen
    finally:
        server.shutdown()
        thread.join()
        server.server_close()


def client_at(url: str, pauses: list[float] | None = None, attempts: int = 6) -> Client:
    return Client(url, "token", attempts=attempts, sleep=(pauses if pauses is not None else []).append)


def busy(request: Request) -> None:
    request.json(503, {"code": "busy", "title": "busy"}, Retry_After="3")


def whole_bits(request: Request) -> None:
    request.answer(200, BITS, Repr_Digest=digest_field(hashlib.sha256(BITS).digest()), Bits_Salt="ab" * 32)


def rest_of_bits(request: Request) -> None:
    first = int(request.headers["Range"].removeprefix("bytes=").removesuffix("-"))
    request.answer(206, BITS[first:], Repr_Digest=digest_field(hashlib.sha256(BITS).digest()), Bits_Salt="ab" * 32)


def cut_bits(request: Request) -> None:
    request.answer(200, BITS[:CUT], promised_length=len(BITS))


def test_a_busy_service_is_asked_again_after_the_pause_it_wants() -> None:
    """503 with Retry-After: 3 is repeated after at least three seconds and then succeeds."""
    pauses: list[float] = []
    with scripted(busy, busy, lambda r: r.json(200, {"id": "r1"})) as (url, seen):
        assert client_at(url, pauses).run("r1") == {"id": "r1"}
    assert len(seen) == 3 and pauses == [3, 3]


def test_a_broken_connection_is_repeated_with_growing_pauses() -> None:
    """A connection that closes without an answer is tried again, each time after a longer pause."""
    pauses: list[float] = []
    with scripted(*[Request.hang_up] * 3, lambda r: r.json(200, {"id": "r1"})) as (url, _):
        assert client_at(url, pauses).run("r1") == {"id": "r1"}
    assert pauses == [0.25, 0.5, 1.0]


def test_collecting_is_never_repeated() -> None:
    """A confirmation may have arrived although its answer was lost; a second one would look like somebody else's."""
    with scripted(Request.hang_up) as (url, seen), pytest.raises(ServiceProblem) as caught:
        client_at(url).collect("r1", bytes(32))
    assert caught.value.code == "unreachable" and len(seen) == 1


def test_a_problem_document_arrives_with_all_its_parts() -> None:
    """Code, title, detail and the errors of a problem document are on the exception; a 4xx is not repeated."""
    errors = [{"pointer": "/rounds", "detail": "is missing"}]
    with (
        scripted(
            lambda r: r.json(
                422,
                {"code": "bad-document", "title": "Bad", "detail": "Look at rounds", "errors": errors},
                "application/problem+json",
            )
        ) as (url, seen),
        pytest.raises(ServiceProblem) as caught,
    ):
        client_at(url).declare({})
    problem = caught.value
    assert (problem.code, problem.title, problem.detail, problem.status) == (
        "bad-document",
        "Bad",
        "Look at rounds",
        422,
    )
    assert list(problem.errors) == errors and len(seen) == 1


def test_a_web_page_instead_of_json_is_told_as_such() -> None:
    """Pointing the client at some other web server gives a sentence, not a decoding error."""
    with scripted(lambda r: r.answer(200, b"<html>")) as (url, _), pytest.raises(ServiceProblem) as caught:
        client_at(url).run("r1")
    assert caught.value.code == "not-json"


def test_nothing_listening_is_told_with_the_address() -> None:
    """A refused connection names the address and what to do."""
    with scripted() as (url, _):
        pass
    with pytest.raises(ServiceProblem) as caught:
        client_at(url, attempts=2).run("r1")
    assert caught.value.code == "unreachable" and url in str(caught.value) and "bellassay serve" in str(caught.value)


@pytest.mark.parametrize("url", ["127.0.0.1:8383", "ftp://there", "http://", ""])
def test_an_address_that_is_none_is_refused_at_once(url: str) -> None:
    """Only http and https addresses with a host are accepted."""
    with pytest.raises(ServiceProblem) as caught:
        Client(url, "token")
    assert caught.value.code == "bad-url"


def test_a_segment_is_sent_with_its_digest_name_and_token(tmp_path: Path) -> None:
    """The upload carries Content-Digest, the file's name, the bearer token and exactly the file's bytes."""
    file, got = tmp_path / "röunds 1.npz", []
    file.write_bytes(BITS)

    def take(request: Request) -> None:
        got.append(request.body())
        request.json(201, {"segment": 1})

    progress: list[int] = []
    with scripted(take) as (url, seen):
        assert client_at(url).put_segment("r 1", 1, file, progress.append) == {"segment": 1}
    assert got == [BITS] and sum(progress) == len(BITS)
    assert seen[0].target == "/v1/runs/r%201/segments/1?name=r%C3%B6unds+1.npz"
    assert seen[0].headers["Content-Digest"] == f"sha-256=:{base64.b64encode(hashlib.sha256(BITS).digest()).decode()}:"
    assert seen[0].headers["Authorization"] == "Bearer token" and int(seen[0].headers["Content-Length"]) == len(BITS)


def test_an_upload_that_broke_is_not_sent_again_if_it_has_arrived(tmp_path: Path) -> None:
    """When the answer to an upload is lost, the client asks what has arrived before sending anything again."""
    file = tmp_path / "rounds.npz"
    file.write_bytes(BITS)
    there = {"segment": 1, "digest": "sha256:" + hashlib.sha256(BITS).hexdigest(), "rounds": 5}

    def lose(request: Request) -> None:
        request.body()
        request.hang_up()

    progress: list[int] = []
    with scripted(lose, lambda r: r.json(200, {"segments": [there], "rounds": 5})) as (url, seen):
        assert client_at(url).put_segment("r1", 1, file, progress.append) == there
    assert [request.method for request in seen] == ["PUT", "GET"] and sum(progress) == len(BITS)


def test_an_upload_that_broke_is_sent_again_if_it_is_missing(tmp_path: Path) -> None:
    """An upload cut in the middle starts again, and the progress goes back to nothing in between."""
    file = tmp_path / "rounds.npz"
    file.write_bytes(BITS)

    def cut(request: Request) -> None:
        request.body(100)
        request.hang_up()

    progress: list[int] = []
    with scripted(
        cut, lambda r: r.json(200, {"segments": [], "rounds": 0}), lambda r: (r.body(), r.json(201, {"segment": 1}))
    ) as (url, seen):
        assert client_at(url).put_segment("r1", 1, file, progress.append) == {"segment": 1}
    assert [request.method for request in seen] == ["PUT", "GET", "PUT"]
    assert sum(progress) == len(BITS) and min(progress) < 0


def test_an_upload_refused_before_its_body_is_read_tells_why(tmp_path: Path) -> None:
    """If the line closes during the upload because the token is wrong, the user hears about the token."""
    file = tmp_path / "rounds.npz"
    file.write_bytes(BITS)
    with (
        scripted(Request.hang_up, lambda r: r.json(401, {"code": "unauthorized", "title": "no valid token"})) as (
            url,
            _,
        ),
        pytest.raises(ServiceProblem) as caught,
    ):
        client_at(url).put_segment("r1", 1, file)
    assert caught.value.code == "unauthorized"


def test_an_empty_file_is_sent_as_an_empty_body(tmp_path: Path) -> None:
    """An empty round file is for the service to refuse; the client sends it as it is."""
    file = tmp_path / "rounds.npz"
    file.write_bytes(b"")
    with (
        scripted(lambda r: r.json(422, {"code": "empty-file", "title": "empty"})) as (url, seen),
        pytest.raises(ServiceProblem) as caught,
    ):
        client_at(url).put_segment("r1", 1, file)
    assert caught.value.code == "empty-file" and seen[0].headers["Content-Length"] == "0"


def test_a_download_goes_on_where_it_stopped(tmp_path: Path) -> None:
    """After a cut download only the missing bytes are asked for, and the whole has the promised digest."""
    progress: list[int] = []
    with scripted(cut_bits, rest_of_bits) as (url, seen):
        digest, salt = client_at(url).get_bits("r1", tmp_path / "bits.bin", progress.append)
    have = int(seen[1].headers["Range"].removeprefix("bytes=").removesuffix("-"))
    assert (tmp_path / "bits.bin").read_bytes() == BITS and digest == hashlib.sha256(BITS).digest()
    assert salt == "ab" * 32 and seen[0].headers["Range"] is None and 0 < have <= CUT
    assert sum(progress) == len(BITS) and not (tmp_path / "bits.bin.part").exists()


def test_a_download_left_by_an_earlier_call_is_continued(tmp_path: Path) -> None:
    """A .part file left by an interrupted command is not fetched again."""
    (tmp_path / "bits.bin.part").write_bytes(BITS[:5000])
    with scripted(rest_of_bits) as (url, seen):
        client_at(url).get_bits("r1", tmp_path / "bits.bin")
    assert seen[0].headers["Range"] == "bytes=5000-" and (tmp_path / "bits.bin").read_bytes() == BITS


@pytest.mark.parametrize("wrong", [b"x" * 5000, b"x" * (len(BITS) + 1)])
def test_a_wrong_beginning_is_thrown_away_and_all_is_fetched_anew(wrong: bytes, tmp_path: Path) -> None:
    """A .part file of something else, shorter or longer than the bits, cannot spoil the download."""
    (tmp_path / "bits.bin.part").write_bytes(wrong)
    first = rest_of_bits if len(wrong) < len(BITS) else (lambda r: r.json(416, {"code": "range", "title": "range"}))
    with scripted(first, whole_bits) as (url, _):
        client_at(url).get_bits("r1", tmp_path / "bits.bin")
    assert (tmp_path / "bits.bin").read_bytes() == BITS


def test_a_damaged_download_is_refused(tmp_path: Path) -> None:
    """A whole download whose digest does not match is an error and leaves no file behind."""
    with (
        scripted(lambda r: r.answer(200, BITS, Repr_Digest=digest_field(bytes(32)))) as (url, _),
        pytest.raises(ServiceProblem) as caught,
    ):
        client_at(url).get_bits("r1", tmp_path / "bits.bin")
    assert caught.value.code == "digest-mismatch" and not list(tmp_path.iterdir())


def test_the_bits_are_readable_by_their_owner_only(tmp_path: Path) -> None:
    """Downloaded bits are secret: the file gets mode 600."""
    with scripted(whole_bits) as (url, _):
        client_at(url).get_bits("r1", tmp_path / "bits.bin")
    assert (tmp_path / "bits.bin").stat().st_mode & 0o777 == 0o600


def event(number: int, state: str) -> bytes:
    return f"id: {number}\nevent: run\ndata: {json.dumps({'state': state})}\n\n".encode()


def test_watching_goes_on_after_the_last_event_seen() -> None:
    """A stream that breaks is taken up again with Last-Event-ID, until a final state arrives."""

    def stream(*events: bytes) -> Callable[[Request], None]:
        return lambda r: r.answer(200, b"".join(events), Content_Type="text/event-stream")

    with scripted(stream(event(1, "sealed"), event(2, "working")), stream(event(3, "certified"))) as (url, seen):
        states = [run["state"] for run in client_at(url).watch("r1")]
    assert states == ["sealed", "working", "certified"] and seen[1].headers["Last-Event-ID"] == "2"


def test_watching_falls_back_to_asking_where_events_do_not_pass() -> None:
    """Behind a proxy that refuses event streams the run is polled instead."""
    refuse = lambda r: r.json(406, {"code": "no-events", "title": "no"})
    with scripted(
        refuse, refuse, lambda r: r.json(200, {"state": "working"}), lambda r: r.json(200, {"state": "refused"})
    ) as (url, _):
        assert [run["state"] for run in client_at(url).watch("r1")] == ["working", "refused"]


def test_watching_an_unknown_run_says_so_at_once() -> None:
    """404 is not a reason to poll."""
    with (
        scripted(lambda r: r.json(404, {"code": "not-found", "title": "no such run"})) as (url, _),
        pytest.raises(ServiceProblem) as caught,
    ):
        list(client_at(url).watch("r1"))
    assert caught.value.code == "not-found"


@pytest.mark.parametrize("size", [1, 2, 7, 1000])
@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_events_are_read_however_they_are_cut(size: int, end: str) -> None:
    """Pieces may end anywhere, lines may end in LF or CRLF; comments, other and cut events are dropped."""
    text = (
        ': hello\n\nid: 7\nevent: run\ndata: {"state":\ndata: "ä"}\n\nevent: other\ndata: 1\n\nevent: run\ndata: {"sta'
    )
    data = text.replace("\n", end).encode()
    pieces = [data[i : i + size] for i in range(0, len(data), size)]
    assert list(parse_events(pieces)) == [("7", {"state": "ä"})]
