"""A worker process that kills itself with SIGKILL at a chosen place. The product has no such hook: this file wraps its functions.

    python -m tests.faults.dying_worker PLACE       settings from BELLASSAY_* variables

PLACE is stage:moment. Moments: `enter` (before the stage does anything), `commit` (all its work is on disk, its result
is not yet recorded), `done` (just after the record), and for hash `partial` (after the first stored partial hash).
Ends with exit code 0 when there is nothing to work on and the place was not reached.
"""

from __future__ import annotations

import os
import signal
import sys

from service.jobs import stages, work, worker
from service.settings import ServiceSettings


def die() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def main(place: str) -> None:
    stage, moment = place.split(":")
    if moment == "enter":
        look_up = stages.enter

        def enter(name: str):
            if name == stage:
                die()
            return look_up(name)
        stages.enter = enter
    elif moment == "partial":
        note = work.Work.note

        def note_and_die(self, row, changes):
            note(self, row, changes)
            if "hash_rounds" in changes:
                die()
        work.Work.note = note_and_die
    else:
        for name in ("advance", "finish", "record_seed", "wait_for_seed", "record"):
            setattr(work.Work, name, _dying(getattr(work.Work, name), stage, moment))
    worker.run_worker(ServiceSettings.load(os.environ), once=True)


def _dying(commit, stage: str, moment: str):
    def dying(self, row, *rest):
        if row.stage == stage and moment == "commit":
            die()
        result = commit(self, row, *rest)
        if row.stage == stage and moment == "done":
            die()
        return result
    return dying


if __name__ == "__main__":
    main(sys.argv[1])
