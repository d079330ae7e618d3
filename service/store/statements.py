"""Reading and changing through SQLAlchemy Core: the same statements for every database; `sqlite` opens one.

Nothing here begins or ends a transaction. Rules: `contracts`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Any, TypeVar

from sqlalchemy import Connection, Select, Table, and_, delete, func, insert, or_, select, update
from sqlalchemy.exc import IntegrityError

from extractor.errors import Defect
from service.store import schema as t
from service.store.contracts import (
    ANY, CLAIMABLE_STATES, STAGES, STATES, DeclarationRow, EventRow, IdempotencyRow, LedgerEntryRow, LedgerHeadRow,
    RunRow, SegmentRow, SegmentTotals, TokenRow,
)
from service.store.schema import row_from, values_of
from service.store.workers import is_dead

_T = TypeVar("_T")
_FIXED_RUN_FIELDS = frozenset({"id", "number", "owner", "declaration_id", "created", "ledger_salt"})
_LEASE_FIELDS = frozenset({"lease_holder", "lease_until_s"})
_CHANGEABLE = frozenset(t.runs.c.keys()) - _FIXED_RUN_FIELDS - _LEASE_FIELDS
_CHUNK = 400            # values per IN list, below every database's limit


class SqlReading:
    """`contracts.Reading` on an open transaction of `connection`."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

    def _one(self, kind: type[_T], table: Table, *conditions: Any) -> _T | None:
        found = self._connection.execute(select(table).where(*conditions)).one_or_none()
        return None if found is None else row_from(kind, found)

    def _many(self, kind: type[_T], query: Select) -> list[_T]:
        return [row_from(kind, found) for found in self._connection.execute(query)]

    def get_token(self, token_id: str) -> TokenRow | None:
        return self._one(TokenRow, t.tokens, t.tokens.c.id == token_id)

    def list_tokens(self) -> list[TokenRow]:
        return self._many(TokenRow, select(t.tokens).order_by(t.tokens.c.created, t.tokens.c.id))

    def get_declaration(self, declaration_id: str) -> DeclarationRow | None:
        return self._one(DeclarationRow, t.declarations, t.declarations.c.id == declaration_id)

    def find_declaration(self, owner: str, digest: str) -> DeclarationRow | None:
        found = self._many(DeclarationRow, select(t.declarations).where(
            t.declarations.c.owner == owner, t.declarations.c.digest == digest).order_by(t.declarations.c.number).limit(1))
        return found[0] if found else None

    def list_declarations(self, owner: str | None = None, *, before: int | None = None,
                          limit: int = 50) -> list[DeclarationRow]:
        return self._many(DeclarationRow, _page(t.declarations, owner, before, limit))

    def get_run(self, run_id: str) -> RunRow | None:
        return self._one(RunRow, t.runs, t.runs.c.id == run_id)

    def list_runs(self, owner: str | None = None, *, states: Sequence[str] | None = None,
                  declaration_id: str | None = None, before: int | None = None, limit: int = 50) -> list[RunRow]:
        query = _page(t.runs, owner, before, limit)
        if states is not None:
            query = query.where(t.runs.c.state.in_(list(states)))
        if declaration_id is not None:
            query = query.where(t.runs.c.declaration_id == declaration_id)
        return self._many(RunRow, query)

    def count_runs(self, owner: str | None = None) -> dict[str, int]:
        query = select(t.runs.c.state, func.count()).group_by(t.runs.c.state)
        if owner is not None:
            query = query.where(t.runs.c.owner == owner)
        found = {state: count for state, count in self._connection.execute(query)}
        return {state: found.get(state, 0) for state in STATES}

    def get_segment(self, run_id: str, number: int) -> SegmentRow | None:
        return self._one(SegmentRow, t.segments, t.segments.c.run_id == run_id, t.segments.c.number == number)

    def list_segments(self, run_id: str) -> list[SegmentRow]:
        return self._many(SegmentRow, select(t.segments).where(
            t.segments.c.run_id == run_id).order_by(t.segments.c.number))

    def segment_totals(self, run_ids: Iterable[str]) -> dict[str, SegmentTotals]:
        wanted = list(run_ids)
        totals = {run_id: SegmentTotals() for run_id in wanted}
        for at in range(0, len(wanted), _CHUNK):
            query = select(t.segments.c.run_id, func.count(), func.sum(t.segments.c.rounds)).group_by(
                t.segments.c.run_id).where(t.segments.c.run_id.in_(wanted[at:at + _CHUNK]))
            for run_id, count, rounds in self._connection.execute(query):
                totals[run_id] = SegmentTotals(int(count), int(rounds))
        return totals

    def runs_with_rounds(self, planes_digests: Sequence[str], *, other_than: str) -> list[RunRow]:
        found: dict[str, RunRow] = {}
        for at in range(0, len(planes_digests), _CHUNK):
            some = planes_digests[at:at + _CHUNK]
            holding = select(t.segments.c.run_id).where(t.segments.c.planes_digest.in_(some))
            query = select(t.runs).where(t.runs.c.id != other_than, t.runs.c.state != "open",
                                         or_(t.runs.c.id.in_(holding), t.runs.c.planes_digest.in_(some)))
            found |= {row.id: row for row in self._many(RunRow, query)}
        return list(found.values())

    def events_after(self, run_id: str, seq: int = 0, *, limit: int = 500) -> list[EventRow]:
        return self._many(EventRow, select(t.events).where(
            t.events.c.run_id == run_id, t.events.c.seq > seq).order_by(t.events.c.seq).limit(limit))

    def last_event(self, run_id: str) -> EventRow | None:
        found = self._many(EventRow, select(t.events).where(t.events.c.run_id == run_id).order_by(
            t.events.c.seq.desc()).limit(1))
        return found[0] if found else None

    def get_idempotent(self, owner: str, key: str) -> IdempotencyRow | None:
        return self._one(IdempotencyRow, t.idempotency, t.idempotency.c.owner == owner, t.idempotency.c.key == key)

    def ledger_head(self) -> LedgerHeadRow | None:
        return self._one(LedgerHeadRow, t.ledger_head, t.ledger_head.c.one == 1)

    def ledger_entry(self, index: int) -> LedgerEntryRow | None:
        return self._one(LedgerEntryRow, t.ledger_entries, t.ledger_entries.c.index == index)

    def ledger_entries(self, start: int, end: int) -> list[LedgerEntryRow]:
        place = t.ledger_entries.c.index
        return self._many(LedgerEntryRow, select(t.ledger_entries).where(place >= start, place < end).order_by(place))

    def ledger_entries_about(self, subject: str) -> list[LedgerEntryRow]:
        return self._many(LedgerEntryRow, select(t.ledger_entries).where(
            t.ledger_entries.c.subject == subject).order_by(t.ledger_entries.c.index))

    def ledger_nodes(self, places: Sequence[tuple[int, int]]) -> list[bytes]:
        found: dict[tuple[int, int], bytes] = {}
        level, index = t.ledger_nodes.c.level, t.ledger_nodes.c.index
        for at in range(0, len(places), _CHUNK):
            asked = or_(*(and_(level == one, index == other) for one, other in places[at:at + _CHUNK]))
            for row in self._connection.execute(select(t.ledger_nodes).where(asked)):
                found[row.level, row.index] = row.hash
        if missing := [place for place in places if tuple(place) not in found]:
            raise Defect(f"the ledger has no subtree {missing[0]}")
        return [found[tuple(place)] for place in places]


