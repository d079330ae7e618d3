"""A worker process that ends itself by SIGKILL at a chosen point.

POINT   "enter:hash"           when the stage is entered
        "before-commit:hash"   when the stage has done its work and is about to commit it
        "after-commit:hash"    when the commit has returned
        "partial"              when a partial hash has been stored
        "write:N"              at the N-th durable write transaction of the process
        "none"                 never: works until nothing waits
The product has no hook for this: functions are replaced here.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
from pathlib import Path
from typing import Any

from service.jobs import stages
from service.jobs.work import Work
from service.jobs.worker import run_worker
from service.settings import ServiceSettings
from service.store.sqlite import SqliteStore


def die() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def arm(point: str) -> None:
    kind, _, where = point.partition(":")
    if kind == "enter":
        real = stages.enter

        def enter(stage: str) -> Any:
            if stage == where:
                die()
            return real(stage)
        stages.enter = enter
    elif kind in ("before-commit", "after-commit"):
        for name in ("advance", "finish", "record_seed"):
            _around(name, kind, where)
    elif kind == "partial":
        real_write = stages.write_vault

        def write(path: Path, *rest: Any) -> None:
            real_write(path, *rest)
            die()
        stages.write_vault = write
    elif kind == "write":
        left = int(where)
        real_open = SqliteStore.write

        def counted(store: SqliteStore) -> Any:
            nonlocal left
            left -= 1
            if left < 0:
                die()
            return real_open(store)
        SqliteStore.write = counted


def _around(name: str, kind: str, where: str) -> None:
    real = getattr(Work, name)

    def wrapped(work: Work, row: Any, *rest: Any) -> None:
        if kind == "before-commit" and row.stage == where:
            die()
        real(work, row, *rest)
        if kind == "after-commit" and row.stage == where:
            die()
    setattr(Work, name, wrapped)


def main(data: str, point: str, partial_rounds: int = 2**20) -> None:
    """A worker until nothing waits, or until `point`."""
    arm(point)
    run_worker(ServiceSettings(data=Path(data), free_disk_bytes=0, poll_s=0.05, retry_wait_s=0.0, hash_threads=1,
                               attempts=1000,
                               partial_rounds=partial_rounds), once=True)


def start(data: Path, point: str) -> multiprocessing.Process:
    """The worker as a process of its own; forked, because loading the program takes longer than all its work."""
    process = multiprocessing.get_context("fork").Process(target=main, args=(str(data), point))
    process.start()
    return process


def run(data: Path, point: str) -> int:
    """The same, waited for; its exit code, negative if it was a signal."""
    process = start(data, point)
    process.join(120)
    if process.exitcode is None:
        process.kill()
    return process.exitcode if process.exitcode is not None else 99
