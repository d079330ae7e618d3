"""The append-only signed log of declarations, seals, seeds, certificates, refusals, collections and erasures.

`append` works inside the caller's transaction, so that a change and its entry are durable together or not at all: entry
bytes, leaf hash, new subtree hashes, new head and the checkpoint signed for it. Ed25519 is deterministic, so signing
twice says the same.

A log restored from an old backup would grow a second, different history under the same signature. Against that a copy
of the newest signed checkpoint lies outside the database; it is written before the caller's `write()` returns, so
whoever was told of an entry can rely on the copy knowing it. The ledger does not open if the database is behind its
copy, or has another history.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from extractor.errors import Defect, InputError, ProofError
from extractor.seal import checkpoint as checkpoints
from extractor.seal import merkle, note
from extractor.seal.canonical import canonical_bytes
from service.errors import StorageFailed
from service.keys import ledger_signer
from service.store.contracts import LedgerEntryRow, LedgerHeadRow, Reading, Store, Transaction
from service.store.durable import exclusive, storage_errors, write_durably

ENTRY_FORMAT = "bellassay ledger entry 1"
KINDS = ("declaration", "seal", "seed", "certificate", "refusal", "result", "collection", "erasure")
ENTRIES_LIMIT = 1000            # entries handed out at once
ENTRY_BYTES = 60_000            # leaves of tile-based logs stay below 64 KiB


class Ledger:
    """The log of one data folder. Safe for several threads and processes."""

    def __init__(self, store: Store, signer: note.Signer, origin: str, copy_path: Path) -> None:
        """Use `open`, which checks the database against its copy."""
        self._store, self._signer, self._origin, self._copy_path = store, signer, origin, copy_path

    @classmethod
    def open(cls, store: Store, *, key_path: Path, origin: str, copy_path: Path) -> Ledger:
        """The ledger, with a new signing key if it is the very first start.

        Errors raised: InputError with instructions if the key, the copy or the newest entries are missing, or the
        origin or key is another one than before.
        """
        copy = _read_copy(copy_path)        # before the database, which may only be ahead of it
        with store.read() as reading:
            head = reading.ledger_head()
        ledger = cls(store, ledger_signer(key_path, origin, create=copy is None and head is None), origin, copy_path)
        if copy is None:
            if head is not None:
                raise InputError(
                    f"{copy_path} is missing, but the ledger has {head.size} entries. Put it back. Only if it is lost "
                    "for good and nobody holds a checkpoint of more entries: write the column checkpoint of the table "
                    "ledger_head into that file with the sqlite3 program, and start again.",
                    code="ledger-copy-missing")
            ledger._keep_copy(0, ledger._sign(0, merkle.root(0, _no_hashes)))
        else:
            ledger._check_copy(copy)
        return ledger

    @property
    def verifier_text(self) -> str:
        """The public key in the form auditors keep: name, key id and key."""
        return self._signer.verifier_text

    def append(self, transaction: Transaction, kind: str, subject: str, body: Mapping[str, Any], time: str) -> int:
        """Adds an entry about the object `subject` inside `transaction`; returns its index.

        time   RFC 3339 UTC, whole seconds, e.g. "2031-05-04T09:30:00Z"
        The head is locked to the transaction; entries of several appends in one transaction follow each other.
        """
        if kind not in KINDS:
            raise Defect(f"{kind!r} is no kind of ledger entry")
        entry = canonical_bytes(
            {"format": ENTRY_FORMAT, "kind": kind, "time": time, "subject": subject, "body": dict(body)})
        if len(entry) > ENTRY_BYTES:
            raise Defect(f"a ledger entry of {len(entry)} bytes is too large")
        head = transaction.ledger_head()
        size = head.size if head else 0
        leaf = merkle.leaf_hash(entry)
        nodes = merkle.append_nodes(size, leaf, transaction.ledger_nodes)
        root = merkle.root(size + 1, _with_new(transaction, nodes))
        signed = self._sign(size + 1, root)
        transaction.append_ledger(LedgerEntryRow(size, kind, subject, time, entry, leaf), nodes,
                                  LedgerHeadRow(size + 1, root, signed))
        transaction.after_commit(lambda: self._keep_copy(size + 1, signed))
        return size

    @property
    def signer(self) -> note.Signer:
        """Signs reports with the ledger's key."""
        return self._signer

    def time(self, reading: Reading, now: str) -> str:
        """`now`, but never before the newest entry: a clock set back must not make the log contradict itself."""
        head = reading.ledger_head()
        newest = reading.ledger_entry(head.size - 1) if head else None
        return now if newest is None else max(now, newest.time)

    def checkpoint(self) -> str:
        """The newest signed checkpoint (of an empty tree before the first entry)."""
        with self._store.read() as reading:
            head = reading.ledger_head()
        return head.checkpoint if head else self._sign(0, merkle.root(0, _no_hashes))

    def size(self) -> int:
        with self._store.read() as reading:
            head = reading.ledger_head()
        return head.size if head else 0

    def entries(self, start: int, end: int) -> list[LedgerEntryRow]:
        """Entries start <= index < end, at most ENTRIES_LIMIT of them.

        Errors raised: InputError if the range is empty, negative or begins beyond the end of the log.
        """
        size = self.size()
        if not 0 <= start < end or start >= size:
            raise InputError(f"the range {start}..{end} is not one of 0..{size}", code="out-of-range", field="start")
        with self._store.read() as reading:
            return reading.ledger_entries(start, min(end, start + ENTRIES_LIMIT))

    def inclusion(self, index: int, size: int) -> list[bytes]:
        """Proof hashes that entry `index` is in the tree of the first `size` entries; InputError if it cannot be."""
        with self._store.read() as reading:
            _inside(reading, size, "size", 1)
            if not 0 <= index < size:
                raise InputError(f"entry {index} is not among the first {size}", code="out-of-range", field="index")
            return list(merkle.prove_inclusion(index, size, reading.ledger_nodes))

    def prove(self, reading: Reading, index: int, size: int) -> list[bytes]:
        """The same within a snapshot that is already open."""
        return list(merkle.prove_inclusion(index, size, reading.ledger_nodes))

    def consistency(self, old: int, size: int) -> list[bytes]:
        """Proof hashes that the tree of `size` entries continues the tree of `old`, 1 <= old <= size."""
        with self._store.read() as reading:
            _inside(reading, size, "size", 1)
            if not 1 <= old <= size:
                raise InputError(f"{old} is not in 1..{size}", code="out-of-range", field="old")
            return list(merkle.prove_consistency(old, size, reading.ledger_nodes))

    def at(self, index: int) -> tuple[LedgerEntryRow, list[bytes], str]:
        """An entry, its inclusion proof in the newest tree, and that tree's signed checkpoint, from one snapshot."""
        with self._store.read() as reading:
            head, row = reading.ledger_head(), reading.ledger_entry(index)
            if head is None or row is None:
                raise InputError(f"there is no entry {index}", code="out-of-range", field="index")
            return row, list(merkle.prove_inclusion(index, head.size, reading.ledger_nodes)), head.checkpoint

    def _sign(self, size: int, root: bytes) -> str:
        return note.sign(checkpoints.format(self._origin, size, root), self._signer)

    def _opened(self, signed: str) -> tuple[int, bytes]:
        """Size and root of a signed checkpoint of this ledger. Errors raised: ProofError."""
        opened = checkpoints.parse(note.open(signed, [self._signer.verifier]))
        if opened.origin != self._origin:
            raise ProofError(f"the checkpoint is of the ledger {opened.origin}")
        return opened.size, opened.root

    def _check_copy(self, copy: str) -> None:
        try:
            size, root = self._opened(copy)
        except (ProofError, InputError) as fault:
            raise InputError(
                f"{self._copy_path} was not signed by this ledger's key under the name {self._origin}: {fault}. Put "
                "back the key file and the setting ledger_origin that belong to this data folder.",
                code="ledger-key-changed") from None
        with self._store.read() as reading:
            head = reading.ledger_head()
            now = head.size if head else 0
            if now < size:
                raise InputError(
                    f"the database has {now} ledger entries, but {size} were signed and may be known outside: it was "
                    "restored from an old copy or lost its end. Put the newest database in place. If it is lost for "
                    "good, this ledger cannot be continued: keep the folder for the auditors and start with a new "
                    "data folder and another ledger_origin.", code="ledger-behind")
            try:
                same = merkle.root(size, reading.ledger_nodes) == root and (
                    head is None or self._opened(head.checkpoint) == (now, merkle.root(now, reading.ledger_nodes)))
            except (ProofError, Defect):            # a head that is not signed, a hash that is missing
                same = False
        if not same:
            raise InputError(
                f"the ledger in the database has another history than the checkpoint of {size} entries that was "
                f"signed and is kept in {self._copy_path}. Put back the database and the copy that belong "
                "together.", code="ledger-forked")
        if head is not None and now > size:         # the process ended between commit and copy
            self._keep_copy(now, head.checkpoint)

    def _keep_copy(self, size: int, signed: str) -> None:
        """Writes the copy durably, unless one of a larger tree is there already."""
        with exclusive(self._copy_path):
            there = _read_copy(self._copy_path)
            try:
                if there is not None and self._opened(there)[0] >= size:
                    return
            except (ProofError, InputError) as fault:
                raise StorageFailed(f"{self._copy_path.name} was changed by somebody else: {fault}",
                                    code="ledger-copy-changed") from None
            write_durably(self._copy_path, signed.encode(), 0o600)


def _read_copy(path: Path) -> str | None:
    try:
        with storage_errors(path):
            return path.read_bytes().decode("utf-8", "replace")     # damage is found by the signature
    except FileNotFoundError:
        return None


def _no_hashes(places: Sequence[tuple[int, int]]) -> list[bytes]:
    if places:
        raise Defect("an empty tree has no hashes")
    return []


def _inside(reading: Reading, size: int, field: str, least: int) -> None:
    head = reading.ledger_head()
    now = head.size if head else 0
    if not least <= size <= now:
        raise InputError(f"the ledger has {now} entries; {size} is not in {least}..{now}",
                         code="out-of-range", field=field)


def _with_new(reading: Reading, nodes: Sequence[tuple[int, int, bytes]]) -> merkle.ReadHashes:
    """Reads subtrees from the store and from those about to be stored."""
    new = {(level, index): digest for level, index, digest in nodes}

    def read(places: Sequence[tuple[int, int]]) -> list[bytes]:
        stored = iter(reading.ledger_nodes([place for place in places if tuple(place) not in new]))
        return [new[tuple(place)] if tuple(place) in new else next(stored) for place in places]

    return read
