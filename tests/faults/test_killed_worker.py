"""A worker killed with SIGKILL at every stage: the run goes on, and certificate and bits come out byte for byte the same."""

from __future__ import annotations

import os
import signal
import time
from pathlib import Path

import pytest

from extractor import documents, pipeline
from extractor.hashing.seeds import SeedBytes
from extractor.seal import canonical
from extractor.seal.verify import verify_bundle
from tests.faults import processes
from tests.service.jobs import killed_worker

SIZES = (600_003, 377_777, 700_000)          # segments do not end at blocks or bytes
BITS = 20_011
POINTS = [f"{moment}:{stage}" for stage in ("tally", "certify", "seed", "hash", "publish") for moment in ("enter", "before-commit", "after-commit")]
POINTS.append("partial")        # after the first stored partial hash


@pytest.fixture(scope="module")
def service(tmp_path_factory):
    folder = tmp_path_factory.mktemp("killed")
    with processes.ServerProcess(folder / "data", "--port", "0", "--no-worker") as server:
        server.folder = folder
        server.caller = server.client(server.token())
        server.declared = server.caller.declare(processes.declaration(sum(SIZES), BITS))["id"]
        server.system_declared = server.caller.declare(processes.declaration(sum(SIZES), BITS, seed_source="system"))["id"]
        yield server


def sealed_run(service, declaration: str, files: list[Path]) -> str:
    run = service.caller.open_run(declaration)["id"]
    for k, path in enumerate(files, 1):
        service.caller.put_segment(run, k, path)
    service.caller.seal(run, len(files), sum(SIZES))
    return run


def take_through(service, run: str, point: str = "none") -> int:
    """Works the run to its end, with one worker that dies at `point` first; how often a worker died."""
    deaths = 0
    for _ in range(12):
        state = service.caller.run(run)
        if state["state"] not in ("sealed", "working"):
            return deaths
        if state["waiting_for"] == "seed":
            path = service.folder / "seed.bin"
            path.write_bytes(processes.seed_bytes(state["seed"]["bits_needed"]))
            service.caller.put_seed(run, path)
        code = killed_worker.run(service.data, "none" if deaths else point)
        if code == -signal.SIGKILL:
            deaths += 1
        else:
            assert code == 0
    raise AssertionError(f"the run did not end: {service.caller.run(run)}")


def outcome(service, run: str, files: list[Path], folder: Path) -> tuple[bytes, bytes, bytes]:
    """Certificate, bits and seed, after the bundle was verified with rounds, seed and bits."""
    state = service.caller.run(run)
    assert state["state"] == "certified", state
    service.caller.bundle(run, folder / "bundle.zip")
    service.caller.get_seed(run, folder / "seed.bin")
    _, salt = service.caller.get_bits(run, folder / "bits.bin")
    opened = [(path.open("rb"), path.name) for path in files]
    with (folder / "seed.bin").open("rb") as seed:
        verdict = verify_bundle((folder / "bundle.zip").read_bytes(), rounds=opened, seed=seed, bits=(folder / "bits.bin").read_bytes(),
                                bits_salt=bytes.fromhex(salt), trusted_key=service.caller.ledger_key(), say=lambda sentence: None)
    for file, _ in opened:
        file.close()
    assert verdict.ok and verdict.certified_length == BITS
    return service.caller.certificate(run), (folder / "bits.bin").read_bytes(), (folder / "seed.bin").read_bytes()


def undisturbed(document: dict, files: list[Path], seed: bytes) -> tuple[bytes, bytes]:
    """Certificate and bits of the same rounds and seed from the extractor alone, in this process, which nobody kills."""
    declaration = documents.declaration_from(document)
    opened = [(path.open("rb"), path.name) for path in files]
    batches = list(pipeline.batches_of(opened, declaration.rules))
    for file, _ in opened:
        file.close()
    certificate = pipeline.certify(declaration, pipeline.read_run(batches)[0])
    bits = pipeline.extract(declaration, certificate, lambda first: batches[first // 2**20:], SeedBytes(seed, certificate.seed_bits))
    return canonical.canonical_bytes(documents.certificate_document(certificate)), bits


@pytest.mark.parametrize("point", POINTS)
def test_killed_at_every_stage(service, point, tmp_path):
    """Killed once at this point, the run ends with the certificate and the bits of an undisturbed computation."""
    files = processes.round_files(tmp_path, SIZES, seed=POINTS.index(point))
    run = sealed_run(service, service.declared, files)
    assert take_through(service, run, point) == 1
    certificate, bits, seed = outcome(service, run, files, tmp_path)
    assert (certificate, bits) == undisturbed(processes.declaration(sum(SIZES), BITS), files, seed)


@pytest.mark.parametrize("point", ["before-commit:seed", "after-commit:seed", "partial", "before-commit:hash"])
def test_killed_with_a_drawn_seed(service, point, tmp_path):
    """With a seed drawn by the service: one seed in the ledger, and bits that follow from it, whenever the worker dies."""
    files = processes.round_files(tmp_path, SIZES, seed=100 + POINTS.index(point))
    run = sealed_run(service, service.system_declared, files)
    assert take_through(service, run, point) == 1
    certificate, bits, seed = outcome(service, run, files, tmp_path)
    assert (certificate, bits) == undisturbed(processes.declaration(sum(SIZES), BITS, seed_source="system"), files, seed)


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
