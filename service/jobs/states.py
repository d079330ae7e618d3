"""The states of a run, its stages, and who moves it. Every change of state in the service goes through `move`.

                                          ┌──[publish]──▶ certified ──[collect]──▶ collected ──[erase]──▶ erased
    open ──[seal]──▶ sealed ──[claim]──▶ working
                                          ├──[publish]──▶ refused
                                          └──[fail]─────▶ failed

    [seal]     POST /seal (service.sealing)                 [publish]  stage publish (jobs.stages)
    [claim]    a worker begins (jobs.worker)                [collect]  POST /collection (service.collection)
    [fail]     damaged rounds or seed, too many attempts    [erase]    the run key is gone (service.collection)

Stages while working, each durable when the next one begins, each repeatable from its beginning:

    tally ──▶ certify ──certified──▶ seed ──▶ hash ──▶ publish
                 └──────refused───────────────────────────▲
    At seed a run whose declaration says "upload" waits (waiting_for = "seed", no lease) until PUT /seed has moved it
    to hash.

Certified, refused and failed are final for a watcher; only a collection goes on from certified.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from extractor.errors import Defect
from service.clock import now_text
from service.ledger import Ledger
from service.runs import tell
from service.store.contracts import ANY, STAGES, RunRow, Transaction

MOVES: Mapping[str, tuple[str, ...]] = {
    "open": ("sealed",),
    "sealed": ("working",),
    "working": ("working", "certified", "refused", "failed"),
    "certified": ("collected",),
    "collected": ("erased",),
    "refused": (),
    "failed": (),
    "erased": (),
}
NEXT_STAGES: Mapping[str, tuple[str, ...]] = {
    "tally": ("certify",),
    "certify": ("seed", "publish"),
    "seed": ("hash",),
    "hash": ("publish",),
    "publish": (),
}
FINAL_STATES = ("certified", "refused", "failed", "collected", "erased")


def move(transaction: Transaction, row: RunRow, state: str, changes: Mapping[str, Any], *, stage: str | None = None,
         waiting_for: str | None = None, holder: Any = ANY) -> bool:
    """Compare and swap from what `row` says to `state` and `stage`, with an event; False (and no change) if the run
    is no longer in that state, stage and wait, or not held by `holder`.

    Errors raised: Defect for a move that is not drawn above.
    """
    same_stage = stage == row.stage and state == row.state == "working"
    if state not in MOVES[row.state]:
        raise Defect(f"a run does not go from {row.state} to {state}")
    if state == "working" and not same_stage and stage not in (NEXT_STAGES[row.stage] if row.stage else STAGES[:1]):
        raise Defect(f"a run does not go from stage {row.stage} to {stage}")
    if state != "working" and stage is not None:
        raise Defect("only a working run has a stage")
    fresh = {} if same_stage else {"fraction": 0.0, "eta_s": None}
    done = transaction.update_run(
        row.id, fresh | dict(changes) | {"state": state, "stage": stage, "waiting_for": waiting_for},
        state=row.state, stage=row.stage, waiting_for=row.waiting_for, holder=holder)
    if done:
        tell(transaction, row.id)
    return done


def record_seed(transaction: Transaction, ledger: Ledger, row: RunRow, source: str, digest: str, *,
                changes: Mapping[str, Any] | None = None, holder: Any = ANY) -> bool:
    """The seed is durable: its ledger entry, and the run goes on to hash. False (and no change) as `move`."""
    done = move(transaction, row, "working", {**(changes or {}), "seed_digest": digest, "attempts": 0}, stage="hash",
                holder=holder)
    if done:
        ledger.append(transaction, "seed", row.id, {"source": source, "bits": row.seed_bits, "digest": digest},
                      ledger.time(transaction, now_text()))
    return done
