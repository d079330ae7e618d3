"""The contract suite: what every store must hold, whatever database is beneath it."""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import pytest

from extractor.errors import Defect, InputError
from service.errors import StorageFailed, Unavailable
from service.store.contracts import STATES, EventRow, IdempotencyRow, SegmentTotals, TokenRow
from service.store.sqlite import SqliteStore
from service.store.workers import is_dead, worker_id
from tests.service.store_helpers import TIME, child, declaration, run, segment


@pytest.fixture
def store(tmp_path: Path) -> Iterator[SqliteStore]:
    opened = SqliteStore(tmp_path / "data" / "bellassay.sqlite")
    with opened.write() as transaction:
        transaction.insert_declaration(declaration())
    yield opened
    opened.close()


def path_of(store: SqliteStore) -> Path:
    return store._path


def add_runs(store: SqliteStore, count: int, **fields: object) -> None:
    with store.write() as transaction:
        for number in range(count):
            transaction.insert_run(run(f"r{number}", **fields))


def test_rows_come_back_as_they_were_put_in(store: SqliteStore) -> None:
    """Every field of every kind of row survives, floats and tuples included."""
    rich = run("r1", state="working", stage="hash", tally=tuple(range(32)), score={"chsh": 2.7182818284590451},
               diagnostics=[{"name": "settings", "p_value": None}], certificate=b"\x00{}\xff", certified_length=2**50,
               available_bits=-17, seed_bits=2**51, eta_s=0.1, stage_seconds={"tally": 0.25}, hash_rounds=2**40)
    token = TokenRow("t1", "ab" * 32, "north", ("submit", "audit"), "bench", TIME, 17.5)
    answer = IdempotencyRow("north", "key-1", "sha256:x", 201, {"id": "r1"}, 12.25)
    with store.write() as transaction:
        stored = transaction.insert_run(rich)
        transaction.insert_token(token)
        assert transaction.insert_segment(segment("r1", 1))
        assert transaction.insert_idempotent(answer)
    with store.read() as reading:
        assert stored.number == 1 and reading.get_run("r1") == replace(rich, number=1)
        assert reading.get_token("t1") == token and reading.list_tokens() == [token]
        assert reading.get_segment("r1", 1) == segment("r1", 1)
        assert reading.get_idempotent("north", "key-1") == answer
        assert reading.get_declaration("d1") == replace(declaration(), number=1)


def test_what_does_not_exist_is_none(store: SqliteStore) -> None:
    """Looking for something that is not there is no error."""
    with store.read() as reading:
        assert reading.get_run("r1") is reading.get_token("t") is reading.get_declaration("x") is None
        assert reading.get_segment("r1", 1) is reading.get_idempotent("a", "b") is reading.ledger_head() is None
        assert reading.ledger_entry(0) is reading.last_event("r1") is None
        assert reading.list_runs() == reading.list_segments("r1") == reading.events_after("r1") == []


def test_lists_are_newest_first_and_paged_by_number(store: SqliteStore) -> None:
    """Pages continue after the last number, also when new runs arrive in between."""
    add_runs(store, 7)
    with store.read() as reading:
        first = reading.list_runs(limit=3)
    with store.write() as transaction:
        transaction.insert_run(run("late"))
    with store.read() as reading:
        second = reading.list_runs(before=first[-1].number, limit=3)
        assert [row.id for row in first + second] == ["r6", "r5", "r4", "r3", "r2", "r1"]
        assert [row.id for row in reading.list_declarations()] == ["d1"]


def test_lists_filter_by_owner_state_and_declaration(store: SqliteStore) -> None:
    """An owner sees only what is theirs; counts name every state."""
    with store.write() as transaction:
        transaction.insert_declaration(declaration("d2", "south"))
        transaction.insert_run(run("r1"))
        transaction.insert_run(run("r2", "south", "d2", state="sealed"))
    with store.read() as reading:
        assert [row.id for row in reading.list_runs("south")] == ["r2"]
        assert [row.id for row in reading.list_runs(states=["open", "failed"])] == ["r1"]
        assert [row.id for row in reading.list_runs(declaration_id="d2")] == ["r2"]
        assert [row.id for row in reading.list_declarations("south")] == ["d2"]
        assert reading.count_runs() == dict.fromkeys(STATES, 0) | {"open": 1, "sealed": 1}
        assert reading.count_runs("north")["sealed"] == 0


