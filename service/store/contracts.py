"""What the rest of the service may rely on: rows, and the few methods that read and change them.

Rules of the contract (tests/service/test_store.py holds every store to them):

- `Store.write()` is one durable transaction: when the `with` block has ended, all its changes are on disk; when it
  raises, none is. State change, event and ledger entry that belong together go into one block.
- Writers exclude each other from the first statement on, so what a write block reads cannot change under it.
- `Store.read()` is a consistent snapshot.
- The store takes no time and no randomness of its own: ids, salts and times are arguments. `*_s` fields are seconds
  since 1970 UTC (float); the others named `time`, `created`, ... are RFC 3339 UTC text with whole seconds.
- Secret values (bits, seeds, their digests and salts, keys) are never handed to the store.

Errors raised by every method: `Unavailable` (busy beyond the time-out, disk full), `StorageFailed` (the disk failed).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, field
from typing import Any, Final, Protocol

STATES = ("open", "sealed", "working", "certified", "refused", "failed", "collected", "erased")
CLAIMABLE_STATES = ("sealed", "working")
STAGES = ("tally", "certify", "seed", "hash", "publish")


class _Any:
    def __repr__(self) -> str:
        return "ANY"


ANY: Final = _Any()        # "whatever it is now" as an expectation of update_run, where None is a value


@dataclass(frozen=True)
class TokenRow:
    """A bearer token at rest: `digest` is the SHA-256 (hex) of its secret part; the secret itself is nowhere."""

    id: str
    digest: str
    owner: str
    scopes: tuple[str, ...]
    label: str
    created: str
    expires_s: float | None = None
    revoked: str | None = None
    last_used: str | None = None


@dataclass(frozen=True)
class DeclarationRow:
    """A recorded declaration: `document` as `extractor.documents.declaration_document` writes it."""

    id: str
    owner: str
    digest: str
    time: str
    ledger_index: int
    document: dict[str, Any]
    number: int = 0                       # order of recording, given by the store, >= 1


@dataclass(frozen=True)
class RunRow:
    """A run. Fields other than id, owner, declaration_id, created, ledger_salt and number change by `update_run`.

    fraction      0..1 of the current stage; eta_s seconds left, if known
    tally         32 counts by `cell_index`
    certificate   canonical bytes, exactly as published
    hash_rounds   rounds already inside the stored partial hash
    lease_*       who works on it, until when; attempts counts claims since it was last set to 0
    not_before_s  earliest time of the next claim (after a failure worth retrying)
    """

    id: str
    owner: str
    declaration_id: str
    created: str
    ledger_salt: bytes
    number: int = 0                       # order of creation, given by the store, >= 1; pages count by it
    state: str = "open"
    stage: str | None = None
    waiting_for: str | None = None
    fraction: float = 0.0
    eta_s: float | None = None
    message: str = ""
    sealed_segments: int | None = None
    sealed_rounds: int | None = None
    sealed_time: str | None = None
    tally: tuple[int, ...] | None = None
    planes_digest: str | None = None
    score: dict[str, Any] | None = None
    diagnostics: list[dict[str, Any]] | None = None
    certificate: bytes | None = None
    certified_length: int | None = None
    available_bits: int | None = None
    seed_source: str | None = None
    seed_bits: int | None = None
    seed_digest: str | None = None
    bits_commitment: str | None = None
    report_digest: str | None = None
    backend: str | None = None
    stage_seconds: dict[str, float] = field(default_factory=dict)
    hash_rounds: int = 0
    finished_time: str | None = None      # certified, refused or failed
    collected_time: str | None = None
    erased_time: str | None = None
    lease_holder: str | None = None
    lease_until_s: float | None = None
    attempts: int = 0
    not_before_s: float = 0.0


@dataclass(frozen=True)
class SegmentRow:
    """A received segment; `number` 1, 2, ...; `no_clicks` replaced values on (a, b); `tally` 32 counts."""

    run_id: str
    number: int
    digest: str
    bytes: int
    format: str
    rounds: int
    planes_digest: str
    tally: tuple[int, ...]
    first_round: int | None = None
    last_round: int | None = None
    no_clicks: tuple[int, int] = (0, 0)
    file_name: str | None = None
    received: str = ""


@dataclass(frozen=True)
class SegmentTotals:
    segments: int = 0
    rounds: int = 0


@dataclass(frozen=True)
class EventRow:
    """What watchers are told: `seq` counts 1, 2, ... within a run, without holes."""

    run_id: str
    seq: int
    document: dict[str, Any]


@dataclass(frozen=True)
class IdempotencyRow:
    """The answer given to a request that carried an Idempotency-Key."""

    owner: str
    key: str
    request_digest: str
    status: int
    response: dict[str, Any]
    created_s: float


@dataclass(frozen=True)
class LedgerEntryRow:
    """An entry: `entry` its canonical bytes, `leaf_hash` 32 bytes. Index counts from 0 without holes."""

    index: int
    kind: str
    subject: str
    time: str
    entry: bytes
    leaf_hash: bytes


@dataclass(frozen=True)
class LedgerHeadRow:
    """The newest tree: `size` entries, root hash (32 bytes), signed checkpoint text."""

    size: int
    root: bytes
    checkpoint: str


class Reading(Protocol):
    """A consistent snapshot. `get_*` return None for what does not exist."""

    def get_token(self, token_id: str) -> TokenRow | None: ...
    def list_tokens(self) -> list[TokenRow]: ...

    def get_declaration(self, declaration_id: str) -> DeclarationRow | None: ...
    def find_declaration(self, owner: str, digest: str) -> DeclarationRow | None:
        """The owner's earliest declaration with this digest."""
    def list_declarations(self, owner: str | None = None, *, before: int | None = None,
                          limit: int = 50) -> list[DeclarationRow]:
        """Newest first; `owner` None = of everybody; `before` = the smallest `number` of the page before."""

    def get_run(self, run_id: str) -> RunRow | None: ...
    def list_runs(self, owner: str | None = None, *, states: Sequence[str] | None = None,
                  declaration_id: str | None = None, before: int | None = None, limit: int = 50) -> list[RunRow]:
        """Newest first; pages like `list_declarations`."""
    def count_runs(self, owner: str | None = None) -> dict[str, int]:
        """Number of runs per state; every state is a key."""

    def get_segment(self, run_id: str, number: int) -> SegmentRow | None: ...
    def list_segments(self, run_id: str) -> list[SegmentRow]:
        """By number, ascending."""
    def segment_totals(self, run_ids: Iterable[str]) -> dict[str, SegmentTotals]:
        """Segments and rounds received, for every run asked about (zeros included)."""

    def runs_with_rounds(self, planes_digests: Sequence[str], *, other_than: str) -> list[RunRow]:
        """Other runs, sealed or later, that hold a segment with one of these digests or have it as digest of the whole run."""

    def events_after(self, run_id: str, seq: int = 0, *, limit: int = 500) -> list[EventRow]:
        """Events with a number above `seq`, ascending."""
    def last_event(self, run_id: str) -> EventRow | None: ...

    def get_idempotent(self, owner: str, key: str) -> IdempotencyRow | None: ...

    def ledger_head(self) -> LedgerHeadRow | None:
        """None before the first entry."""
    def ledger_entry(self, index: int) -> LedgerEntryRow | None: ...
    def ledger_entries(self, start: int, end: int) -> list[LedgerEntryRow]:
        """Entries start <= index < end that exist, ascending."""
    def ledger_entries_about(self, subject: str) -> list[LedgerEntryRow]:
        """Entries whose subject is this object id, ascending."""
    def ledger_nodes(self, places: Sequence[tuple[int, int]]) -> list[bytes]:
        """Hashes of the complete subtrees (level, index), in the order asked. A missing one is a `Defect`."""


