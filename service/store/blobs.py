"""Where the files of a run lie, how much room is left, and what remains after an interruption.

    data/runs/<id>/run.key                 wrapped key (custody/run_keys.py)
    data/runs/<id>/segments/<k>.planes     raw rounds        } vault files, encrypted under the run's key;
    data/runs/<id>/seed                    Toeplitz seed     } the vault name of each is its path within the
    data/runs/<id>/partial                 partial hash      } run's folder: "segments/3.planes", "seed", ...
    data/runs/<id>/bits                    output, its salt and digest
    data/runs/<id>/report.json, bundle.zip  public documents, in the clear

Nothing here encrypts: paths and rooms only.
"""

from __future__ import annotations

import contextlib
import os
import re
import shutil
from collections.abc import Iterator
from pathlib import Path

from extractor.errors import Defect
from service.errors import Unavailable
from service.store.durable import TEMPORARY_SUFFIX, make_folder, storage_errors, sync_folder

_ID = re.compile(r"[A-Za-z0-9][A-Za-z0-9_-]{0,63}", re.ASCII)
SEED, PARTIAL, BITS = "seed", "partial", "bits"


def segment_name(number: int) -> str:
    """Vault name of segment `number`, 1, 2, ..."""
    if number < 1:
        raise Defect("segments count from 1")
    return f"segments/{number}.planes"


class Blobs:
    """Paths below data/runs. `free_disk_bytes`: room that must stay free."""

    def __init__(self, data: Path, *, free_disk_bytes: int = 0) -> None:
        self.data, self.runs, self._floor = data, data / "runs", free_disk_bytes

    def prepare(self) -> None:
        """Makes the data folder (mode 0700) and data/runs, durably."""
        make_folder(self.runs)

    def folder(self, run_id: str) -> Path:
        """The run's folder. An id that could name another place is a `Defect`."""
        if not _ID.fullmatch(run_id):
            raise Defect(f"{run_id!r} is no run id")
        return self.runs / run_id

    def make(self, run_id: str) -> None:
        """Makes the run's folders, durably; may be repeated."""
        make_folder(self.folder(run_id) / "segments")

    def path(self, run_id: str, name: str) -> Path:
        """Path of a vault file by its vault name: `segment_name(k)`, SEED, PARTIAL, BITS."""
        if name not in (SEED, PARTIAL, BITS) and not re.fullmatch(r"segments/[1-9][0-9]*\.planes", name):
            raise Defect(f"{name!r} is no file of a run")
        return self.folder(run_id) / name

    def report_path(self, run_id: str) -> Path:
        return self.folder(run_id) / "report.json"

    def bundle_path(self, run_id: str) -> Path:
        return self.folder(run_id) / "bundle.zip"

    def free_bytes(self) -> int:
        """Room on the data disk for this process."""
        with storage_errors(self.data):
            room = os.statvfs(self.data)
        return room.f_bavail * room.f_frsize

    def need(self, bytes_: int) -> None:
        """Errors raised: Unavailable (code "disk-full") if taking this many bytes would leave less than the floor."""
        free = self.free_bytes()
        if free - bytes_ < self._floor:
            raise Unavailable(f"{bytes_} bytes are needed and {free} are free on the data disk, of which "
                              f"{self._floor} must stay free; make room there", code="disk-full", retry_after_s=60.0)

    def remove(self, run_id: str, name: str) -> bool:
        """Removes one vault file; True if it was there."""
        path = self.path(run_id, name)
        with storage_errors(path):
            try:
                path.unlink()
            except FileNotFoundError:
                return False
        sync_folder(path.parent)
        return True

    def discard(self, run_id: str) -> None:
        """Removes the folders of a run that was never opened, as far as they are empty."""
        for folder in (self.folder(run_id) / "segments", self.folder(run_id)):
            with contextlib.suppress(OSError):
                folder.rmdir()

    def remove_secrets(self, run_id: str) -> None:
        """Frees the room of a run's encrypted files once its key is erased; its documents stay. May be repeated."""
        folder = self.folder(run_id)
        if not folder.is_dir():
            return
        with storage_errors(folder):
            for name in (SEED, PARTIAL, BITS):
                (folder / name).unlink(missing_ok=True)
            while (folder / "segments").is_dir():
                try:
                    shutil.rmtree(folder / "segments")
                except FileNotFoundError:
                    continue            # another process is at the same work
        sync_folder(folder)

    def sweep(self, older_than_s: float) -> int:
        """Removes unfinished files left by killed processes: those last written before `older_than_s`; how many.

        An upload in progress writes at least once per chunk time-out, so a time well before now spares it.
        """
        removed = 0
        for path in self._leftovers():
            try:
                if path.stat().st_mtime < older_than_s:
                    path.unlink()
                    removed += 1
            except FileNotFoundError:
                continue
        return removed

    def _leftovers(self) -> Iterator[Path]:
        for folder in (self.data, self.data / "keys", *self.runs.glob("*/"), *self.runs.glob("*/segments/")):
            yield from folder.glob(f".*{TEMPORARY_SUFFIX}")