def test_a_failing_block_changes_nothing(store: SqliteStore) -> None:
    """All changes of a write block become visible together or not at all, and its actions do not run."""
    ran = []
    with pytest.raises(ZeroDivisionError):
        with store.write() as transaction:
            transaction.insert_run(run("r1"))
            transaction.append_event("r1", {"state": "open"})
            transaction.after_commit(lambda: ran.append("no"))
            raise ZeroDivisionError
    with store.read() as reading:
        assert reading.get_run("r1") is None and reading.events_after("r1") == [] and ran == []


def test_actions_after_commit_see_the_change(store: SqliteStore) -> None:
    """They run in order, when others can already read the change, and before write() returns."""
    seen = []

    def look() -> None:
        with store.read() as reading:
            seen.append(reading.get_run("r1").id)

    with store.write() as transaction:
        transaction.insert_run(run("r1"))
        transaction.after_commit(look)
        transaction.after_commit(lambda: seen.append("second"))
        assert seen == []
    assert seen == ["r1", "second"]


def test_a_read_block_is_a_snapshot(store: SqliteStore) -> None:
    """A reader sees one state of everything, however long it looks, and does not hold up the writer."""
    add_runs(store, 1)
    with store.read() as reading:
        assert reading.get_run("r0").state == "open"
        with store.write() as transaction:
            assert transaction.update_run("r0", {"state": "sealed"}, state="open")
        assert reading.get_run("r0").state == "open"
    with store.read() as reading:
        assert reading.get_run("r0").state == "sealed"


def test_update_run_compares_before_it_swaps(store: SqliteStore) -> None:
    """A run that is not as expected (state, stage, waiting, holder) stays untouched."""
    add_runs(store, 1, state="working", stage="tally")
    with store.write() as transaction:
        change = {"message": "x"}
        assert not transaction.update_run("r0", change, state="open")
        assert not transaction.update_run("r0", change, state=("open", "sealed"))
        assert not transaction.update_run("r0", change, state="working", stage="hash")
        assert not transaction.update_run("r0", change, state="working", stage=None)
        assert not transaction.update_run("r0", change, state="working", waiting_for="seed")
        assert not transaction.update_run("r0", change, state="working", holder="somebody")
        assert not transaction.update_run("unknown", change, state="working")
        assert transaction.get_run("r0").message == ""
        assert transaction.update_run("r0", {}, state="working")
        assert transaction.update_run("r0", change, state=("sealed", "working"), stage="tally", waiting_for=None,
                                      holder=None)
        assert transaction.get_run("r0").message == "x"


@pytest.mark.parametrize("changes", [
    {"owner": "me"}, {"id": "r9"}, {"ledger_salt": b""}, {"lease_holder": "me"}, {"nonsense": 1}, {"state": "done"},
    {"stage": "wash"},
])
def test_update_run_refuses_what_must_not_change(store: SqliteStore, changes: dict) -> None:
    """Owner, identity and salt are fixed, leases have their own methods, unknown states do not exist."""
    add_runs(store, 1)
    with store.write() as transaction, pytest.raises(Defect):
        transaction.update_run("r0", changes, state="open")


def test_of_many_who_move_a_run_exactly_one_wins(store: SqliteStore) -> None:
    """Compare-and-swap holds between threads and between two openings of the same file."""
    add_runs(store, 20, state="certified")
    other = SqliteStore(path_of(store))

    def collect(ticket: int) -> list[str]:
        won = []
        for number in range(20):
            with (store, other)[ticket % 2].write() as transaction:
                change = {"state": "collected", "message": str(ticket)}
                if transaction.update_run(f"r{number}", change, state="certified"):
                    won.append(f"r{number}")
        return won

    with ThreadPoolExecutor(8) as pool:
        won = [run_id for wins in pool.map(collect, range(8)) for run_id in wins]
    other.close()
    assert sorted(won) == sorted(f"r{number}" for number in range(20))


def test_reading_then_writing_never_fails_for_want_of_a_lock(store: SqliteStore) -> None:
    """A transaction that reads first and writes later waits for its turn at the beginning."""
    add_runs(store, 1)
    other = SqliteStore(path_of(store))

    def count_up(ticket: int) -> None:
        for _ in range(10):
            with (store, other)[ticket % 2].write() as transaction:
                before = transaction.get_run("r0").hash_rounds
                assert transaction.update_run("r0", {"hash_rounds": before + 1}, state="open")

    with ThreadPoolExecutor(8) as pool:
        list(pool.map(count_up, range(8)))
    other.close()
    with store.read() as reading:
        assert reading.get_run("r0").hash_rounds == 80


