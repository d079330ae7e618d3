"""A real service for tests: parts in a folder, an HTTP server on a free port, tokens, small runs of a simulated rig."""

from __future__ import annotations

import base64
import functools
import hashlib
import io
import threading
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import requests

from extractor import pipeline
from extractor.bell.rigs import Rig, simulate
from extractor.documents import declaration_document
from extractor.model import RoundBatch
from extractor.records.planes import rebatch
from extractor.records.writers import write_csv, write_npz
from service.app import create_app, open_parts
from service.clock import now_text
from service.custody.tokens import new_token
from service.jobs.worker import Worker
from service.parts import Parts
from service.settings import ServiceSettings
from service.supervisor import bind, make_server

ROUNDS = 20_000
ALL_SCOPES = ("submit", "collect", "audit")


def settings(folder: Path, **changed: Any) -> ServiceSettings:
    """Settings for tests: no room demanded, short waits, no workers."""
    values = dict(data=folder / "data", port=0, free_disk_bytes=0, poll_s=0.05, event_poll_s=0.02, workers=0,
                  retry_wait_s=0.0,
                  hash_threads=1)
    return ServiceSettings(**{**values, **changed})


def make_token(parts: Parts, owner: str = "north", scopes: Sequence[str] = ALL_SCOPES,
               expires_s: float | None = None) -> str:
    with parts.store.write() as transaction:
        return new_token(transaction, owner=owner, scopes=scopes, label="", time=now_text(), expires_s=expires_s)[0]


@functools.cache
def _document(**changed: Any) -> dict[str, Any]:
    values = dict(rig="north table", rounds=ROUNDS, method="factor-closed", soundness=1e-3, score=0.85)
    return declaration_document(pipeline.declare(**{**values, **changed}))


def document(**changed: Any) -> dict[str, Any]:
    """A small declaration that gives bits."""
    return dict(_document(**changed))


@functools.cache
def rounds(count: int = ROUNDS, seed: int = 7, visibility: float = 1.0) -> tuple[RoundBatch, ...]:
    return tuple(simulate(Rig(visibility=visibility), count, seed))


@functools.cache
def npz(count: int = ROUNDS, seed: int = 7, visibility: float = 1.0) -> bytes:
    """A round file."""
    return _written(write_npz, rounds(count, seed, visibility))


@functools.cache
def split_npz(sizes: int, count: int = ROUNDS, seed: int = 7) -> tuple[bytes, ...]:
    """The same rounds in several files of `sizes` rounds."""
    return tuple(_written(write_npz, [batch]) for batch in rebatch(rounds(count, seed), sizes))


def csv(count: int, seed: int, first_round: int) -> bytes:
    """A round file with round numbers."""
    return _written(write_csv, rounds(count, seed), first_round=first_round)


def _written(writer: Any, batches: Sequence[RoundBatch], **options: Any) -> bytes:
    file = io.BytesIO()
    writer(file, batches, **options)
    return file.getvalue()


def digest_header(data: bytes) -> str:
    return f"sha-256=:{base64.b64encode(hashlib.sha256(data).digest()).decode()}:"


class Caller:
    """Requests with one token."""

    def __init__(self, url: str, token: str | None) -> None:
        self.url, self.token = url, token
        self._session = requests.Session()
        self._session.trust_env = False

    def __call__(self, method: str, path: str, **options: Any) -> requests.Response:
        headers = {"Authorization": f"Bearer {self.token}"} if self.token else {}
        headers |= options.pop("headers", {})
        return self._session.request(method, self.url + path, headers=headers, timeout=30, **options)

    def get(self, path: str, **options: Any) -> requests.Response:
        return self("GET", path, **options)

    def post(self, path: str, body: Any, **options: Any) -> requests.Response:
        return self("POST", path, json=body, **options)

    def put(self, path: str, data: bytes, *, digest: str | None = None, **options: Any) -> requests.Response:
        headers = {"Content-Digest": digest or digest_header(data)} | options.pop("headers", {})
        return self("PUT", path, data=data, headers=headers, **options)

    def declare(self, body: dict[str, Any] | None = None) -> dict[str, Any]:
        answer = self.post("/v1/declarations", body or document())
        assert answer.status_code == 201, answer.text
        return answer.json()

    def open_run(self, body: dict[str, Any] | None = None) -> str:
        """A declaration and a run under it; the run's id."""
        answer = self.post("/v1/runs", {"declaration": self.declare(body)["id"]})
        assert answer.status_code == 201, answer.text
        return answer.json()["id"]

    def sealed_run(self, body: dict[str, Any] | None = None, files: Sequence[bytes] | None = None) -> str:
        """A run with all its rounds, sealed."""
        run = self.open_run(body)
        total = 0
        for number, data in enumerate(files or [npz()], 1):
            answer = self.put(f"/v1/runs/{run}/segments/{number}", data)
            assert answer.status_code == 201, answer.text
            total += answer.json()["rounds"]
        answer = self.post(f"/v1/runs/{run}/seal", {"segments": len(files or [0]), "rounds": total})
        assert answer.status_code == 202, answer.text
        return run


class Service:
    """An HTTP server in a thread of this process; workers run when a test calls `work`."""

    def __init__(self, folder: Path, **changed: Any) -> None:
        self.settings = settings(folder, **changed)
        self.app = create_app(self.settings)
        self.parts: Parts = self.app.state.parts
        self._socket = bind("127.0.0.1", 0)
        self.url = f"http://127.0.0.1:{self._socket.getsockname()[1]}"
        self._server = make_server(self.app, self.settings)
        self._thread = threading.Thread(target=self._server.run, kwargs={"sockets": [self._socket]}, daemon=True)
        self._thread.start()
        while not self._server.started:
            time.sleep(0.005)

    def caller(self, owner: str = "north", scopes: Sequence[str] = ALL_SCOPES) -> Caller:
        return Caller(self.url, make_token(self.parts, owner, scopes))

    def work(self) -> int:
        """Works on everything that can be worked on."""
        return Worker(self.parts).run(once=True)

    def state(self, run: str) -> str:
        with self.parts.store.read() as reading:
            return reading.get_run(run).state

    def close(self) -> None:
        self.app.state.stopping.set()
        self._server.should_exit = True
        self._thread.join(20)
        self._socket.close()


def opened(folder: Path, **changed: Any) -> Parts:
    """The parts alone, as a worker opens them."""
    return open_parts(settings(folder, **changed))


def problem(answer: requests.Response, status: int, code: str) -> dict[str, Any]:
    """The problem document of an answer, which must have this status and code."""
    assert (answer.status_code, answer.json().get("code")) == (status, code), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    body = answer.json()
    assert body["status"] == status and body["type"] and body["title"] and isinstance(body["errors"], list)
    return body
