"""Run keys, tokens and the data folder: who can read what, and that erased means erased."""

from __future__ import annotations

import os
import resource
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from extractor.errors import Defect, InputError
from service.custody.run_keys import RunKeys
from service.custody.tokens import SCOPES, Identity, identify, new_token
from service.custody.vault import VaultReader, read_vault, write_vault
from service.errors import DamagedFile, KeyErased, StorageFailed, Unavailable
from service.store import blobs
from service.store.blobs import Blobs
from service.store.durable import create_durably, temporary_path, write_durably
from service.store.sqlite import SqliteStore
from tests.service.store_helpers import TIME, declaration, run


@pytest.fixture
def place(tmp_path: Path) -> Blobs:
    made = Blobs(tmp_path / "data")
    made.prepare()
    return made


def keys_of(place: Blobs) -> RunKeys:
    return RunKeys.open(place.runs, place.data / "keys" / "master.key")


def all_bytes(folder: Path) -> bytes:
    return b"".join(path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file())


def test_a_run_has_one_key_and_keeps_it(place: Blobs) -> None:
    """The key is made once, differs between runs, and another opening of the folder finds the same."""
    keys = keys_of(place)
    first = keys.create("r1")
    assert keys.create("r1") == first == keys_of(place).load("r1") and len(first) == 32
    assert keys.create("r2") != first and keys.exists("r2") and not keys.exists("r3")
    assert (place.runs / "r1" / "run.key").stat().st_mode & 0o777 == 0o600
    assert (place.data / "keys" / "master.key").stat().st_mode & 0o777 == 0o600


def test_of_many_who_make_a_key_all_get_the_same(place: Blobs) -> None:
    """Neither the master key nor a run key is replaced by whoever comes second."""
    with ThreadPoolExecutor(8) as pool:
        made = list(pool.map(lambda n: keys_of(place).create("r1"), range(16)))
    assert len(set(made)) == 1


def test_every_change_of_a_key_file_is_noticed(place: Blobs) -> None:
    """Each byte changed, a byte less, a byte more, or the file of another run in its place."""
    keys = keys_of(place)
    keys.create("r1"), keys.create("r2")
    path = place.runs / "r1" / "run.key"
    raw = path.read_bytes()
    wrong = [raw[:n] + bytes([raw[n] ^ 4]) + raw[n + 1:] for n in range(len(raw))]
    for content in (*wrong, raw[:-1], raw + b"\x00", b"", (place.runs / "r2" / "run.key").read_bytes()):
        path.write_bytes(content)
        with pytest.raises(DamagedFile):
            keys.load("r1")


def test_another_master_key_opens_nothing(place: Blobs) -> None:
    """A run key belongs to the master key it was made under."""
    keys_of(place).create("r1")
    with pytest.raises(DamagedFile):
        RunKeys(place.runs, bytes(32)).load("r1")


def test_a_lost_master_key_is_not_replaced(place: Blobs) -> None:
    """While runs need it, a missing master key is an error with instructions, not a reason to make a new one."""
    keys_of(place).create("r1")
    (place.data / "keys" / "master.key").unlink()
    with pytest.raises(InputError, match="put it back") as caught:
        keys_of(place)
    assert caught.value.code == "master-key-missing" and not (place.data / "keys" / "master.key").exists()
    with pytest.raises(InputError):
        RunKeys.open(place.data / "other", place.data / "none.key", create=False)


def test_a_master_key_others_can_read_is_refused(place: Blobs) -> None:
    """Wrong permissions and wrong lengths are told with what to do; a group may read a key handed over that way."""
    keys_of(place)
    path = place.data / "keys" / "master.key"
    for mode, right in ((0o644, False), (0o620, False), (0o601, False), (0o440, True), (0o400, True)):
        path.chmod(mode)
        if right:
            keys_of(place)
        else:
            with pytest.raises(InputError, match="chmod 600"):
                keys_of(place)
    path.chmod(0o600)
    path.write_bytes(bytes(31))
    with pytest.raises(InputError, match="31 bytes"):
        keys_of(place)


