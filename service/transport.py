"""Requests that survive a bad line: repeating, uploading and downloading with digests, problems as exceptions.

What may be repeated without harm is repeated after a broken connection or a "busy" answer, with growing pauses.
`client.py` says what the requests mean; here stands only how they travel.
"""

from __future__ import annotations

import base64
import hashlib
import ipaddress
import json
import os
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path
from typing import Any, BinaryIO
from urllib.parse import urlsplit

import requests

from extractor.errors import Defect

DEFAULT_URL = "http://127.0.0.1:8383"
CHUNK_BYTES = 1 << 20
ATTEMPTS = 6  # per request, the first included
FIRST_PAUSE_S, LONGEST_PAUSE_S, LONGEST_ASKED_PAUSE_S = 0.25, 8.0, 60
CONNECT_TIMEOUT_S, READ_TIMEOUT_S = 10.0, 120.0
LONGEST_TEXT_BYTES = 64 << 20  # a document (report, certificate, problem) larger than this is not one of ours
BUSY = (408, 429, 502, 503, 504)

Progress = Callable[[int], None]  # called with the number of bytes that have gone by since the last call


class ServiceProblem(Exception):
    """What the service refused, or that it could not be reached (code "unreachable").

    code    stable word, e.g. "not-found"; title, detail  in words; status  HTTP status, 0 if there was no answer
    errors  one dict per bad field: pointer, detail, and file, row, field where they apply
    retry_after_s  seconds the service asks to wait before trying again, None if it says nothing
    """

    def __init__(
        self,
        code: str,
        title: str,
        detail: str = "",
        errors: tuple[dict, ...] = (),
        status: int = 0,
        retry_after_s: int | None = None,
    ) -> None:
        self.code, self.title, self.detail, self.errors, self.status = code, title, detail, errors, status
        self.retry_after_s = retry_after_s
        super().__init__(detail or title)

    def about(self, path: str | Path, sent_as: str) -> ServiceProblem:
        """The same problem, naming the file the caller knows instead of the name it was sent under.

        A problem that is none of the file's (no answer, a token, another address) stays as it is.
        """
        if self.status not in (400, 409, 413, 422):
            return self
        mine = ("", None, sent_as)
        errors = tuple(e | {"file": str(path)} if e.get("file") in mine else e for e in self.errors)
        text = str(self)
        if f"file {sent_as}" in text:
            text = text.replace(f"file {sent_as}", f"file {path}", 1)
        elif str(path) not in text:
            text = f"file {path}{', ' if text.startswith(('row ', 'field ')) else ': '}{text}"
        return ServiceProblem(self.code, self.title, text, errors, self.status, self.retry_after_s)


def sha256_of(path: str | Path, progress: Progress | None = None) -> bytes:
    """SHA-256 of a file, read in pieces."""
    digest = hashlib.sha256()
    with open(path, "rb") as file:
        while piece := file.read(CHUNK_BYTES):
            digest.update(piece)
            if progress:
                progress(len(piece))
    return digest.digest()


def digest_field(digest: bytes) -> str:
    """A SHA-256 as RFC 9530 writes it in Content-Digest."""
    return f"sha-256=:{base64.b64encode(digest).decode()}:"


def _digest_in(headers: Any) -> bytes | None:
    """The SHA-256 of the whole representation an answer promises, if it promises one."""
    for part in (headers.get("Repr-Digest") or "").split(","):
        name, _, value = part.strip().partition("=")
        if name.lower() == "sha-256" and value.startswith(":") and value.endswith(":"):
            return base64.b64decode(value[1:-1])
    return None


class _Bearer(requests.auth.AuthBase):
    """Sets the token; as an auth object because a .netrc entry would silently replace a plain header."""

    def __init__(self, token: str | None) -> None:
        self._token = token

    def __call__(self, request: requests.PreparedRequest) -> requests.PreparedRequest:
        if self._token:
            request.headers["Authorization"] = f"Bearer {self._token}"
        return request


class _Place:
    """How far a transfer has come; reports changes, backward ones too, when an attempt has to begin again."""

    def __init__(self, progress: Progress | None) -> None:
        self._at, self._progress = 0, progress

    def advance(self, size: int) -> None:
        self.move_to(self._at + size)

    def move_to(self, place: int) -> None:
        change, self._at = place - self._at, place
        if change and self._progress:
            self._progress(change)


class _Body:
    """A file as a request body of known length that reports how far it has been read."""

    def __init__(self, file: BinaryIO, place: _Place) -> None:
        self._file, self._place = file, place
        self._size = os.fstat(file.fileno()).st_size

    def __len__(self) -> int:
        return self._size

    def __iter__(self) -> Iterator[bytes]:
        while piece := self._file.read(CHUNK_BYTES):
            self._place.advance(len(piece))
            yield piece


