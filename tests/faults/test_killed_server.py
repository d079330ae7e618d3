"""The server killed with SIGKILL while rounds are uploaded: what was acknowledged is there, what was not can be sent again."""

from __future__ import annotations

import random
import threading
import time

import pytest
import requests

from service.client import Client
from service.transport import ServiceProblem
from tests.faults import processes

SIZES = (300_001,) * 12


@pytest.mark.parametrize("label", [1, 2])
def test_acknowledged_segments_survive(tmp_path, label):
    """Killed four times during uploads, the service keeps every acknowledged segment and takes the rest; the run ends certified."""
    rng = random.Random(label)
    data, files = tmp_path / "data", processes.round_files(tmp_path, SIZES)
    server = processes.ServerProcess(data, "--port", "0")
    port = server.url.rsplit(":", 1)[1]
    try:
        token = server.token()
        client = server.client(token)
        declared = client.declare(processes.declaration(sum(SIZES), 5000, seed_source="system"))["id"]
        run = client.open_run(declared)["id"]
        acknowledged: dict[int, str] = {}
        for _ in range(4):
            timer = threading.Timer(rng.uniform(0.1, 1.2), server.process.kill)
            timer.start()
            try:
                for k in [k for k in range(1, len(files) + 1) if k not in acknowledged]:
                    acknowledged[k] = _put(server.url, token, run, k, files[k - 1])["digest"]
            except ServiceProblem:
                pass
            timer.join()
            server.process.wait()
            server.kill()
            server = processes.ServerProcess(data, "--port", port)
            stored = {one["segment"]: one["digest"] for one in server.client(token).segments(run)["segments"]}
            assert acknowledged.items() <= stored.items()
            acknowledged = stored
        client = server.client(token)
        for k, path in enumerate(files, 1):
            client.put_segment(run, k, path)
        client.seal(run, len(files), sum(SIZES))
        deadline = time.monotonic() + 120
        while (state := client.run(run))["state"] in ("sealed", "working") and time.monotonic() < deadline:
            time.sleep(0.1)
        assert state["state"] == "certified", state
        answer = requests.get(f"{server.url}/v1/ledger/entries?start=0&end=50", headers={"Authorization": f"Bearer {token}"}, timeout=10)
        kinds = [one["entry"]["kind"] for one in answer.json()["entries"]]
        assert kinds == ["declaration", "seal", "certificate", "seed", "result"]
    finally:
        if server.process.poll() is None:
            server.kill()


def _put(url: str, token: str, run: str, k: int, path):
    """One attempt, without the client's patience, so that the kill is noticed at once."""
    return Client(url, token, attempts=1).put_segment(run, k, path)
