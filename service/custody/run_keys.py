"""One key per run, wrapped under the master key, in a file of its own: erasing that file erases the run's secrets.

Key file data/runs/<id>/run.key: magic "bellassay runkey" (16 bytes), nonce (12), AES-256-GCM of the 32-byte run key
under the master key with magic || run id as associated data (48). Nonces are random: fewer than 2^32 keys are wrapped
under one master key (NIST SP 800-38D, 8.3, from memory). The master key is 32 bytes in a file nobody else may read,
made on first start, or handed over by the operator (file, systemd credential).

What erasing can and cannot do: the file is overwritten, synced, unlinked and the folder synced, so that the file
system holds the wrapped key no more. A copying file system, a flash disk's spare area or a backup may still hold the
old block; whoever has that block needs the master key as well. So keep the two apart: no backup should hold both
data/runs/*/run.key and the master key. The database never sees a key.
"""

from __future__ import annotations

import os
import secrets
import stat
from pathlib import Path

from cryptography.exceptions import InvalidTag
from cryptography.hazmat.primitives.ciphers.aead import AESGCM

from extractor.errors import Defect, InputError
from service.errors import DamagedFile, KeyErased
from service.store.durable import create_durably, make_folder, storage_errors, sync_file, sync_folder

KEY_BYTES = 32
KEY_FILE = "run.key"
_MAGIC = b"bellassay runkey"
_NONCE_BYTES, _TAG_BYTES = 12, 16
_FILE_BYTES = len(_MAGIC) + _NONCE_BYTES + KEY_BYTES + _TAG_BYTES
_OTHERS = stat.S_IRWXO | stat.S_IWGRP | stat.S_IXGRP       # a group may read: orchestrators hand secrets over that way


def refuse_open_permissions(path: Path) -> None:
    """Errors raised: InputError (code "key-permissions") if others may read it or the group may write it."""
    if path.stat().st_mode & _OTHERS:
        raise InputError(f"{path} may be read or changed by others; run: chmod 600 {path}", code="key-permissions")


def read_key_file(path: Path, bytes_: int) -> bytes:
    """A key file of exactly this many bytes with closed permissions; InputError otherwise."""
    refuse_open_permissions(path)
    key = path.read_bytes()
    if len(key) != bytes_:
        raise InputError(f"{path} holds {len(key)} bytes, a key has {bytes_}", code="bad-key-file")
    return key


class RunKeys:
    """Makes, opens and erases run keys. Safe for several threads and processes.

    runs         folder data/runs; `master` the 32-byte master key
    """

    def __init__(self, runs: Path, master: bytes) -> None:
        if len(master) != KEY_BYTES:
            raise Defect("the master key has 32 bytes")
        self._runs, self._master = runs, AESGCM(master)

    @classmethod
    def open(cls, runs: Path, master_key_path: Path, *, create: bool = True) -> RunKeys:
        """With the master key in the file; on the very first start (no key file, no runs) the file is made, mode 0600.

        Errors raised: InputError if the file is missing although runs with keys exist, is readable by others, or has a
        wrong length. A new master key in place of a lost one would make every uncollected run unreadable for good.
        """
        if not master_key_path.exists():
            if not create or any(runs.glob(f"*/{KEY_FILE}")):
                raise InputError(f"the master key {master_key_path} is missing, and there are runs that need it; "
                                 "put it back from where it is kept", code="master-key-missing")
            make_folder(master_key_path.parent)
            # Of two processes starting at once one makes the file; both then read the same key.
            create_durably(master_key_path, secrets.token_bytes(KEY_BYTES), 0o600)
        return cls(runs, read_key_file(master_key_path, KEY_BYTES))

    def create(self, run_id: str) -> bytes:
        """The run's key; made and durable on the first call, the same one on later calls."""
        path = self._path(run_id)
        make_folder(path.parent)
        if not path.exists():
            key, nonce = secrets.token_bytes(KEY_BYTES), secrets.token_bytes(_NONCE_BYTES)
            sealed = self._master.encrypt(nonce, key, _MAGIC + run_id.encode())
            create_durably(path, _MAGIC + nonce + sealed, 0o600)
        return self.load(run_id)

    def load(self, run_id: str) -> bytes:
        """The run's key. Errors raised: KeyErased if there is none; DamagedFile if it does not open."""
        try:
            stored = self._path(run_id).read_bytes()
        except FileNotFoundError:
            raise KeyErased(f"the key of run {run_id} is erased") from None
        nonce, sealed = stored[len(_MAGIC):len(_MAGIC) + _NONCE_BYTES], stored[len(_MAGIC) + _NONCE_BYTES:]
        try:
            if len(stored) != _FILE_BYTES or not stored.startswith(_MAGIC):
                raise InvalidTag
            return self._master.decrypt(nonce, sealed, _MAGIC + run_id.encode())
        except InvalidTag:
            raise DamagedFile(f"the key of run {run_id} does not open: it was damaged or exchanged, "
                              "or the master key is another one") from None

    def exists(self, run_id: str) -> bool:
        return self._path(run_id).exists()

    def erase(self, run_id: str) -> bool:
        """Overwrites and removes the run's key; True if there was one. Afterwards nothing of the run can be decrypted.

        May be repeated after an interruption at any point. Errors raised: StorageFailed.
        """
        path = self._path(run_id)
        with storage_errors(path):
            try:
                handle = os.open(path, os.O_WRONLY)
            except FileNotFoundError:
                if path.parent.is_dir():
                    sync_folder(path.parent)       # an earlier, interrupted call may have unlinked without syncing
                return False
            try:
                os.pwrite(handle, secrets.token_bytes(_FILE_BYTES), 0)
                sync_file(handle, path)
            finally:
                os.close(handle)
            path.unlink(missing_ok=True)
        sync_folder(path.parent)
        return True

    def _path(self, run_id: str) -> Path:
        if not run_id or "/" in run_id or run_id.startswith("."):
            raise Defect(f"{run_id!r} is no run id")
        return self._runs / run_id / KEY_FILE