class SqlTransaction(SqlReading):
    """`contracts.Transaction`; `actions` are what `after_commit` collected."""

    def __init__(self, connection: Connection) -> None:
        super().__init__(connection)
        self.actions: list[Callable[[], None]] = []

    def after_commit(self, action: Callable[[], None]) -> None:
        self.actions.append(action)

    def _insert(self, table: Table, values: Mapping[str, Any], what: str) -> Any:
        try:
            return self._connection.execute(insert(table).values(**values))
        except IntegrityError as fault:
            raise Defect(f"{what} already exists or refers to something that does not") from fault

    def _insert_if_new(self, table: Table, values: Mapping[str, Any]) -> bool:
        """By looking first: writers exclude each other, so nothing can come between."""
        keys = [column == values[column.name] for column in table.primary_key]
        if self._connection.execute(select(func.count()).select_from(table).where(*keys)).scalar_one():
            return False
        self._insert(table, values, f"a row of {table.name}")
        return True

    def _update(self, table: Table, changes: Mapping[str, Any], *conditions: Any) -> bool:
        return self._connection.execute(update(table).where(*conditions).values(**changes)).rowcount == 1

    def insert_token(self, row: TokenRow) -> None:
        self._insert(t.tokens, values_of(row) | {"scopes": list(row.scopes)}, f"token {row.id}")

    def revoke_token(self, token_id: str, time: str) -> bool:
        return self._update(t.tokens, {"revoked": time}, t.tokens.c.id == token_id, t.tokens.c.revoked.is_(None))

    def touch_token(self, token_id: str, time: str) -> None:
        self._update(t.tokens, {"last_used": time}, t.tokens.c.id == token_id)

    def insert_declaration(self, row: DeclarationRow) -> DeclarationRow:
        done = self._insert(t.declarations, values_of(row, without=("number",)), f"declaration {row.id}")
        return replace(row, number=done.inserted_primary_key[0])

    def insert_run(self, row: RunRow) -> RunRow:
        if row.state not in STATES:
            raise Defect(f"{row.state!r} is no state of a run")
        done = self._insert(t.runs, values_of(row, without=("number",)), f"run {row.id}")
        return replace(row, number=done.inserted_primary_key[0])

    def update_run(self, run_id: str, changes: Mapping[str, Any], *, state: str | Sequence[str], stage: Any = ANY,
                   waiting_for: Any = ANY, holder: Any = ANY) -> bool:
        if wrong := set(changes) - _CHANGEABLE:
            raise Defect(f"{', '.join(sorted(wrong))} of a run cannot be changed this way")
        if changes.get("state", "open") not in STATES or changes.get("stage") not in (None, *STAGES):
            raise Defect(f"{changes.get('state')!r}, {changes.get('stage')!r} is no state and stage of a run")
        expected = [state] if isinstance(state, str) else list(state)
        conditions = [t.runs.c.id == run_id, t.runs.c.state.in_(expected)]
        r = t.runs.c
        for column, value in ((r.stage, stage), (r.waiting_for, waiting_for), (r.lease_holder, holder)):
            if value is not ANY:
                conditions.append(column.is_(None) if value is None else column == value)
        if not changes:
            query = select(func.count()).select_from(t.runs).where(*conditions)
            return self._connection.execute(query).scalar_one() == 1
        return self._update(t.runs, changes, *conditions)

    def insert_segment(self, row: SegmentRow) -> bool:
        return self._insert_if_new(t.segments, values_of(row))

    def append_event(self, run_id: str, document: Mapping[str, Any]) -> int:
        last = select(func.coalesce(func.max(t.events.c.seq), 0)).where(t.events.c.run_id == run_id)
        seq = self._connection.execute(last).scalar_one() + 1
        self._insert(t.events, {"run_id": run_id, "seq": seq, "document": dict(document)}, f"event of run {run_id}")
        return seq

    def claim_next_run(self, worker: str, now_s: float, lease_s: float) -> RunRow | None:
        r = t.runs.c
        query = select(r.id, r.lease_holder, r.lease_until_s).where(
            r.state.in_(CLAIMABLE_STATES), r.waiting_for.is_(None), r.not_before_s <= now_s,
        ).order_by(r.sealed_time, r.number).with_for_update(skip_locked=True)
        for run_id, holder, until_s in self._connection.execute(query).fetchall():
            if holder is None or until_s is None or until_s <= now_s or is_dead(holder):
                lease = {"lease_holder": worker, "lease_until_s": now_s + lease_s, "attempts": r.attempts + 1}
                self._update(t.runs, lease, r.id == run_id)
                return self.get_run(run_id)
        return None

    def heartbeat(self, run_id: str, worker: str, now_s: float, lease_s: float) -> bool:
        return self._update(t.runs, {"lease_until_s": now_s + lease_s},
                            t.runs.c.id == run_id, t.runs.c.lease_holder == worker)

    def release(self, run_id: str, worker: str, *, not_before_s: float = 0.0) -> bool:
        return self._update(t.runs, {"lease_holder": None, "lease_until_s": None, "not_before_s": not_before_s},
                            t.runs.c.id == run_id, t.runs.c.lease_holder == worker)

    def insert_idempotent(self, row: IdempotencyRow) -> bool:
        return self._insert_if_new(t.idempotency, values_of(row))

    def drop_idempotent(self, created_before_s: float) -> int:
        return self._connection.execute(
            delete(t.idempotency).where(t.idempotency.c.created_s < created_before_s)).rowcount

    def append_ledger(self, row: LedgerEntryRow, nodes: Sequence[tuple[int, int, bytes]], head: LedgerHeadRow) -> None:
        before = self.ledger_head()
        size = before.size if before else 0
        if row.index != size or head.size != size + 1:
            raise Defect(f"the ledger has {size} entries; entry {row.index} and head {head.size} do not follow")
        self._insert(t.ledger_entries, values_of(row), f"ledger entry {row.index}")
        for level, index, digest in nodes:
            self._insert(t.ledger_nodes, {"level": level, "index": index, "hash": digest},
                         f"subtree ({level}, {index})")
        if before is None:
            self._insert(t.ledger_head, values_of(head) | {"one": 1}, "the ledger's head")
        elif not self._update(t.ledger_head, values_of(head), t.ledger_head.c.one == 1, t.ledger_head.c.size == size):
            raise Defect("the ledger's head moved inside a transaction")


def _page(table: Table, owner: str | None, before: int | None, limit: int) -> Select:
    query = select(table).order_by(table.c.number.desc()).limit(limit)
    if owner is not None:
        query = query.where(table.c.owner == owner)
    return query if before is None else query.where(table.c.number < before)
