"""Small files that are either wholly there or not at all, also after the power went away.

The order that makes a file durable: write a temporary file in the same folder, fsync it, rename it, fsync the folder.
A failed fsync is a `StorageFailed` and is never repeated: the kernel may have dropped the pages that it could not write
and would report success the second time.
"""

from __future__ import annotations

import errno
import fcntl
import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from service.errors import StorageFailed, Unavailable

TEMPORARY_SUFFIX = ".part"
_FULL = (errno.ENOSPC, errno.EDQUOT)


@contextmanager
def storage_errors(path: Path) -> Iterator[None]:
    """Turns a full disk into `Unavailable` and a failing one into `StorageFailed`; a missing file stays what it is."""
    try:
        yield
    except FileNotFoundError:
        raise
    except OSError as fault:
        if fault.errno in _FULL:
            raise Unavailable("the data disk is full", code="disk-full", retry_after_s=60.0) from fault
        raise StorageFailed(f"{path.name}: {fault.strerror}") from fault


def sync_file(handle: int, path: Path) -> None:
    """fsync of an open file. Errors raised: StorageFailed, also for a full disk: the pages may be lost."""
    try:
        os.fsync(handle)
    except OSError as fault:
        raise StorageFailed(f"fsync of {path.name} failed: {fault.strerror}", code="fsync-failed") from fault


def sync_folder(folder: Path) -> None:
    """Makes created, renamed and removed names in `folder` durable."""
    with storage_errors(folder):
        handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        sync_file(handle, folder)
    finally:
        os.close(handle)


def make_folder(folder: Path) -> None:
    """Creates `folder` and missing parents, mode 0700, durably. An existing folder is left as it is."""
    missing = []
    at = folder
    while not at.is_dir():
        missing.append(at)
        at = at.parent
    for one in reversed(missing):
        with storage_errors(one):
            one.mkdir(mode=0o700, exist_ok=True)
        sync_folder(one.parent)


def temporary_path(path: Path) -> Path:
    """A fresh name in the folder of `path`; `blobs.Blobs.sweep` knows such names."""
    return path.with_name(f".{path.name}.{secrets.token_hex(8)}{TEMPORARY_SUFFIX}")


@contextmanager
def exclusive(path: Path) -> Iterator[None]:
    """Holds the lock file <path>.lock: of all processes and threads only one is inside. A killed one lets go."""
    lock = path.with_name(f"{path.name}.lock")
    with storage_errors(lock):
        handle = os.open(lock, os.O_RDWR | os.O_CREAT, 0o600)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX)
        yield
    finally:
        os.close(handle)


def _write_temporary(path: Path, data: bytes, mode: int) -> Path:
    temporary = temporary_path(path)
    try:
        with storage_errors(path):
            handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL, mode)
            with open(handle, "wb", buffering=0) as file:
                view = memoryview(data)
                while view:
                    view = view[file.write(view):]
                sync_file(file.fileno(), path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    return temporary


def rename_durably(source: Path, final: Path) -> None:
    """A complete, synced file takes its final name, whatever had it before. Errors raised: as `storage_errors`."""
    with storage_errors(final):
        os.rename(source, final)
    sync_folder(final.parent)


def write_durably(path: Path, data: bytes, mode: int = 0o600) -> None:
    """Creates or replaces the file; after the return it survives a power loss, before it the old one does."""
    temporary = _write_temporary(path, data, mode)
    try:
        with storage_errors(path):
            os.rename(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    sync_folder(path.parent)


def create_durably(path: Path, data: bytes, mode: int = 0o600) -> bool:
    """Creates the file with this content unless it exists; True if this call created it. Of many callers one wins."""
    temporary = _write_temporary(path, data, mode)
    try:
        with storage_errors(path):
            try:
                os.link(temporary, path)       # unlike rename, link never replaces
            except FileExistsError:
                return False
    finally:
        temporary.unlink(missing_ok=True)
    sync_folder(path.parent)
    return True
