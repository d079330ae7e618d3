"""Rows for tests, and what child processes of the store tests do."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

from service.store.contracts import DeclarationRow, RunRow, SegmentRow
from service.store.sqlite import SqliteStore
from service.store.workers import worker_id

TIME = "2031-05-04T09:30:00Z"
ROOT = Path(__file__).resolve().parents[2]


def declaration(name: str = "d1", owner: str = "north") -> DeclarationRow:
    return DeclarationRow(id=name, owner=owner, digest="sha256:" + "0" * 64, time=TIME, ledger_index=0,
                          document={"format": "bellassay declaration 1", "soundness": 1e-12, "order": 1.0})


def run(name: str, owner: str = "north", declaration_id: str = "d1", **fields: object) -> RunRow:
    return RunRow(id=name, owner=owner, declaration_id=declaration_id, created=TIME, ledger_salt=b"\x07" * 32, **fields)


def segment(run_id: str, number: int, rounds: int = 1000) -> SegmentRow:
    return SegmentRow(run_id=run_id, number=number, digest="sha256:" + "1" * 64, bytes=500, format="npz", rounds=rounds,
                      planes_digest="sha256:" + "2" * 64, tally=tuple(range(32)), first_round=1, last_round=rounds,
                      no_clicks=(3, 4), file_name="fog.npz", received=TIME)


def child(task: str, *arguments: object) -> subprocess.Popen[str]:
    """A process that runs `task` of this module; its lines can be read from stdout, it reads stdin."""
    return subprocess.Popen([sys.executable, "-m", "tests.service.store_helpers", task, *map(str, arguments)],
                            cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)


def say(line: object) -> None:
    print(line, flush=True)


def claim_all(path: Path) -> None:
    """Claims until nothing is left, naming each run; lives on until stdin ends, as its leases would fall with it."""
    store = SqliteStore(path)
    say("ready")
    sys.stdin.readline()
    while True:
        with store.write() as transaction:
            claimed = transaction.claim_next_run(worker_id(), 1000.0, 60.0)
        if claimed is None:
            break
        say(claimed.id)
    say("done")
    sys.stdin.read()


def claim_and_hold(path: Path) -> None:
    """Claims one run, names it and lives until stdin ends."""
    with SqliteStore(path).write() as transaction:
        claimed = transaction.claim_next_run(worker_id(), 1000.0, 60.0)
    say(claimed.id if claimed else "nothing")
    sys.stdin.readline()


def write_on(path: Path) -> None:
    """Writes runs with an event each and names every acknowledged one, until killed."""
    store = SqliteStore(path)
    for number in range(1_000_000):
        with store.write() as transaction:
            transaction.insert_run(run(f"run-{number}"))
            transaction.append_event(f"run-{number}", {"number": number})
        say(number)


def append_on(folder: Path, count: int) -> None:
    """Appends ledger entries."""
    from tests.service.test_ledger import open_ledger
    store, ledger = open_ledger(folder)
    say("ready")
    sys.stdin.readline()
    for number in range(count):
        with store.write() as transaction:
            ledger.append(transaction, "declaration", f"decl-{os.getpid()}-{number}", {"digest": "x"}, TIME)


if __name__ == "__main__":
    name, where, *rest = sys.argv[1:]
    {"claim_all": claim_all, "claim_and_hold": claim_and_hold, "write_on": write_on, "append_on": append_on}[name](
        Path(where), *map(int, rest))
