"""Who holds a lease, and whether that process can still be alive.

A worker id is "host:boot:pid namespace:pid:start": the boot id and the pid namespace together say which table of
processes the pid belongs to, and the start time (clock ticks since boot) tells a reused pid apart. Only a process of
the same boot and the same namespace is ever called dead: of another machine, another container or another boot nothing
can be known here, and its lease has to run out.
"""

from __future__ import annotations

import functools
import os
import socket
from pathlib import Path

_PROC = Path("/proc")


@functools.cache
def _surroundings() -> tuple[str, str]:
    try:
        boot = (_PROC / "sys/kernel/random/boot_id").read_text().strip()
        namespace = os.readlink(_PROC / "self/ns/pid").strip("pid:[]")
    except OSError:             # no /proc: leases of this process end by time only
        return "", ""
    return boot, namespace


def _start_ticks(pid: int) -> str | None:
    """Start time of a running process; None if there is none, or only a zombie waiting to be collected."""
    try:
        text = (_PROC / str(pid) / "stat").read_text()
    except (FileNotFoundError, ProcessLookupError):
        return None
    fields = text[text.rindex(")") + 2:].split()        # the command name may hold spaces and brackets
    return None if fields[0] in "ZX" else fields[19]


def worker_id() -> str:
    """The id of the calling process."""
    boot, namespace = _surroundings()
    start = (_start_ticks(os.getpid()) or "") if boot else ""
    return ":".join((socket.gethostname().replace(":", "-"), boot, namespace, str(os.getpid()), start))


def is_dead(worker: str) -> bool:
    """True only if the process named by `worker` has certainly ended; False if it lives or nothing can be known."""
    parts = worker.split(":")
    if len(parts) != 5 or not all(parts[1:]) or not parts[3].isdigit():
        return False
    if (parts[1], parts[2]) != _surroundings():
        return False
    try:
        return _start_ticks(int(parts[3])) != parts[4]
    except (OSError, ValueError, IndexError):
        return False
