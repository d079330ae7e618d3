"""The embedded store: one SQLite file, any number of threads and processes of one machine.

WAL journal (readers never wait for the writer), synchronous FULL (an acknowledged change survives a power loss), BEGIN
IMMEDIATE for every writer (a transaction that begins reading and writes later cannot wait for its turn and would fail
however long the time-out), secure_delete (deleted rows are overwritten). The file must lie on a local disk: WAL needs
shared memory between the processes.
"""

from __future__ import annotations

import json
import os
import sqlite3
import threading
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, create_engine, event, insert, inspect, select
from sqlalchemy.exc import DBAPIError

from extractor.errors import InputError
from service.errors import StorageFailed, Unavailable
from service.store import schema
from service.store.durable import exclusive, make_folder, sync_folder
from service.store.statements import SqlReading, SqlTransaction

_BUSY = (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED)
_POOL = 8               # connections kept open; more are opened when needed


class SqliteStore:
    """`contracts.Store` in the file `path`, made if missing. Safe for threads; a forked child gets fresh connections.

    wait_s   longest wait for another writer before `Unavailable` (code "store-busy")
    Errors raised on opening: InputError (code "store-version") if another version of the program made the file.
    """

    def __init__(self, path: Path, *, wait_s: float = 30.0) -> None:
        self._path, self._wait_s = path, wait_s
        self._turn = threading.Lock()       # threads of one process queue here instead of polling SQLite's lock
        self._process = os.getpid()
        make_folder(path.parent)
        self._engine = create_engine(
            f"sqlite:///{path}", pool_size=_POOL, max_overflow=-1, hide_parameters=True,
            connect_args={"timeout": wait_s, "check_same_thread": False}, json_serializer=_json_text)
        event.listen(self._engine, "connect", self._prepare)
        event.listen(self._engine, "begin", _begin)
        # One process at a time: SQLite answers "locked" at once, time-out or not, to two that switch to WAL together.
        with _translated(), exclusive(path):
            new = not path.exists()
            if new:
                os.close(os.open(path, os.O_WRONLY | os.O_CREAT, 0o600))
            with closing(sqlite3.connect(path, timeout=wait_s)) as raw:
                raw.execute("PRAGMA journal_mode = WAL")        # stays with the file
            with self._connected(writing=True) as connection:
                self._make_tables(connection)
            if new:
                sync_folder(path.parent)

    @contextmanager
    def read(self) -> Iterator[SqlReading]:
        """A consistent snapshot for the length of the block."""
        with _translated(), self._connected(writing=False) as connection:
            yield SqlReading(connection)

    @contextmanager
    def write(self) -> Iterator[SqlTransaction]:
        """One durable transaction; see `contracts`. Do not open one inside another, nor wait for slow things within."""
        if not self._turn.acquire(timeout=self._wait_s):
            raise Unavailable("the database is busy", code="store-busy", retry_after_s=1.0)
        try:
            with _translated(), self._connected(writing=True) as connection:
                transaction = SqlTransaction(connection)
                yield transaction
        finally:
            self._turn.release()
        for action in transaction.actions:
            action()

    def check(self) -> None:
        """Reads one row."""
        with _translated(), self._connected(writing=False) as connection:
            connection.execute(select(schema.meta.c.value)).first()

    def close(self) -> None:
        """Moves the WAL into the database file and empties it, if no other process is in the way."""
        try:
            raw = self._engine.raw_connection()
            try:
                raw.execute("PRAGMA wal_checkpoint(TRUNCATE)")
            finally:
                raw.close()
        except sqlite3.OperationalError:
            pass                            # another process is using it; the WAL stays and is as good
        self._engine.dispose()

    @contextmanager
    def _connected(self, *, writing: bool) -> Iterator[Connection]:
        if self._process != os.getpid():    # SQLite connections must not cross a fork
            self._engine.dispose(close=False)
            self._process, self._turn = os.getpid(), threading.Lock()
        with self._engine.connect() as connection:
            with connection.execution_options(writing=writing).begin():
                yield connection

    def _prepare(self, raw: Any, record: Any) -> None:
        raw.isolation_level = None          # transactions begin in _begin, not by the driver's guess
        for pragma in ("synchronous = FULL", "secure_delete = ON", "foreign_keys = ON"):
            raw.execute(f"PRAGMA {pragma}")

    def _make_tables(self, connection: Connection) -> None:
        if not inspect(connection).has_table("meta"):
            schema.metadata.create_all(connection)
            connection.execute(insert(schema.meta).values(key="schema_version", value=str(schema.VERSION)))
            return
        found = connection.execute(select(schema.meta.c.value).where(schema.meta.c.key == "schema_version")).scalar()
        if found != str(schema.VERSION):
            raise InputError(
                f"{self._path} has the table layout {found}, this program needs {schema.VERSION}; start the version of "
                "the program that made it, or put a matching backup of the whole data folder in place. "
                "Nothing was changed.",
                code="store-version")


def _begin(connection: Connection) -> None:
    writing = connection.get_execution_options().get("writing", False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if writing else "BEGIN")


def _json_text(value: Any) -> str:
    return json.dumps(value, allow_nan=False, separators=(",", ":"))


@contextmanager
def _translated() -> Iterator[None]:
    """Trouble of the database in the service's words; the statement's values never enter a message."""
    try:
        yield
    except (DBAPIError, sqlite3.Error) as fault:
        original = fault.orig if isinstance(fault, DBAPIError) else fault
        code = getattr(original, "sqlite_errorcode", 0) & 0xFF
        if code in _BUSY:
            raise Unavailable("the database is busy", code="store-busy", retry_after_s=1.0) from fault
        if code == sqlite3.SQLITE_FULL:
            raise Unavailable("the data disk is full", code="disk-full", retry_after_s=60.0) from fault
        if code in (sqlite3.SQLITE_IOERR, sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB, sqlite3.SQLITE_CANTOPEN,
                    sqlite3.SQLITE_READONLY):
            raise StorageFailed(f"the database failed: {original}", code="store-failed") from fault
        raise
