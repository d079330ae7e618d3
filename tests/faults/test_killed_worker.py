"""A worker killed with SIGKILL at every stage: the run goes on, and certificate and bits come out byte for byte the same."""

from __future__ import annotations

import hashlib
import os
import signal
import time
from pathlib import Path

import pytest

from extractor.seal.verify import verify_bundle
from tests.faults import processes

SIZES = (600_003, 377_777, 700_000)          # segments do not end at blocks or bytes
BITS = 20_011
PLACES = [f"{stage}:{moment}" for stage in ("tally", "certify", "seed", "hash", "publish") for moment in ("enter", "commit", "done")] + ["hash:partial"]


@pytest.fixture(scope="module")
def service(tmp_path_factory):
    folder = tmp_path_factory.mktemp("killed")
    with processes.ServerProcess(folder / "data", "--port", "0", "--no-worker") as server:
        server.folder = folder
        server.caller = server.client(server.token())
        server.files = processes.round_files(folder, SIZES)
        server.declared = server.caller.declare(processes.declaration(sum(SIZES), BITS))["id"]
        server.system_declared = server.caller.declare(processes.declaration(sum(SIZES), BITS, seed_source="system"))["id"]
        yield server


def sealed_run(service, declaration: str) -> str:
    run = service.caller.open_run(declaration)["id"]
    for k, path in enumerate(service.files, 1):
        service.caller.put_segment(run, k, path)
    service.caller.seal(run, len(service.files), sum(SIZES))
    return run


def take_through(service, run: str, place: str | None = None) -> int:
    """Works the run to its end, with one worker that dies at `place` first; how often a worker died."""
    deaths = 0
    for _ in range(12):
        state = service.caller.run(run)
        if state["state"] not in ("sealed", "working"):
            return deaths
        if state["waiting_for"] == "seed":
            path = service.folder / "seed.bin"
            path.write_bytes(processes.seed_bytes(state["seed"]["bits_needed"]))
            service.caller.put_seed(run, path)
        code = processes.work_once(service.env, place if not deaths else None)
        if code == -signal.SIGKILL:
            deaths += 1
        else:
            assert code == 0
    raise AssertionError(f"the run did not end: {service.caller.run(run)}")


def outcome(service, run: str, folder: Path) -> tuple[bytes, bytes]:
    """Certificate and bits, after the bundle was verified with rounds, seed and bits."""
    state = service.caller.run(run)
    assert state["state"] == "certified", state
    folder.mkdir()
    service.caller.bundle(run, folder / "bundle.zip")
    service.caller.get_seed(run, folder / "seed.bin")
    _, salt = service.caller.get_bits(run, folder / "bits.bin")
    files = [(path.open("rb"), path.name) for path in service.files]
    with (folder / "seed.bin").open("rb") as seed:
        verdict = verify_bundle((folder / "bundle.zip").read_bytes(), rounds=files, seed=seed, bits=(folder / "bits.bin").read_bytes(),
                                bits_salt=bytes.fromhex(salt), trusted_key=service.caller.ledger_key(), say=lambda sentence: None)
    for file, _ in files:
        file.close()
    assert verdict.ok and verdict.certified_length == BITS
    return service.caller.certificate(run), (folder / "bits.bin").read_bytes()


@pytest.fixture(scope="module")
def undisturbed(service):
    run = sealed_run(service, service.declared)
    assert take_through(service, run) == 0
    return outcome(service, run, service.folder / "undisturbed")


@pytest.mark.parametrize("place", PLACES)
def test_killed_at_every_stage(service, undisturbed, place, tmp_path):
    """Killed once at this place, the run ends with the certificate and the bits of the undisturbed run."""
    run = sealed_run(service, service.declared)
    assert take_through(service, run, place) == 1
    certificate, bits = outcome(service, run, tmp_path / "out")
    assert certificate == undisturbed[0]
    assert hashlib.sha256(bits).digest() == hashlib.sha256(undisturbed[1]).digest()


@pytest.mark.parametrize("place", ["seed:commit", "seed:done", "hash:partial", "hash:commit"])
def test_killed_with_a_drawn_seed(service, place, tmp_path):
    """With a seed drawn by the service: one seed in the ledger, and bits that follow from it, whenever the worker dies."""
    run = sealed_run(service, service.system_declared)
    assert take_through(service, run, place) == 1
    outcome(service, run, tmp_path / "out")


def test_a_killed_worker_is_replaced_by_its_service(tmp_path):
    """`bellassay serve` starts a killed worker again, as often as it dies, and the run ends with the same bits as one left alone."""
    results = []
    for kills in (0, 4):
        folder = tmp_path / f"kills-{kills}"
        with processes.ServerProcess(folder / "data", "--port", "0") as server:
            caller = server.client(server.token())
            files = processes.round_files(folder, SIZES)
            run = caller.open_run(caller.declare(processes.declaration(sum(SIZES), BITS))["id"])["id"]
            for k, path in enumerate(files, 1):
                caller.put_segment(run, k, path)
            caller.seal(run, len(files), sum(SIZES))
            done, deadline = 0, time.monotonic() + 120
            while (state := caller.run(run))["state"] in ("sealed", "working"):
                assert time.monotonic() < deadline, state
                if state["waiting_for"] == "seed":
                    (folder / "seed.bin").write_bytes(processes.seed_bytes(state["seed"]["bits_needed"]))
                    caller.put_seed(run, folder / "seed.bin")
                if done < kills:
                    for pid in children(server.process.pid):
                        os.kill(pid, signal.SIGKILL)
                        done += 1
                    time.sleep(0.4 * (done % 3))
            assert done >= kills and state["state"] == "certified"
            caller.get_bits(run, folder / "bits.bin")
            results.append((caller.certificate(run), (folder / "bits.bin").read_bytes()))
    assert results[0] == results[1]


def children(pid: int) -> list[int]:
    found = []
    for task in Path(f"/proc/{pid}/task").iterdir():
        found += [int(child) for child in (task / "children").read_text().split()]
    return found