def test_segments_are_unique_counted_and_in_order(store: SqliteStore) -> None:
    """A second segment of the same number is not taken; totals include runs without any."""
    add_runs(store, 2)
    with store.write() as transaction:
        assert transaction.insert_segment(segment("r0", 10, 50))
        assert transaction.insert_segment(segment("r0", 2, 7))
        assert not transaction.insert_segment(segment("r0", 2, 8))
    with store.read() as reading:
        assert [row.number for row in reading.list_segments("r0")] == [2, 10]
        assert reading.segment_totals(["r0", "r1"]) == {"r0": SegmentTotals(2, 57), "r1": SegmentTotals()}
        assert reading.segment_totals([]) == {}


def test_events_count_from_one_within_their_run(store: SqliteStore) -> None:
    """Numbers have no holes, and a watcher that knows the last number misses nothing."""
    add_runs(store, 2)
    with store.write() as transaction:
        assert [transaction.append_event("r0", {"fraction": n / 4}) for n in range(4)] == [1, 2, 3, 4]
        assert transaction.append_event("r1", {}) == 1
    with store.read() as reading:
        assert [event.seq for event in reading.events_after("r0", 2)] == [3, 4]
        assert reading.events_after("r0", 0, limit=1) == [EventRow("r0", 1, {"fraction": 0.0})]
        assert reading.last_event("r0") == EventRow("r0", 4, {"fraction": 0.75})


def test_rows_that_refer_to_nothing_or_stand_twice_are_defects(store: SqliteStore) -> None:
    """Identity and references are checked by the database itself."""
    add_runs(store, 1)
    for wrong in (lambda w: w.insert_run(run("r0")), lambda w: w.insert_run(run("r5", declaration_id="none")),
                  lambda w: w.insert_declaration(declaration()), lambda w: w.append_event("none", {}),
                  lambda w: w.insert_segment(segment("none", 1)), lambda w: w.insert_run(run("r6", state="asleep"))):
        with pytest.raises(Defect), store.write() as transaction:
            wrong(transaction)


def test_an_idempotency_key_keeps_its_first_answer(store: SqliteStore) -> None:
    """Keys belong to an owner; old ones can be forgotten."""
    first = IdempotencyRow("north", "k", "sha256:1", 201, {"id": "r1"}, 100.0)
    with store.write() as transaction:
        assert transaction.insert_idempotent(first)
        assert not transaction.insert_idempotent(replace(first, status=409))
        assert transaction.insert_idempotent(replace(first, owner="south", created_s=300.0))
        assert transaction.get_idempotent("north", "k") == first
        assert transaction.drop_idempotent(200.0) == 1
        assert transaction.get_idempotent("north", "k") is None
        assert transaction.get_idempotent("south", "k") is not None


def test_tokens_are_revoked_once(store: SqliteStore) -> None:
    """Revoking says whether it changed anything; the time of the last use is kept."""
    with store.write() as transaction:
        transaction.insert_token(TokenRow("t1", "ab" * 32, "north", ("submit",), "", TIME))
        transaction.touch_token("t1", "2031-05-05T00:00:00Z")
        assert transaction.revoke_token("t1", TIME)
        assert not transaction.revoke_token("t1", "2031-06-01T00:00:00Z")
        assert not transaction.revoke_token("t2", TIME)
        row = transaction.get_token("t1")
    assert (row.revoked, row.last_used) == (TIME, "2031-05-05T00:00:00Z")


def test_claims_take_the_longest_waiting_run_that_is_ready(store: SqliteStore) -> None:
    """Open, final, waiting and postponed runs are left alone; the order is that of sealing."""
    with store.write() as transaction:
        for row in (run("open"), run("done", state="certified"), run("waits", state="working", waiting_for="seed"),
                    run("later", state="sealed", sealed_time="2031-01-01T00:00:00Z", not_before_s=2000.0),
                    run("new", state="sealed", sealed_time="2031-01-03T00:00:00Z"),
                    run("old", state="working", stage="hash", sealed_time="2031-01-02T00:00:00Z")):
            transaction.insert_run(row)
        claimed = transaction.claim_next_run("w:1", 1000.0, 60.0)
        assert (claimed.id, claimed.lease_holder, claimed.lease_until_s, claimed.attempts) == ("old", "w:1", 1060.0, 1)
        assert transaction.claim_next_run("w:1", 1000.0, 60.0).id == "new"
        assert transaction.claim_next_run("w:2", 1000.0, 60.0) is None
        assert transaction.claim_next_run("w:2", 2000.0, 60.0).id == "later"


