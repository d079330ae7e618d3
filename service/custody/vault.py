"""Encrypted files with random access: raw rounds, seeds, partial hashes and bits at rest.

File, all integers big-endian:

    offset   bytes  content
    0        16     magic "bellassay vault1"
    16       32     salt, random per file
    48       7      nonce prefix, random per file
    55       2      length L of the name
    57       L      name (UTF-8), what the file is within its run, e.g. "segments/1.planes"
    57 + L   ...    segments: AES-256-GCM of 1 MiB of plaintext each (the last one: 1 byte to 1 MiB; 0 bytes only if
                    the whole file is empty), each followed by its 16-byte tag

    file key  = HKDF-SHA-256(run key, salt = the 32 bytes, info = "bellassay vault file key 1" || the whole header)
    nonce     = prefix (7) || segment number from 0 (4) || 1 if the last segment, else 0 (1)

Why this is safe here: the file key is fresh for every file (256-bit salt), so the counter alone keeps nonces apart; the
name and every other byte of the header enter the key, so a file put in another's place does not open; the number in the
nonce stops reordering, the last flag stops cutting and lengthening (the STREAM construction: Hoang, Reyhanitabar,
Rogaway, Vizar, "Online Authenticated-Encryption and its Nonce-Reuse Misuse-Resistance", CRYPTO 2015). The reader opens
the last segment first, so a wrong length is found before any plaintext is handed out.
What it does not stop: an older file of the same run and name put back whole; the database holds digests for that.
"""

from __future__ import annotations

import io
import os
import secrets
import struct
from pathlib import Path
from types import TracebackType
from typing import Any

from cryptography.exceptions import InvalidTag
from cryptography.hazmat.primitives.ciphers.aead import AESGCM
from cryptography.hazmat.primitives.hashes import SHA256
from cryptography.hazmat.primitives.kdf.hkdf import HKDF

from extractor.errors import Defect
from service.errors import DamagedFile
from service.store.durable import storage_errors, sync_file, sync_folder, temporary_path

MAGIC = b"bellassay vault1"
SEGMENT_BYTES = 2**20
HELD_SEGMENTS = 8            # plaintext segments a reader keeps: five planes, a directory and some room
TAG_BYTES = 16
KEY_BYTES = 32
NAME_BYTES = 255
_SALT_BYTES, _PREFIX_BYTES = 32, 7
_FIXED_BYTES = len(MAGIC) + _SALT_BYTES + _PREFIX_BYTES + 2
_INFO = b"bellassay vault file key 1"
_SEALED_BYTES = SEGMENT_BYTES + TAG_BYTES
_SEGMENTS_LIMIT = 2**32


def _header(name: str, salt: bytes, prefix: bytes) -> bytes:
    encoded = name.encode()
    if not 1 <= len(encoded) <= NAME_BYTES:
        raise Defect(f"a vault name has 1 to {NAME_BYTES} bytes, not {len(encoded)}")
    return MAGIC + salt + prefix + struct.pack(">H", len(encoded)) + encoded


def _cipher(run_key: bytes, header: bytes) -> AESGCM:
    if len(run_key) != KEY_BYTES:
        raise Defect("a run key has 32 bytes")
    salt = header[len(MAGIC):len(MAGIC) + _SALT_BYTES]
    return AESGCM(HKDF(SHA256(), KEY_BYTES, salt, _INFO + header).derive(run_key))


def _nonce(prefix: bytes, number: int, last: bool) -> bytes:
    return prefix + struct.pack(">IB", number, last)