def test_after_erasing_nothing_of_the_run_can_be_read(place: Blobs) -> None:
    """Rounds, seed, partial hash and bits are gone with the key; other runs are untouched; repeating is harmless."""
    keys, secret = keys_of(place), np.random.default_rng(5).bytes(4096)
    for run_id in ("r1", "r2"):
        place.make(run_id)
        for name in (blobs.segment_name(1), blobs.SEED, blobs.PARTIAL, blobs.BITS):
            write_vault(place.path(run_id, name), keys.create(run_id), name, secret)
    wrapped = (place.runs / "r1" / "run.key").read_bytes()
    assert keys.erase("r1") and not keys.erase("r1") and not keys.erase("never-was")
    with pytest.raises(KeyErased):
        keys.load("r1")
    assert wrapped[28:] not in all_bytes(place.data)
    with pytest.raises(DamagedFile):
        VaultReader(place.path("r1", blobs.BITS), keys.load("r2"), blobs.BITS)
    assert read_vault(place.path("r2", blobs.BITS), keys.load("r2"), blobs.BITS) == secret
    (place.runs / "r1" / "report.json").write_bytes(b"{}")
    place.remove_secrets("r1"), place.remove_secrets("r1"), place.remove_secrets("never-was")
    assert [path.name for path in (place.runs / "r1").iterdir()] == ["report.json"]


def test_erasing_overwrites_the_blocks_of_the_key_file(place: Blobs) -> None:
    """Whoever still holds the file open after erasing reads no wrapped key."""
    keys = keys_of(place)
    keys.create("r1")
    with open(place.runs / "r1" / "run.key", "rb") as held:
        before = held.read()
        keys.erase("r1")
        held.seek(0)
        after = held.read()
    assert len(after) == len(before) and not any(before[n:n + 8] in after for n in range(len(before) - 8))


def test_the_data_folder_holds_neither_keys_nor_plaintext(place: Blobs) -> None:
    """A scan of every byte on disk, database and its journal included, finds no run key, secret or token."""
    keys = keys_of(place)
    store = SqliteStore(place.data / "bellassay.sqlite")
    secret = b"".join(np.random.default_rng(n).bytes(64) for n in range(100))
    place.make("r1")
    key = keys.create("r1")
    for name in (blobs.segment_name(1), blobs.SEED, blobs.PARTIAL, blobs.BITS):
        write_vault(place.path("r1", name), key, name, secret)
    with store.write() as transaction:
        transaction.insert_declaration(declaration())
        transaction.insert_run(run("r1"))
        text, _ = new_token(transaction, owner="north", scopes=["collect"], label="", time=TIME, expires_s=None)
    found = all_bytes(place.data)
    for n in range(0, len(secret), 16):
        assert secret[n:n + 16] not in found
    assert key not in found and key.hex().encode() not in found
    assert text.encode() not in found and text[-64:].encode() not in found and bytes.fromhex(text[-64:]) not in found
    store.close()


@pytest.fixture
def store(tmp_path: Path) -> Iterator[SqliteStore]:
    opened = SqliteStore(tmp_path / "bellassay.sqlite")
    yield opened
    opened.close()


def make_token(store: SqliteStore, **fields: object) -> tuple[str, str]:
    values = {"owner": "north", "scopes": ["submit", "audit"], "label": "bench", "time": TIME, "expires_s": 2000.0}
    with store.write() as transaction:
        text, row = new_token(transaction, **values | fields)
    return text, row.id


def identity_of(store: SqliteStore, text: str, now_s: float = 1000.0) -> Identity | None:
    with store.read() as reading:
        return identify(reading, text, now_s)


def test_a_token_says_who_it_is_until_it_expires(store: SqliteStore) -> None:
    """Owner and scopes come back; at the second of expiry it is over."""
    text, token_id = make_token(store)
    identity = identity_of(store, text)
    assert identity == Identity(token_id, "north", frozenset({"submit", "audit"}))
    assert [scope for scope in SCOPES if identity.may(scope)] == ["submit", "audit"]
    assert identity_of(store, text, 1999.9) and identity_of(store, text, 2000.0) is None
    forever, _ = make_token(store, expires_s=None, scopes=["admin"])
    assert identity_of(store, forever, 1e12).may("collect")


def test_anything_but_the_very_text_is_nobody(store: SqliteStore) -> None:
    """Each character changed, other lengths, other cases, other prefixes, unknown ids."""
    text, _ = make_token(store)
    wrong = [text[:n] + ("0" if text[n] != "0" else "1") + text[n + 1:] for n in range(len(text))]
    wrong += ["", text[:-1], text + "0", text.upper(), " " + text, text + "\n", "bellassay_", "\u0661" * 97]
    for other in wrong:
        assert identity_of(store, other) is None
    assert identity_of(store, text) is not None


def test_a_revoked_token_is_nobody(store: SqliteStore) -> None:
    """From the commit of the revocation on."""
    text, token_id = make_token(store)
    with store.write() as transaction:
        assert transaction.revoke_token(token_id, TIME)
    assert identity_of(store, text) is None


def test_tokens_differ_and_only_their_digest_is_kept(store: SqliteStore) -> None:
    """256 random bits each; the row does not hold them."""
    texts = [make_token(store)[0] for _ in range(20)]
    assert len({text[-64:] for text in texts}) == 20 and len(texts[0]) == len("bellassay_") + 16 + 1 + 64
    with store.read() as reading:
        rows = reading.list_tokens()
    assert len(rows) == 20 and not any(text[-64:] in repr(rows) for text in texts)


