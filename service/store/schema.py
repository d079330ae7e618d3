"""The tables, and rows to and from them. Column names are the field names of the rows in `contracts`.

A change of this file is a new VERSION. An older or newer database is refused with instructions, never changed silently.
"""

from __future__ import annotations

import dataclasses
from typing import Any, TypeVar

from sqlalchemy import (
    JSON, BigInteger, Column, Float, ForeignKey, Index, Integer, LargeBinary, MetaData, Row, String, Table, Text,
    UniqueConstraint,
)

VERSION = 1
metadata = MetaData()
_Json = JSON(none_as_null=True)
_Whole = BigInteger().with_variant(Integer, "sqlite")      # SQLite counts up only in columns called INTEGER
_T = TypeVar("_T")

meta = Table("meta", metadata, Column("key", String(40), primary_key=True), Column("value", Text, nullable=False))

tokens = Table(
    "tokens", metadata,
    Column("id", String(32), primary_key=True),
    Column("digest", String(64), nullable=False),
    Column("owner", String(100), nullable=False),
    Column("scopes", _Json, nullable=False),
    Column("label", Text, nullable=False),
    Column("created", String(20), nullable=False),
    Column("expires_s", Float),
    Column("revoked", String(20)),
    Column("last_used", String(20)),
)

declarations = Table(
    "declarations", metadata,
    Column("number", _Whole, primary_key=True, autoincrement=True),
    Column("id", String(64), nullable=False, unique=True),
    Column("owner", String(100), nullable=False, index=True),
    Column("digest", String(71), nullable=False),
    Column("time", String(20), nullable=False),
    Column("ledger_index", _Whole, nullable=False),
    Column("document", _Json, nullable=False),
    sqlite_autoincrement=True,
)

runs = Table(
    "runs", metadata,
    Column("number", _Whole, primary_key=True, autoincrement=True),
    Column("id", String(64), nullable=False, unique=True),
    Column("owner", String(100), nullable=False, index=True),
    Column("declaration_id", String(64), ForeignKey("declarations.id"), nullable=False, index=True),
    Column("created", String(20), nullable=False),
    Column("ledger_salt", LargeBinary, nullable=False),
    Column("state", String(12), nullable=False, index=True),
    Column("stage", String(12)),
    Column("waiting_for", String(12)),
    Column("fraction", Float, nullable=False),
    Column("eta_s", Float),
    Column("message", Text, nullable=False),
    Column("sealed_segments", _Whole),
    Column("sealed_rounds", _Whole),
    Column("sealed_time", String(20)),
    Column("tally", _Json),
    Column("planes_digest", String(71)),
    Column("score", _Json),
    Column("diagnostics", _Json),
    Column("certificate", LargeBinary),
    Column("certified_length", _Whole),
    Column("available_bits", _Whole),
    Column("seed_source", String(12)),
    Column("seed_bits", _Whole),
    Column("seed_digest", String(76)),
    Column("bits_commitment", String(76)),
    Column("report_digest", String(71)),
    Column("backend", String(40)),
    Column("stage_seconds", _Json, nullable=False),
    Column("hash_rounds", _Whole, nullable=False),
    Column("finished_time", String(20)),
    Column("collected_time", String(20)),
    Column("erased_time", String(20)),
    Column("lease_holder", Text),
    Column("lease_until_s", Float),
    Column("attempts", Integer, nullable=False),
    Column("not_before_s", Float, nullable=False),
    sqlite_autoincrement=True,
)

segments = Table(
    "segments", metadata,
    Column("run_id", String(64), ForeignKey("runs.id"), primary_key=True),
    Column("number", _Whole, primary_key=True, autoincrement=False),
    Column("digest", String(71), nullable=False),
    Column("bytes", _Whole, nullable=False),
    Column("format", String(20), nullable=False),
    Column("rounds", _Whole, nullable=False),
    Column("planes_digest", String(71), nullable=False),
    Column("tally", _Json, nullable=False),
    Column("first_round", _Whole),
    Column("last_round", _Whole),
    Column("no_clicks", _Json, nullable=False),
    Column("file_name", Text),
    Column("received", String(20), nullable=False),
)

events = Table(
    "events", metadata,
    Column("run_id", String(64), ForeignKey("runs.id"), primary_key=True),
    Column("seq", _Whole, primary_key=True, autoincrement=False),
    Column("document", _Json, nullable=False),
)

idempotency = Table(
    "idempotency", metadata,
    Column("owner", String(100), primary_key=True),
    Column("key", String(255), primary_key=True),
    Column("request_digest", String(71), nullable=False),
    Column("status", Integer, nullable=False),
    Column("response", _Json, nullable=False),
    Column("created_s", Float, nullable=False, index=True),
)

ledger_entries = Table(
    "ledger_entries", metadata,
    Column("index", _Whole, primary_key=True, autoincrement=False),
    Column("kind", String(20), nullable=False),
    Column("subject", String(64), nullable=False, index=True),
    Column("time", String(20), nullable=False),
    Column("entry", LargeBinary, nullable=False),
    Column("leaf_hash", LargeBinary, nullable=False),
)

ledger_nodes = Table(
    "ledger_nodes", metadata,
    Column("level", Integer, primary_key=True, autoincrement=False),
    Column("index", _Whole, primary_key=True, autoincrement=False),
    Column("hash", LargeBinary, nullable=False),
)

ledger_head = Table(
    "ledger_head", metadata,
    Column("one", Integer, primary_key=True, autoincrement=False),      # always 1
    Column("size", _Whole, nullable=False),
    Column("root", LargeBinary, nullable=False),
    Column("checkpoint", Text, nullable=False),
    UniqueConstraint("size"),
)

Index("runs_by_rounds", runs.c.planes_digest)
Index("segments_by_rounds", segments.c.planes_digest)
Index("runs_waiting", runs.c.state, runs.c.sealed_time, runs.c.number)

_TUPLES = {"scopes", "tally", "no_clicks"}      # JSON lists that rows hold as tuples


def values_of(row: Any, *, without: tuple[str, ...] = ()) -> dict[str, Any]:
    """Column values of a row dataclass."""
    return {item.name: getattr(row, item.name) for item in dataclasses.fields(row) if item.name not in without}


def row_from(kind: type[_T], found: Row) -> _T:
    """The row dataclass from a result row that holds at least its fields."""
    values = {item.name: found._mapping[item.name] for item in dataclasses.fields(kind)}
    for name in _TUPLES & values.keys():
        if values[name] is not None:
            values[name] = tuple(values[name])
    return kind(**values)