class VaultWriter:
    """Streaming writer: `write` any number of times, then `commit`, which alone makes the file appear under its name.

    Leaving the `with` block without `commit` removes everything. Memory: two segments. Not for several threads at once.
    Errors raised: Unavailable (disk full), StorageFailed.
    """

    def __init__(self, path: Path, run_key: bytes, name: str) -> None:
        self._path, self._temporary = path, temporary_path(path)
        self._prefix = secrets.token_bytes(_PREFIX_BYTES)
        header = _header(name, secrets.token_bytes(_SALT_BYTES), self._prefix)
        self._cipher = _cipher(run_key, header)
        self._waiting = bytearray()
        self._number, self.bytes, self._open = 0, 0, True      # bytes: plaintext written so far
        with storage_errors(path):
            handle = os.open(self._temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
        self._file = open(handle, "wb", buffering=0)
        self._put(header)

    def write(self, data: Any) -> int:
        """Appends the bytes (any buffer); returns how many there were."""
        if not self._open:
            raise ValueError("the vault file is closed")
        view = memoryview(data).cast("B")
        self.bytes += len(view)
        start = 0
        if self._waiting:
            start = min(len(view), SEGMENT_BYTES - len(self._waiting))
            self._waiting += view[:start]
        # A full segment is held back until a further byte shows that it is not the last one.
        if start < len(view) and len(self._waiting) == SEGMENT_BYTES:
            self._seal(self._waiting, last=False)
            self._waiting = bytearray()
        while len(view) - start > SEGMENT_BYTES:
            self._seal(view[start:start + SEGMENT_BYTES], last=False)
            start += SEGMENT_BYTES
        self._waiting += view[start:]
        return len(view)

    def commit(self) -> None:
        """Last segment, fsync, rename, fsync of the folder: after the return the file survives a power loss."""
        if not self._open:
            raise ValueError("the vault file is closed")
        try:
            self._seal(self._waiting, last=True)
            sync_file(self._file.fileno(), self._path)
            self._file.close()
            with storage_errors(self._path):
                os.rename(self._temporary, self._path)
            sync_folder(self._path.parent)
        except BaseException:
            self.abort()
            raise
        self._open, self._waiting = False, bytearray()

    def abort(self) -> None:
        """Removes the unfinished file; harmless after `commit` or a second time."""
        if self._open:
            self._open, self._waiting = False, bytearray()
            self._file.close()
            self._temporary.unlink(missing_ok=True)

    def __enter__(self) -> VaultWriter:
        return self

    def __exit__(self, kind: type[BaseException] | None, fault: BaseException | None,
                 trace: TracebackType | None) -> None:
        self.abort()

    def _seal(self, plain: Any, *, last: bool) -> None:
        if self._number >= _SEGMENTS_LIMIT:
            raise Defect("a vault file holds at most 2^32 segments")
        self._put(self._cipher.encrypt(_nonce(self._prefix, self._number, last), plain, None))
        self._number += 1

    def _put(self, data: bytes) -> None:
        view = memoryview(data)
        try:
            with storage_errors(self._path):
                while view:
                    view = view[self._file.write(view):]
        except BaseException:
            self.abort()
            raise


class VaultReader(io.RawIOBase):
    """The plaintext as a seekable binary file: `read`, `readinto`, `seek`, `tell`; `size` bytes.

    The segments read last, HELD_SEGMENTS at most, stay in memory: an archive of planes is read at several places in turn.

    Wrap it in `io.BufferedReader` where line reading is wanted (`open_vault` does). Not for several threads at once.
    Errors raised, on opening or reading: DamagedFile; FileNotFoundError if there is no such file.
    """

    def __init__(self, path: Path, run_key: bytes, name: str) -> None:
        self._path = path
        self._held: dict[int, bytes] = {}
        self._file = open(path, "rb", buffering=0)
        super().__init__()
        try:
            fixed = self._file.read(_FIXED_BYTES)
            if len(fixed) != _FIXED_BYTES or not fixed.startswith(MAGIC):
                raise self._damaged("is not a vault file")
            stored = self._file.read(struct.unpack(">H", fixed[-2:])[0])
            if stored != name.encode():
                raise self._damaged(f"was not written as {name}")
            self._start = _FIXED_BYTES + len(stored)
            self._prefix = fixed[-2 - _PREFIX_BYTES:-2]
            self._cipher = _cipher(run_key, fixed + stored)
            body = os.fstat(self._file.fileno()).st_size - self._start
            self._segments = max(1, -(-body // _SEALED_BYTES))
            self.size = body - self._segments * TAG_BYTES
            least = (self._segments - 1) * SEGMENT_BYTES + (self._segments > 1)
            if self.size < least or self._segments > _SEGMENTS_LIMIT:
                raise self._damaged("has an impossible length")
            self._position = 0
            self._segment(self._segments - 1)     # proves the length before anything is handed out
        except BaseException:
            self.close()
            raise

    def readable(self) -> bool:
        return True

    def seekable(self) -> bool:
        return True

    def tell(self) -> int:
        return self._position

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        position = {io.SEEK_SET: 0, io.SEEK_CUR: self._position, io.SEEK_END: self.size}[whence] + offset
        if position < 0:
            raise ValueError(f"negative position {position}")
        self._position = position
        return position

    def readinto(self, buffer: Any) -> int:
        """Fills as much of the buffer as the file still has (not only the rest of one segment)."""
        if self.closed:
            raise ValueError("the vault file is closed")
        view = memoryview(buffer).cast("B")
        wanted = max(0, min(len(view), self.size - self._position))
        done = 0
        while done < wanted:
            number, offset = divmod(self._position, SEGMENT_BYTES)
            piece = memoryview(self._segment(number))[offset:offset + wanted - done]
            view[done:done + len(piece)] = piece
            done += len(piece)
            self._position += len(piece)
        return done

    def close(self) -> None:
        if not self.closed and hasattr(self, "_file"):      # not there if opening failed
            self._held.clear()
            self._file.close()
        super().close()

    def _segment(self, number: int) -> bytes:
        """Plaintext of a segment. Errors raised: DamagedFile."""
        if number in self._held:
            self._held[number] = plain = self._held.pop(number)       # most recently used last
            return plain
        last = number == self._segments - 1
        length = self.size - number * SEGMENT_BYTES + TAG_BYTES if last else _SEALED_BYTES
        with storage_errors(self._path):
            sealed = os.pread(self._file.fileno(), length, self._start + number * _SEALED_BYTES)
        try:
            plain = self._cipher.decrypt(_nonce(self._prefix, number, last), sealed, None)
        except (InvalidTag, ValueError):
            raise self._damaged(f"does not authenticate in segment {number + 1} of {self._segments}") from None
        while len(self._held) >= HELD_SEGMENTS:
            del self._held[next(iter(self._held))]
        self._held[number] = plain
        return plain

    def _damaged(self, what: str) -> DamagedFile:
        return DamagedFile(
            f"{self._path.name} {what}: it was damaged, cut, extended or exchanged, or belongs to another key")


def open_vault(path: Path, run_key: bytes, name: str) -> io.BufferedReader:
    """A buffered binary reader of the plaintext; large reads pass its buffer by."""
    return io.BufferedReader(VaultReader(path, run_key, name), 2**16)


def write_vault(path: Path, run_key: bytes, name: str, data: bytes) -> None:
    """One small secret in one durable step; replaces an older file of this path."""
    with VaultWriter(path, run_key, name) as writer:
        writer.write(data)
        writer.commit()


def read_vault(path: Path, run_key: bytes, name: str, *, limit: int = 2**31) -> bytes:
    """The whole plaintext. Errors raised: DamagedFile; Defect if it is larger than `limit` bytes."""
    with VaultReader(path, run_key, name) as reader:
        if reader.size > limit:
            raise Defect(f"{path.name} holds {reader.size} bytes, more than the {limit} asked for at once")
        return reader.read(reader.size) or b""