class Transport:
    """One service, one token.

    verify    True, or the path of a CA file (handed to every request: an environment variable cannot override it)
    attempts  tries per request, the first included;  sleep  pauses between them
    Errors raised by every method: ServiceProblem.
    """

    def __init__(
        self, url: str, token: str | None, verify: bool | str, attempts: int, sleep: Callable[[float], None]
    ) -> None:
        parts = urlsplit(url)
        if parts.scheme not in ("http", "https") or not parts.hostname:
            raise ServiceProblem("bad-url", f"{url!r} is not an address such as {DEFAULT_URL}")
        self.url, self._verify, self._attempts, self._sleep = url.rstrip("/"), verify, attempts, sleep
        self._session = requests.Session()
        self._session.auth = _Bearer(token)
        if is_this_machine(parts.hostname):
            self._session.trust_env = False  # a proxy for the outside world cannot reach this machine's services

    def json(self, method: str, path: str, **options: Any) -> dict:
        return self.json_and_status(method, path, **options)[0]

    def json_and_status(self, method: str, path: str, **options: Any) -> tuple[dict, int]:
        with self.send(method, path, **options) as answer:
            try:
                return answer.json(), answer.status_code
            except ValueError:
                raise ServiceProblem(
                    "not-json",
                    f"{self.url} did not answer in JSON: is this a bellassay service?",
                    status=answer.status_code,
                ) from None

    def bytes(self, path: str, headers: dict | None = None) -> bytes:
        with self.send("GET", path, headers=headers or {}) as answer:
            body, promised = answer.content, _digest_in(answer.headers)
        if promised is not None and hashlib.sha256(body).digest() != promised:
            raise ServiceProblem("digest-mismatch", f"{path} arrived damaged: its digest does not match")
        return body

    def send(self, method: str, path: str, *, repeat: bool = True, **options: Any) -> requests.Response:
        """One request, repeated while it is harmless and may help."""
        for attempt in range(1, self._attempts + 1):
            last = attempt == self._attempts or not repeat
            try:
                answer = self._session.request(
                    method,
                    self.url + path,
                    timeout=(CONNECT_TIMEOUT_S, READ_TIMEOUT_S),
                    verify=self._verify,
                    allow_redirects=False,
                    **options,
                )
            except requests.RequestException as fault:
                if last or isinstance(fault, (requests.exceptions.SSLError, requests.exceptions.InvalidHeader)):
                    raise unreachable(self.url, fault) from None
                self._pause(attempt, None)
                continue
            if answer.status_code < 300:
                return answer
            with answer:
                problem = _problem_of(answer)
                if last or answer.status_code not in BUSY:
                    raise problem
                self._pause(attempt, problem.retry_after_s)
        raise Defect("a request needs at least one attempt")

    def _pause(self, attempt: int, asked_s: int | None) -> None:
        pause_s = min(FIRST_PAUSE_S * 2 ** (attempt - 1), LONGEST_PAUSE_S)
        self._sleep(max(pause_s, min(asked_s or 0, LONGEST_ASKED_PAUSE_S)))

    def upload(
        self,
        target: str,
        path: str | Path,
        digest: bytes,
        progress: Progress | None,
        arrived: Callable[[], dict | None],
        query: dict,
    ) -> dict:
        """PUT a file with its digest. `arrived` asks the service, before each further attempt, whether it is there."""
        headers = {"Content-Digest": digest_field(digest), "Content-Type": "application/octet-stream"}
        place = _Place(progress)
        for attempt in range(1, self._attempts + 1):
            with open(path, "rb") as file:
                body = _Body(file, place)
                try:
                    answer = self.json(
                        "PUT", target, params=query, repeat=False, headers=headers, data=body if len(body) else b""
                    )
                    place.move_to(len(body))
                    return answer
                except ServiceProblem as problem:
                    # A service that refuses before it has read the body closes the line: asking what arrived tells why.
                    if (problem.code != "unreachable" and problem.status not in BUSY) or attempt == self._attempts:
                        raise
                    self._pause(attempt, problem.retry_after_s)
            if found := arrived():
                place.move_to(os.path.getsize(path))
                return found
            place.move_to(0)
        raise Defect("an upload needs at least one attempt")

    def download(
        self, target: str, path: str | Path, progress: Progress | None, secret: bool = False
    ) -> tuple[bytes, Any]:
        """GET into path + ".part", resumed by Range, renamed when whole; (SHA-256, headers)."""
        path, place = Path(path), _Place(progress)
        part = path.with_name(path.name + ".part")
        for attempt in range(1, self._attempts + 1):
            have = part.stat().st_size if part.exists() else 0
            try:
                headers, resumed = self._fetch(target, part, have, place, secret)
            except ServiceProblem as problem:
                if problem.status == 416 and have:
                    part.unlink()  # what lies here is longer than what the service has: begin again
                elif problem.code != "unreachable" or attempt == self._attempts:
                    raise
                self._pause(attempt, problem.retry_after_s)
                continue
            digest, promised = sha256_of(part), _digest_in(headers)
            if promised is None or digest == promised:
                os.replace(part, path)
                return digest, headers
            part.unlink()
            if not resumed:
                break
        raise ServiceProblem("digest-mismatch", f"{target} arrived damaged: its digest does not match")

    def _fetch(self, target: str, part: Path, have: int, place: _Place, secret: bool) -> tuple[Any, bool]:
        headers = {"Accept-Encoding": "identity"} | ({"Range": f"bytes={have}-"} if have else {})
        with self.send("GET", target, headers=headers, stream=True) as answer:
            resumed = answer.status_code == 206
            flags = os.O_WRONLY | os.O_CREAT | (os.O_APPEND if resumed else os.O_TRUNC)
            place.move_to(have if resumed else 0)
            with os.fdopen(os.open(part, flags, 0o600 if secret else 0o666), "ab" if resumed else "wb") as file:
                try:
                    for piece in answer.iter_content(CHUNK_BYTES):
                        file.write(piece)
                        place.advance(len(piece))
                except requests.RequestException as fault:
                    raise unreachable(self.url, fault) from None
                file.flush()
                os.fsync(file.fileno())
            return answer.headers, resumed