def test_a_lease_ends_by_time_and_is_extended_by_its_holder_only(store: SqliteStore) -> None:
    """Whoever lost the lease is told so by heartbeat, release and update."""
    add_runs(store, 1, state="sealed")
    with store.write() as transaction:
        assert transaction.claim_next_run("w:1", 1000.0, 60.0)
        assert transaction.heartbeat("r0", "w:1", 1050.0, 60.0)
        assert not transaction.heartbeat("r0", "w:2", 1050.0, 60.0)
        assert transaction.claim_next_run("w:2", 1100.0, 60.0) is None
        assert transaction.claim_next_run("w:2", 1110.0, 60.0).attempts == 2
        assert not transaction.heartbeat("r0", "w:1", 1111.0, 60.0)
        assert not transaction.release("r0", "w:1")
        assert not transaction.update_run("r0", {"stage": "tally"}, state="sealed", holder="w:1")
        assert transaction.update_run("r0", {"stage": "tally"}, state="sealed", holder="w:2")
        assert transaction.release("r0", "w:2", not_before_s=1200.0)
        assert transaction.claim_next_run("w:1", 1199.0, 60.0) is None
        assert transaction.claim_next_run("w:1", 1200.0, 60.0).id == "r0"


def test_threads_that_share_an_id_never_share_a_run(store: SqliteStore) -> None:
    """Eight threads of one process claim every run exactly once."""
    add_runs(store, 40, state="sealed")

    def claim_all(_: int) -> list[str]:
        names = []
        while True:
            with store.write() as transaction:
                claimed = transaction.claim_next_run(worker_id(), 1000.0, 60.0)
            if claimed is None:
                return names
            names.append(claimed.id)

    with ThreadPoolExecutor(8) as pool:
        names = [name for part in pool.map(claim_all, range(8)) for name in part]
    assert sorted(names) == sorted(f"r{number}" for number in range(40))


def test_processes_claim_every_run_exactly_once(store: SqliteStore) -> None:
    """Four processes started together, on one file."""
    add_runs(store, 40, state="sealed")
    children = [child("claim_all", path_of(store)) for _ in range(4)]
    assert [one.stdout.readline() for one in children] == ["ready\n"] * 4
    for one in children:
        one.stdin.write("go\n")
        one.stdin.flush()
    names = []
    for one in children:
        while (line := one.stdout.readline()) != "done\n":
            assert line, "a child ended before it was done"
            names.append(line.strip())
    for one in children:
        one.communicate(timeout=60)
    assert [one.returncode for one in children] == [0] * 4
    assert sorted(names) == sorted(f"r{number}" for number in range(40))


def test_the_lease_of_a_killed_process_ends_at_once(store: SqliteStore) -> None:
    """While the holder lives its run is not taken; when it is killed, the next claim gets it without waiting."""
    add_runs(store, 1, state="sealed")
    holder = child("claim_and_hold", path_of(store))
    assert holder.stdout.readline() == "r0\n"
    with store.write() as transaction:
        assert transaction.claim_next_run(worker_id(), 1001.0, 60.0) is None
    holder.kill()
    holder.communicate()
    with store.write() as transaction:
        assert transaction.claim_next_run(worker_id(), 1001.0, 60.0).id == "r0"


def test_only_what_is_certainly_dead_is_called_dead() -> None:
    """Itself, other machines, other boots and unreadable ids count as alive; a reused pid does not."""
    host, boot, namespace, pid, start = worker_id().split(":")
    assert not is_dead(worker_id())
    for other in ("", "w:1", f"{host}::{namespace}:{pid}:{start}", f"{host}:other-boot:{namespace}:{pid}:1",
                  f"{host}:{boot}:1:{pid}:1", f"{host}:{boot}:{namespace}:x:{start}"):
        assert not is_dead(other)
    assert is_dead(f"{host}:{boot}:{namespace}:{pid}:{int(start) + 1}")
    assert is_dead(f"{host}:{boot}:{namespace}:{2**22 + 1}:{start}")     # above the largest pid Linux gives out