class Transaction(Reading, Protocol):
    """One durable transaction."""

    def after_commit(self, action: Callable[[], None]) -> None:
        """Run `action` once the changes are durable, before `write()` returns to its caller; in order of registration.

        If it raises, the changes stay and the exception reaches the caller of `write()`.
        """

    def insert_token(self, row: TokenRow) -> None: ...
    def revoke_token(self, token_id: str, time: str) -> bool:
        """True if the token existed and was not revoked before."""
    def touch_token(self, token_id: str, time: str) -> None: ...

    def insert_declaration(self, row: DeclarationRow) -> DeclarationRow:
        """The row with its `number`. An id that exists is a `Defect`."""
    def insert_run(self, row: RunRow) -> RunRow:
        """The row with its `number`. An id that exists, or an unknown declaration, is a `Defect`."""
    def update_run(self, run_id: str, changes: Mapping[str, Any], *, state: str | Sequence[str], stage: Any = ANY,
                   waiting_for: Any = ANY, holder: Any = ANY) -> bool:
        """Compare and swap: set `changes` (names of RunRow fields) if the run is as expected; True if it was.

        state        the state, or one of the states, it must be in
        stage, waiting_for, holder   if given, what `stage`, `waiting_for`, `lease_holder` must be (None = null)
        """
    def insert_segment(self, row: SegmentRow) -> bool:
        """False (and no change) if the run already has a segment of this number."""
    def append_event(self, run_id: str, document: Mapping[str, Any]) -> int:
        """The event's number within its run."""

    def claim_next_run(self, worker: str, now_s: float, lease_s: float) -> RunRow | None:
        """Take the longest waiting claimable run for `worker` until now + lease, or None.

        Claimable: sealed or working, waiting for nothing, not_before_s reached, and its lease absent, expired, or held
        by a process that is certainly dead (`workers.is_dead`). Adds 1 to `attempts`. Two threads of one process that
        share a worker id still never get the same run.
        """
    def heartbeat(self, run_id: str, worker: str, now_s: float, lease_s: float) -> bool:
        """Extend the lease; False if `worker` does not hold it (any more): it must stop working on the run."""
    def release(self, run_id: str, worker: str, *, not_before_s: float = 0.0) -> bool:
        """Give the lease back; False if `worker` did not hold it."""

    def insert_idempotent(self, row: IdempotencyRow) -> bool:
        """False (and no change) if the owner has used the key before."""
    def drop_idempotent(self, created_before_s: float) -> int:
        """Forget old answers; how many."""

    def append_ledger(self, row: LedgerEntryRow, nodes: Sequence[tuple[int, int, bytes]], head: LedgerHeadRow) -> None:
        """Store entry, new subtree hashes and new head. A head that is not exactly one larger is a `Defect`."""


class Store(Protocol):
    """A database, open. Safe for use by many threads; a child process opens its own."""

    def read(self) -> AbstractContextManager[Reading]: ...
    def write(self) -> AbstractContextManager[Transaction]: ...
    def check(self) -> None:
        """Raises `Unavailable` or `StorageFailed` if the database cannot be read (readiness)."""
    def close(self) -> None: ...