def is_this_machine(host: str) -> bool:
    """Whether a host name means this machine itself."""
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host == "localhost"


def unreachable(url: str, fault: Exception) -> ServiceProblem:
    if isinstance(fault, requests.exceptions.SSLError):
        why = f"its certificate is not trusted: {fault}"
    elif isinstance(fault, requests.exceptions.ConnectTimeout):
        why = f"no answer within {CONNECT_TIMEOUT_S:g} s"
    elif isinstance(fault, requests.exceptions.ReadTimeout):
        why = f"it has been silent for {READ_TIMEOUT_S:g} s"
    elif "refused" in str(fault):
        why = "nothing listens there; start it with: bellassay serve"
    elif isinstance(fault, requests.exceptions.ConnectionError) and "resolve" in str(fault).lower():
        why = "this name is not known here"
    else:
        why = "the connection broke"
    return ServiceProblem("unreachable", f"{url} could not be reached", f"{url} could not be reached: {why}")


def _problem_of(answer: requests.Response) -> ServiceProblem:
    """The problem document of an answer, or the best that can be said without one."""
    asked = answer.headers.get("Retry-After", "")
    retry_after_s = int(asked) if asked.isdigit() and len(asked) < 9 else None
    body: Any = None
    if "json" in answer.headers.get("Content-Type", "") and len(answer.content) <= LONGEST_TEXT_BYTES:
        try:
            body = answer.json()
        except ValueError:
            body = None
    if not isinstance(body, dict):
        return ServiceProblem(
            "unexpected-answer",
            f"{answer.url} answered {answer.status_code} {answer.reason}",
            status=answer.status_code,
            retry_after_s=retry_after_s,
        )
    errors = tuple(e for e in body.get("errors") or () if isinstance(e, dict))
    title = str(body.get("title") or answer.reason)
    return ServiceProblem(
        str(body.get("code") or "problem"),
        title,
        str(body.get("detail") or ""),
        errors,
        answer.status_code,
        retry_after_s,
    )


def parse_events(pieces: Iterable[bytes]) -> Iterator[tuple[str | None, dict]]:
    """(id, data) of each `run` event in a text/event-stream that arrives in pieces of any size."""
    event_id, name, data = None, "message", []
    for line in _lines(pieces):
        if line:
            field, _, value = line.decode("utf-8", "replace").partition(":")
            value = value.removeprefix(" ")
            if field == "id":
                event_id = value
            elif field == "event":
                name = value
            elif field == "data":
                data.append(value)
            continue
        if data and name == "run":
            yield event_id, json.loads("\n".join(data))
        name, data = "message", []


def _lines(pieces: Iterable[bytes]) -> Iterator[bytes]:
    """Whole lines without their ends (LF or CRLF); a last line without an end is an unfinished event and dropped."""
    rest = b""
    for piece in pieces:
        *lines, rest = (rest + piece).split(b"\n")
        yield from (line.removesuffix(b"\r") for line in lines)