def test_what_was_acknowledged_survives_kill_9(store: SqliteStore) -> None:
    """Every transaction acknowledged before the kill is whole, at most the one in flight is there besides."""
    for acknowledged_at_least in (1, 7, 23):
        writer = child("write_on", path_of(store))
        lines = [writer.stdout.readline() for _ in range(acknowledged_at_least)]
        writer.kill()
        lines += writer.communicate()[0].splitlines(keepends=True)
        acknowledged = sum(line.endswith("\n") for line in lines)
        reopened = SqliteStore(path_of(store))
        with reopened.write() as transaction:
            runs = transaction.list_runs(limit=100_000)
            assert acknowledged <= len(runs) <= acknowledged + 1
            assert all(len(transaction.events_after(row.id)) == 1 for row in runs)
            for table in ("events", "runs"):
                transaction._connection.exec_driver_sql(f"DELETE FROM {table}")
        reopened.close()
        assert sqlite3.connect(path_of(store)).execute("PRAGMA integrity_check").fetchone() == ("ok",)


def test_the_database_is_set_to_keep_what_it_acknowledges(store: SqliteStore) -> None:
    """WAL, synchronous FULL, secure_delete and foreign keys are on for every connection, and the file is private."""
    with store.read() as reading:
        values = [reading._connection.exec_driver_sql(f"PRAGMA {name}").scalar_one()
                  for name in ("journal_mode", "synchronous", "secure_delete", "foreign_keys")]
    assert values == ["wal", 2, 1, 1]
    assert path_of(store).stat().st_mode & 0o777 == 0o600 and path_of(store).parent.stat().st_mode & 0o777 == 0o700


def test_another_version_is_refused_with_instructions_and_left_alone(store: SqliteStore) -> None:
    """A database of another layout is neither used nor changed."""
    store.close()
    raw = sqlite3.connect(path_of(store))
    raw.execute("UPDATE meta SET value = '999' WHERE key = 'schema_version'")
    raw.commit()
    raw.close()
    with pytest.raises(InputError, match="layout 999.*start the version") as caught:
        SqliteStore(path_of(store))
    assert caught.value.code == "store-version"


def test_a_file_that_is_no_database_is_a_storage_failure(tmp_path: Path) -> None:
    """A damaged database file stops the service and is not replaced by an empty one."""
    path = tmp_path / "bellassay.sqlite"
    path.write_bytes(b"not a database, " * 1000)
    with pytest.raises(StorageFailed):
        SqliteStore(path)
    assert path.read_bytes() == b"not a database, " * 1000


def test_a_writer_that_cannot_get_its_turn_is_told_to_come_back(store: SqliteStore) -> None:
    """Both a busy process and another program holding the lock end in Unavailable."""
    impatient = SqliteStore(path_of(store), wait_s=0.05)
    with store.write(), pytest.raises(Unavailable) as caught, impatient.write():
        pass
    assert caught.value.code == "store-busy"
    with impatient.write(), pytest.raises(Unavailable), ThreadPoolExecutor(1) as pool:
        pool.submit(lambda: impatient.write().__enter__()).result()
    impatient.close()


def test_many_processes_may_make_the_database_at_once(tmp_path: Path) -> None:
    """The tables are made once, and nobody starting at the same moment fails."""
    children = [child("claim_all", tmp_path / "new" / "bellassay.sqlite") for _ in range(4)]
    for one in children:
        assert one.communicate("go\n", timeout=60)[0] == "ready\ndone\n"
        assert one.returncode == 0


def test_a_forked_child_does_not_use_its_parents_connections(store: SqliteStore) -> None:
    """A child made by fork reads and writes through connections of its own."""
    add_runs(store, 1)
    pid = os.fork()
    if pid == 0:
        status = 1
        try:
            with store.write() as transaction:
                status = 0 if transaction.update_run("r0", {"message": "child"}, state="open") else 2
        finally:
            os._exit(status)
    assert os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) == 0
    with store.read() as reading:
        assert reading.get_run("r0").message == "child"


def test_check_says_whether_the_database_answers(store: SqliteStore) -> None:
    """Readiness is silence."""
    assert store.check() is None
