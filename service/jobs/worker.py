"""A worker process: claims runs, takes them through their stages, keeps the lease alive, and outlives no supervisor.

    claim ─▶ stage, stage, ... ─▶ final or waiting

    trouble of the run itself (damage)   ─▶ failed
    passing trouble (busy, disk full)    ─▶ given back, tried again later
    a defect                             ─▶ the same, and failed after some attempts
    the disk failed                      ─▶ the process ends

    Killed at any point: the lease is free at once (the process is seen to be dead) or after lease_s, and the next
    claim goes on with the stage at hand.

`python -m service.jobs.worker` runs one with settings from the environment; `--supervised`: stdin is a pipe from the
supervisor, and its end means that the supervisor is gone.
"""

from __future__ import annotations

import logging
import os
import signal
import sys
import threading
from collections.abc import Sequence

from extractor.errors import InputError, ProofError
from service.clock import now_s, now_text
from service.collection import finish_erasures
from service.errors import KeyErased, StorageFailed, Unavailable
from service.jobs import stages, states
from service.jobs.work import Heartbeat, LeaseLost, Stopped, Work
from service.parts import Parts
from service.settings import ServiceSettings
from service.store.contracts import RunRow
from service.store.workers import worker_id

log = logging.getLogger("bellassay.worker")
LONGEST_RETRY_WAIT_S = 3600.0
ORPHANED, FAILED_DISK = 3, 4            # exit codes


class Worker:
    """Works on the runs of one data folder until `stop` is set."""

    def __init__(self, parts: Parts, stop: threading.Event | None = None) -> None:
        self.parts, self.stop, self.name = parts, stop or threading.Event(), worker_id()

    def run(self, *, once: bool = False) -> int:
        """Works on claimable runs; with `once` until there is none. How many claims were worked on.

        Errors raised: StorageFailed.
        """
        done = 0
        while not self.stop.is_set():
            try:
                finish_erasures(self.parts)
                claimed = self._claim()
            except Unavailable as fault:
                log.warning("%s", fault)
                claimed = None
                if once:
                    raise
            if claimed is not None:
                self.work_on(claimed)
                done += 1
            elif once:
                break
            else:
                self.stop.wait(self.parts.settings.poll_s)
        return done

    def _claim(self) -> RunRow | None:
        with self.parts.store.write() as transaction:
            return transaction.claim_next_run(self.name, now_s(), self.parts.settings.lease_s)

    def work_on(self, row: RunRow) -> None:
        """Takes a claimed run as far as it goes. Errors raised: StorageFailed."""
        work = Work(self.parts, row.id, self.name, self.stop)
        try:
            with Heartbeat(work):
                if row.attempts > self.parts.settings.attempts:
                    tried = f"given up after {row.attempts - 1} attempts without progress"
                    self._fail(work, f"{tried}; the service's log says why", "too-many-attempts")
                    return
                self._stages(work)
        except LeaseLost:
            log.warning("run %s is no longer this worker's", row.id)
        except Stopped:
            self._give_back(work, 0.0)
        except StorageFailed:
            raise
        except Unavailable as fault:
            log.warning("run %s: %s", row.id, fault)
            self._give_back(work, max(fault.retry_after_s, self._retry_wait_s(row)))
        except (InputError, ProofError, KeyErased) as fault:
            log.error("run %s failed: %s", row.id, fault)
            self._fail(work, str(fault), fault.code)
        except Exception:
            log.exception("run %s: a defect", row.id)
            self._give_back(work, self._retry_wait_s(row))

    def _stages(self, work: Work) -> None:
        row = work.row()
        if row.state == "sealed":
            with self.parts.store.write() as transaction:
                if not states.move(transaction, row, "working", {}, stage="tally", holder=self.name):
                    raise LeaseLost
            row = work.row()
        while True:
            work.begin()
            log.info("run %s: %s", row.id, row.stage)
            stages.enter(row.stage)(work, row)
            with self.parts.store.read() as reading:
                row = reading.get_run(work.run_id) or row
            if row.state != "working" or row.waiting_for is not None:
                return
            if row.lease_holder != self.name:
                raise LeaseLost
            work.check()

    def _retry_wait_s(self, row: RunRow) -> float:
        return min(LONGEST_RETRY_WAIT_S, self.parts.settings.retry_wait_s * 2.0 ** min(row.attempts - 1, 20))

    def _give_back(self, work: Work, wait_s: float) -> None:
        try:
            with self.parts.store.write() as transaction:
                transaction.release(work.run_id, self.name, not_before_s=now_s() + wait_s if wait_s else 0.0)
        except Unavailable:
            log.warning("run %s keeps its lease until it runs out", work.run_id)

    def _fail(self, work: Work, message: str, code: str) -> None:
        with self.parts.store.write() as transaction:
            row = transaction.get_run(work.run_id)
            if row is None or row.lease_holder != self.name:
                return
            changes = {"message": f"{message} ({code})", "finished_time": now_text()}
            if row.state == "sealed":
                states.move(transaction, row, "working", {}, stage="tally", holder=self.name)
                row = transaction.get_run(work.run_id) or row
            if row.state == "working":
                states.move(transaction, row, "failed", changes, holder=self.name)
            transaction.release(work.run_id, self.name)


def run_worker(settings: ServiceSettings, *, once: bool = False) -> int:
    """A worker in this process until SIGTERM or SIGINT (with `once`: until nothing waits). How many runs it worked on.

    Errors raised: InputError (data folder), StorageFailed.
    """
    from service.app import open_parts      # late: `app` joins the parts, which know nothing of it

    stop = threading.Event()
    previous = {}
    if threading.current_thread() is threading.main_thread():
        for number in (signal.SIGTERM, signal.SIGINT):
            previous[number] = signal.signal(number, lambda *_: stop.set())
    parts = open_parts(settings)
    try:
        return Worker(parts, stop).run(once=once)
    finally:
        parts.close()
        for number, handler in previous.items():
            signal.signal(number, handler)


def _end_with_supervisor() -> None:
    """Ends this process when the pipe from the supervisor does. At once: every stage may be cut anywhere."""
    def watch() -> None:
        try:
            while os.read(0, 1024):
                pass
        except OSError:
            pass
        os._exit(ORPHANED)

    threading.Thread(target=watch, name="supervisor watch", daemon=True).start()


def main(arguments: Sequence[str] | None = None) -> int:
    """Entry of the worker process; its exit code."""
    supervised = "--supervised" in (sys.argv[1:] if arguments is None else arguments)
    if supervised:
        _end_with_supervisor()
    try:
        settings = ServiceSettings.load(os.environ)
        logging.basicConfig(level=settings.log_level.upper(), format="%(asctime)s %(levelname)s %(name)s %(message)s")
        run_worker(settings)
    except InputError as fault:
        print(f"bellassay worker: {fault}", file=sys.stderr)
        return 2
    except StorageFailed as fault:
        log.critical("the disk failed: %s", fault)
        return FAILED_DISK
    return 0


if __name__ == "__main__":
    sys.exit(main())
