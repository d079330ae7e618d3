"""Talks to a bellassay service: every request of its interface as one method of `Client`.

    client = Client("http://127.0.0.1:8383", token)
    declared = client.declare(document)
    run = client.open_run(declared["id"])
    client.put_segment(run["id"], 1, "rounds-0001.npz")
    client.seal(run["id"], segments=1, rounds=1_000_000)
    for state in client.watch(run["id"]): print(state["stage"], state["fraction"])

Requests that may be repeated without harm are repeated after a broken connection or a "busy" answer, with growing
pauses. Digests are sent with every upload and checked on every download that carries one. Everything the service
refuses arrives as `ServiceProblem` with its stable code.
"""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from urllib.parse import quote

import requests

from service.transport import (
    ATTEMPTS,
    DEFAULT_URL,
    FIRST_PAUSE_S,
    Progress,
    ServiceProblem,
    Transport,
    parse_events,
    sha256_of,
    unreachable,
)

__all__ = ["Client", "DEFAULT_URL", "FINAL_STATES", "Progress", "ServiceProblem", "sha256_of"]

POLL_INTERVAL_S = 1.0
FINAL_STATES = ("certified", "refused", "failed", "collected", "erased")


class Client:
    """One service, one token.

    url      base address, e.g. http://127.0.0.1:8383;  token  from `bellassay token create`
    verify   True, or the path of a CA file (handed to every request: an environment variable cannot override it)
    sleep    pauses between attempts; an argument so that tests need not wait
    Errors raised by every method: ServiceProblem.
    """

    def __init__(
        self,
        url: str = DEFAULT_URL,
        token: str | None = None,
        *,
        verify: bool | str = True,
        attempts: int = ATTEMPTS,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        self._line, self._sleep = Transport(url, token, verify, attempts, sleep), sleep

    # ---- declarations, runs, planning

    def declare(self, document: dict) -> dict:
        """Record a declaration: {"id", "digest", "time", "ledger_index", "declaration"}."""
        return self.record(document)[0]

    def record(self, document: dict) -> tuple[dict, bool]:
        """As `declare`, and whether this call made the record (True) or an earlier one was found (False)."""
        recorded, status = self._line.json_and_status(
            "POST", "/v1/declarations", json=document, headers={"Idempotency-Key": str(uuid.uuid4())}
        )
        return recorded, status == 201

    def declaration(self, declaration: str) -> dict:
        return self._line.json("GET", f"/v1/declarations/{quote(declaration, safe='')}")

    def open_run(self, declaration: str, idempotency_key: str | None = None) -> dict:
        """Open a run under a declaration id. With the same key again, the same run comes back."""
        key = idempotency_key or str(uuid.uuid4())
        return self._line.json("POST", "/v1/runs", json={"declaration": declaration}, headers={"Idempotency-Key": key})

    def run(self, run: str) -> dict:
        return self._line.json("GET", self._path(run))

    def plan(self, **body: Any) -> dict:
        """{"plans": [...]}; body as in POST /v1/plan: rounds, score or calibration, settings, soundness, ..."""
        return self._line.json("POST", "/v1/plan", json=body)

    # ---- segments, seal, seed

    def segments(self, run: str) -> dict:
        """What has arrived: {"segments": [...], "rounds": N}."""
        return self._line.json("GET", self._path(run, "segments"))

    def put_segment(
        self, run: str, k: int, path: str | Path, progress: Progress | None = None, digest: bytes | None = None
    ) -> dict:
        """Upload segment k = 1, 2, ... from a round file; `digest` is its SHA-256 if already known.

        Before every further attempt the service is asked what has arrived, so nothing is sent twice; progress is
        then called with a negative number, taking back what the broken attempt had counted.
        """
        digest = digest or sha256_of(path)
        target = self._path(run, f"segments/{k}")

        def arrived() -> dict | None:
            return next(
                (
                    s
                    for s in self.segments(run)["segments"]
                    if s["segment"] == k and s["digest"] == "sha256:" + digest.hex()
                ),
                None,
            )

        return self._line.upload(target, path, digest, progress, arrived, {"name": Path(path).name})

    def seal(self, run: str, segments: int, rounds: int) -> dict:
        """No more rounds: starts the job."""
        return self._line.json("POST", self._path(run, "seal"), json={"segments": segments, "rounds": rounds})

    def put_seed(self, run: str, path: str | Path, progress: Progress | None = None) -> dict:
        """Upload the seed file: {"bits", "digest"}."""
        return self._line.upload(self._path(run, "seed"), path, sha256_of(path), progress, lambda: None, {})

    def get_seed(self, run: str, path: str | Path, progress: Progress | None = None) -> bytes:
        """Write the seed that was used to `path`; returns its SHA-256."""
        return self._line.download(self._path(run, "seed"), path, progress)[0]

    # ---- following a run

    def events(self, run: str, last_event_id: str | None = None) -> Iterator[tuple[str | None, dict]]:
        """Server-sent events of a run as (event id, Run), until the service ends the stream. No reconnecting."""
        headers = {"Accept": "text/event-stream"}
        if last_event_id:
            headers["Last-Event-ID"] = last_event_id
        with self._line.send("GET", self._path(run, "events"), headers=headers, stream=True) as answer:
            try:
                yield from parse_events(answer.iter_content(chunk_size=None))
            except requests.RequestException as fault:
                raise unreachable(self._line.url, fault) from None

    def watch(self, run: str) -> Iterator[dict]:
        """Run documents as they change, the last one in a final state. Events where they work, else asking again."""
        last_id, broken = None, 0
        while broken < 2:
            try:
                for event_id, state in self.events(run, last_id):
                    last_id, broken = event_id or last_id, 0
                    yield state
                    if state["state"] in FINAL_STATES:
                        return
            except ServiceProblem as problem:
                if problem.status in (401, 403, 404):
                    raise
            broken += 1
            self._sleep(FIRST_PAUSE_S)
        while True:
            state = self.run(run)
            yield state
            if state["state"] in FINAL_STATES:
                return
            self._sleep(POLL_INTERVAL_S)

    # ---- what comes out

    def certificate(self, run: str) -> bytes:
        """Canonical JSON bytes, exactly as signed for."""
        return self._line.bytes(self._path(run, "certificate"))

    def report(self, run: str) -> bytes:
        return self._line.bytes(self._path(run, "report"), {"Accept": "application/json"})

    def bundle(self, run: str, path: str | Path, progress: Progress | None = None) -> bytes:
        """Write the bundle to `path`; returns its SHA-256."""
        return self._line.download(self._path(run, "bundle"), path, progress)[0]

    def bits(self, run: str, first: int, last: int) -> bytes:
        """Bytes first..last (both included) of the bits."""
        with self._line.send("GET", self._path(run, "bits"), headers={"Range": f"bytes={first}-{last}"}) as answer:
            return answer.content

    def get_bits(self, run: str, path: str | Path, progress: Progress | None = None) -> tuple[bytes, str]:
        """Write all bits to `path`, going on where an earlier download stopped; returns SHA-256 and salt (hex)."""
        digest, headers = self._line.download(self._path(run, "bits"), path, progress, secret=True)
        return digest, headers.get("Bits-Salt", "")

    def collect(self, run: str, digest: bytes) -> dict:
        """Confirm that the bits with this SHA-256 are safely stored: the service erases its key. Never repeated."""
        return self._line.json(
            "POST", self._path(run, "collection"), json={"digest": "sha256:" + digest.hex()}, repeat=False
        )

    def ledger_key(self) -> str:
        """The text of the key that signs the ledger."""
        return self._line.bytes("/v1/ledger/key").decode().strip()

    # ---- how

    @staticmethod
    def _path(run: str, rest: str = "") -> str:
        return f"/v1/runs/{quote(run, safe='')}" + (f"/{rest}" if rest else "")
