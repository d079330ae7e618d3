"""One claimed run in the hands of one worker: its lease, its progress, and committing what a stage established."""

from __future__ import annotations

import logging
import threading
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from extractor.errors import Defect
from extractor.model import Declaration
from service.clock import now_s, now_text
from service.errors import StorageFailed, Unavailable
from service.jobs import states
from service.parts import Parts
from service.runs import declaration_of
from service.store.contracts import RunRow, Transaction

log = logging.getLogger("bellassay.worker")
PROGRESS_EVERY_S = 0.5


class LeaseLost(Exception):
    """Another worker has the run, or somebody else moved it: drop everything, change nothing."""


class Stopped(Exception):
    """The worker is asked to stop; what is committed so far is where the next one goes on."""


@dataclass
class Work:
    """What a stage works with. Safe for the stage's own thread only, apart from `lost` and `stop`."""

    parts: Parts
    run_id: str
    worker: str
    stop: threading.Event
    lost: threading.Event = field(default_factory=threading.Event)
    _began: float = field(default_factory=time.monotonic)
    _told: float = 0.0

    def row(self) -> RunRow:
        """The run as it now is. Errors raised: LeaseLost if it is no longer this worker's."""
        with self.parts.store.read() as reading:
            row = reading.get_run(self.run_id)
        if row is None or row.lease_holder != self.worker:
            raise LeaseLost
        return row

    def declaration(self, row: RunRow) -> Declaration:
        with self.parts.store.read() as reading:
            return declaration_of(reading, row)

    def begin(self) -> None:
        """A stage begins: its time and its rate count from here."""
        self._began, self._told = time.monotonic(), 0.0

    def check(self) -> None:
        """Errors raised: LeaseLost, Stopped. Called between pieces of work, at least every few seconds."""
        if self.lost.is_set():
            raise LeaseLost
        if self.stop.is_set():
            raise Stopped

    def progress(self, row: RunRow, done: float, total: float, since: float = 0.0) -> None:
        """Share done and time left for watchers, at most twice a second; `since`: where this attempt began."""
        self.check()
        now = time.monotonic()
        if now - self._told < PROGRESS_EVERY_S or not total:
            return
        self._told = now
        elapsed, gained = now - self._began, done - since
        eta_s = round(elapsed * (total - done) / gained, 1) if gained > 0 and elapsed > 1.0 else None
        self.note(row, {"fraction": min(1.0, done / total), "eta_s": eta_s})

    def note(self, row: RunRow, changes: Mapping[str, Any]) -> None:
        """Changes that are no event. Errors raised: LeaseLost."""
        with self.parts.store.write() as transaction:
            if not transaction.update_run(row.id, changes, state="working", stage=row.stage, holder=self.worker):
                raise LeaseLost

    def record(self, row: RunRow, changes: Mapping[str, Any], entry: tuple[str, Mapping[str, Any]]) -> None:
        """A result within the stage of `row` and its ledger entry, in one transaction. Errors raised: LeaseLost."""
        with self.parts.store.write() as transaction:
            self._must(transaction.update_run(row.id, {**changes, "attempts": 0}, state="working", stage=row.stage,
                                              holder=self.worker))
            self._append(transaction, [entry])

    def advance(self, row: RunRow, stage: str, changes: Mapping[str, Any],
                entries: Sequence[tuple[str, Mapping[str, Any]]] = ()) -> None:
        """The stage of `row` is done: its results, ledger entries and the next stage in one transaction."""
        self._commit(row, "working", stage, {**changes, **self.spent(row), "attempts": 0}, entries)

    def finish(self, row: RunRow, state: str, changes: Mapping[str, Any],
               entries: Sequence[tuple[str, Mapping[str, Any]]] = ()) -> None:
        """The run is done: final state, and the lease given back."""
        self._commit(row, state, None, {**changes, **self.spent(row), "finished_time": now_text()}, entries)

    def wait_for_seed(self, row: RunRow) -> None:
        """The run waits for an upload: nobody holds it meanwhile."""
        with self.parts.store.write() as transaction:
            moved = states.move(transaction, row, "working", {"attempts": 0}, stage=row.stage, waiting_for="seed",
                                holder=self.worker)
            self._must(moved)
            transaction.release(row.id, self.worker)

    def record_seed(self, row: RunRow, digest: str) -> None:
        """The drawn seed is durable: ledger entry, and on to hash."""
        with self.parts.store.write() as transaction:
            self._must(states.record_seed(transaction, self.parts.ledger, row, "system", digest,
                                          changes=self.spent(row), holder=self.worker))

    def spent(self, row: RunRow) -> dict[str, Any]:
        """The stage's seconds added to what earlier attempts at it took."""
        before = row.stage_seconds.get(row.stage, 0.0)
        return {"stage_seconds": {**row.stage_seconds, row.stage: round(before + time.monotonic() - self._began, 3)}}

    def _commit(self, row: RunRow, state: str, stage: str | None, changes: Mapping[str, Any],
                entries: Sequence[tuple[str, Mapping[str, Any]]]) -> None:
        with self.parts.store.write() as transaction:
            self._must(states.move(transaction, row, state, changes, stage=stage, holder=self.worker))
            self._append(transaction, entries)
            if state != "working":
                transaction.release(row.id, self.worker)

    def _append(self, transaction: Transaction, entries: Sequence[tuple[str, Mapping[str, Any]]]) -> None:
        for kind, body in entries:
            self.parts.ledger.append(transaction, kind, self.run_id, body,
                                     self.parts.ledger.time(transaction, now_text()))

    @staticmethod
    def _must(moved: bool) -> None:
        if not moved:
            raise LeaseLost


class Heartbeat:
    """Extends the lease of a claimed run in a thread until the block ends; sets `work.lost` when the lease is gone."""

    def __init__(self, work: Work) -> None:
        self._work, self._over = work, threading.Event()
        self._thread = threading.Thread(target=self._beat, name="heartbeat", daemon=True)

    def __enter__(self) -> Heartbeat:
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._over.set()
        self._thread.join()

    def _beat(self) -> None:
        work, settings = self._work, self._work.parts.settings
        while not self._over.wait(settings.heartbeat_s):
            try:
                with work.parts.store.write() as transaction:
                    held = transaction.heartbeat(work.run_id, work.worker, now_s(), settings.lease_s)
            except Unavailable:
                continue                        # the lease is longer than two beats: there is time for another try
            except (StorageFailed, Defect):
                log.exception("the lease of run %s cannot be extended", work.run_id)
                held = False
            if not held and not self._over.is_set():
                work.lost.set()
                return