@pytest.mark.parametrize("fields", [
    {"owner": ""}, {"owner": "x" * 101}, {"owner": "a\nb"}, {"scopes": []}, {"scopes": ["submit", "root"]},
    {"label": "x" * 201}, {"label": "\x00"},
])
def test_a_token_for_nobody_or_nothing_is_refused(store: SqliteStore, fields: dict) -> None:
    """Owner, scopes and label are checked."""
    with pytest.raises(InputError):
        make_token(store, **fields)


def test_ids_and_names_cannot_leave_the_data_folder(place: Blobs) -> None:
    """Whatever is asked for lies below data/runs."""
    for run_id in ("", ".", "..", "a/b", "../x", "a\x00", "a b", "é", "x" * 65, "-a"):
        with pytest.raises(Defect):
            place.folder(run_id)
    for name in ("", "run.key", "../r2/bits", "segments/../bits", "segments/0.planes", "segments/1.planes\n",
                 "segments/x"):
        with pytest.raises(Defect):
            place.path("r1", name)
    assert place.path("r1", blobs.segment_name(12)) == place.runs / "r1" / "segments" / "12.planes"


def test_a_file_that_would_fill_the_disk_is_refused_before_it_comes(place: Blobs) -> None:
    """What must stay free stays free, and the answer is to come back later."""
    free = place.free_bytes()
    place.need(1)
    greedy = Blobs(place.data, free_disk_bytes=free // 2)
    greedy.need(free // 4)
    with pytest.raises(Unavailable) as caught:
        greedy.need(free)
    assert caught.value.code == "disk-full"


def test_durable_writing_replaces_and_creating_does_not(tmp_path: Path) -> None:
    """The content is whole, the mode as asked, and no temporary file stays."""
    path = tmp_path / "x"
    write_durably(path, b"one")
    write_durably(path, b"two" * 100_000, 0o640)
    assert path.read_bytes() == b"two" * 100_000 and path.stat().st_mode & 0o777 == 0o640 & ~_umask()
    assert not create_durably(path, b"three") and path.read_bytes().startswith(b"two")
    assert create_durably(tmp_path / "y", b"four") and (tmp_path / "y").read_bytes() == b"four"
    assert sorted(one.name for one in tmp_path.iterdir()) == ["x", "y"]


def test_a_disk_that_stops_writing_is_told_and_leaves_what_was_there(tmp_path: Path) -> None:
    """With a real limit on file sizes: no half file appears, no leftover stays, acknowledged rows are still there."""
    store = SqliteStore(tmp_path / "bellassay.sqlite")
    with store.write() as transaction:
        transaction.insert_declaration(declaration())
    write_durably(tmp_path / "x", b"before")
    write_vault(tmp_path / "bits", bytes(32), "bits", b"before")
    files = sorted(tmp_path.iterdir())
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (300_000, hard))
    try:
        with pytest.raises(StorageFailed):
            write_durably(tmp_path / "x", bytes(400_000))
        with pytest.raises(StorageFailed):
            write_vault(tmp_path / "bits", bytes(32), "bits", bytes(400_000))
        with pytest.raises((StorageFailed, Unavailable)), store.write() as transaction:
            transaction.insert_run(run("r1"))
            transaction.append_event("r1", {"text": "x" * 400_000})
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert sorted(tmp_path.iterdir()) == files and (tmp_path / "x").read_bytes() == b"before"
    assert read_vault(tmp_path / "bits", bytes(32), "bits") == b"before"
    with store.write() as transaction:
        assert transaction.get_declaration("d1") and transaction.get_run("r1") is None
        transaction.insert_run(run("r1"))
    store.close()


def _umask() -> int:
    old = os.umask(0)
    os.umask(old)
    return old


def test_sweeping_removes_only_old_leftovers(place: Blobs) -> None:
    """Unfinished files of killed processes go, those of uploads in progress and all finished files stay."""
    place.make("r1")
    finished = place.path("r1", blobs.segment_name(1))
    old, fresh = temporary_path(finished), temporary_path(finished)
    for path in (finished, old, fresh):
        path.write_bytes(b"x")
    os.utime(old, (1000, 1000)), os.utime(finished, (1000, 1000)), os.utime(fresh, (3000, 3000))
    assert place.sweep(2000.0) == 1
    assert finished.exists() and fresh.exists() and not old.exists()
    assert place.remove("r1", blobs.segment_name(1)) and not place.remove("r1", blobs.segment_name(1))
