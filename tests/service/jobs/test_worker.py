"""Claims, leases, retries, and the processes: what happens when workers or their supervisor die."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from service.errors import StorageFailed, Unavailable
from service.jobs import stages
from service.jobs.work import Heartbeat, LeaseLost, Work
from service.jobs.worker import Worker
from service.parts import Parts
from service.supervisor import Supervisor
from tests.service.harness import Service, opened, settings
from tests.service.jobs import killed_worker
from tests.service.jobs.runs import SealedRuns, kinds_of, row_of

ROOT = Path(__file__).resolve().parents[3]


def broken(stage: str, fault: Exception, times: int, monkeypatch) -> list[int]:
    """Makes a stage fail a number of times; the list holds how often it was entered."""
    real, entered = stages.enter, [0]

    def enter(name: str):
        if name == stage:
            entered[0] += 1
            if entered[0] <= times:
                raise fault
        return real(name)

    monkeypatch.setattr(stages, "enter", enter)
    return entered


@pytest.mark.parametrize("fault", [Unavailable("the disk is full", code="disk-full", retry_after_s=0.0),
                                   RuntimeError("a defect"), MemoryError()])
def test_passing_trouble_is_tried_again(parts: Parts, sealed, monkeypatch, fault: Exception) -> None:
    """What may pass (a full disk, a defect that comes and goes) gives the run back, and it goes on later."""
    run = sealed()
    entered = broken("hash", fault, 3, monkeypatch)
    Worker(parts).run(once=True)
    assert row_of(parts, run).state == "certified" and entered == [4]


def test_a_lasting_defect_fails_the_run_after_some_attempts(parts: Parts, sealed, monkeypatch) -> None:
    """A stage that never gets through is not tried for ever; the text for watchers tells nothing of the inside."""
    run = sealed()
    entered = broken("tally", RuntimeError("the secret is 1234"), 10**6, monkeypatch)
    Worker(parts).run(once=True)
    row = row_of(parts, run)
    assert row.state == "failed" and row.message.endswith("(too-many-attempts)") and "1234" not in row.message
    assert entered == [parts.settings.attempts]


def test_a_wait_between_attempts(tmp_path: Path, monkeypatch) -> None:
    """After trouble the run is not claimable until its wait is over."""
    parts = opened(tmp_path, retry_wait_s=500.0)
    run = SealedRuns(parts).make()
    broken("tally", RuntimeError("a defect"), 1, monkeypatch)
    assert Worker(parts).run(once=True) == 1
    row = row_of(parts, run)
    assert row.state == "working" and row.lease_holder is None and row.not_before_s > time.time() + 400
    parts.close()


def test_a_failing_disk_ends_the_worker(parts: Parts, sealed, monkeypatch) -> None:
    """A failed fsync is never worked around: the worker stops."""
    sealed()
    broken("seed", StorageFailed("fsync failed"), 1, monkeypatch)
    with pytest.raises(StorageFailed):
        Worker(parts).run(once=True)


def test_a_lost_lease_changes_nothing(parts: Parts, sealed) -> None:
    """A worker whose run was taken over commits nothing more."""
    run = sealed()
    slow = Worker(parts)
    with parts.store.write() as transaction:
        transaction.claim_next_run(slow.name, time.time(), 0.0)             # a lease that is over at once
        assert transaction.claim_next_run("thief:b:1:2:3", time.time() + 1, 60.0).id == run
    work = Work(parts, run, slow.name, threading.Event())
    with pytest.raises(LeaseLost):
        work.row()
    with pytest.raises(LeaseLost):
        work.advance(row_of(parts, run), "tally", {})
    assert row_of(parts, run).state == "sealed" and kinds_of(parts, run) == ["seal"]


def test_the_heartbeat_keeps_and_notices(tmp_path: Path) -> None:
    """The lease is extended while work goes on; when it is gone, the work is told."""
    parts = opened(tmp_path, lease_s=1.0, heartbeat_s=0.1)
    run = SealedRuns(parts).make()
    with parts.store.write() as transaction:
        until = transaction.claim_next_run("me", time.time(), 1.0).lease_until_s
    work = Work(parts, run, "me", threading.Event())
    with Heartbeat(work):
        while row_of(parts, run).lease_until_s <= until:
            time.sleep(0.02)
        work.check()
        with parts.store.write() as transaction:
            transaction.release(run, "me")
        assert work.lost.wait(10)
    with pytest.raises(LeaseLost):
        work.check()
    parts.close()


def test_a_stopped_worker_gives_its_run_back(parts: Parts, sealed, monkeypatch) -> None:
    """Asked to stop, a worker keeps what is committed and frees the run for the next one."""
    run = sealed()
    stop = threading.Event()
    real = stages.enter
    monkeypatch.setattr(stages, "enter", lambda stage: stop.set() or real(stage) if stage == "certify" else real(stage))
    Worker(parts, stop).run(once=True)
    row = row_of(parts, run)
    assert (row.state, row.stage, row.lease_holder) == ("working", "seed", None)
    Worker(parts).run(once=True)
    assert row_of(parts, run).state == "certified"


def test_two_workers_share_the_runs(tmp_path: Path, parts: Parts, sealed) -> None:
    """Several processes on one data folder take each run exactly once."""
    runs = [sealed() for _ in range(4)]
    children = [killed_worker.start(tmp_path / "data", "none") for _ in range(2)]
    for child in children:
        child.join(120)
    assert [child.exitcode for child in children] == [0, 0]
    for run in runs:
        assert row_of(parts, run).state == "certified"
        assert kinds_of(parts, run) == ["seal", "certificate", "seed", "result"]


def wait_for(what, timeout_s: float = 60.0) -> None:
    deadline = time.monotonic() + timeout_s
    while not what():
        assert time.monotonic() < deadline, "it never happened"
        time.sleep(0.02)


def test_the_supervisor_starts_dead_workers_again(start) -> None:
    """A worker killed while its run is in hand: another process is there at once and finishes the run."""
    service: Service = start()
    supervisor = Supervisor(settings(service.settings.data.parent, workers=1))
    supervisor.start()
    try:
        wait_for(supervisor.pids)
        first = supervisor.pids()
        os.kill(first[0], signal.SIGKILL)
        wait_for(lambda: supervisor.pids() not in ([], first))
        run = service.caller().sealed_run()
        wait_for(lambda: service.state(run) == "certified")
    finally:
        supervisor.stop()
    assert supervisor.pids() == []


SERVE = """
import sys
from pathlib import Path
from service.supervisor import serve
from tests.service.harness import settings
chosen = settings(Path(sys.argv[1]), workers=1, poll_s=0.1, stop_s=10.0)
sys.exit(serve(chosen, on_listening=lambda url: print(url, flush=True)))
"""


def serving(folder: Path) -> subprocess.Popen:
    child = subprocess.Popen([sys.executable, "-c", SERVE, str(folder)], cwd=ROOT, stdout=subprocess.PIPE,
                             stderr=subprocess.DEVNULL, text=True)
    assert child.stdout.readline().startswith("http://127.0.0.1:")
    return child


def children_of(pid: int) -> list[int]:
    return [int(path.parent.name) for path in Path("/proc").glob("[0-9]*/stat")
            if (text := read(path)) and int(text.rpartition(")")[2].split()[1]) == pid
            and text.rpartition(")")[2].split()[0] != "Z"]


def read(path: Path) -> str:
    try:
        return path.read_text()
    except OSError:
        return ""


def alive(pid: int) -> bool:
    text = read(Path(f"/proc/{pid}/stat"))
    return bool(text) and text.rpartition(")")[2].split()[0] not in "ZX"


def test_workers_do_not_outlive_their_supervisor(tmp_path: Path) -> None:
    """When the serving process is killed, its worker ends by itself."""
    child = serving(tmp_path)
    wait_for(lambda: children_of(child.pid))
    workers = children_of(child.pid)
    child.kill()
    child.wait()
    wait_for(lambda: not any(alive(pid) for pid in workers), 20)


def test_serve_stops_when_asked(tmp_path: Path) -> None:
    """SIGTERM ends server and workers in order, with exit code 0."""
    child = serving(tmp_path)
    wait_for(lambda: children_of(child.pid))
    workers = children_of(child.pid)
    child.terminate()
    assert child.wait(30) == 0
    assert not any(alive(pid) for pid in workers)
