"""What every bench prints: figures by name and the machine they were measured on."""

from __future__ import annotations

import json
import os
import platform
from typing import Any

import numpy
import scipy


def machine() -> dict[str, Any]:
    """Processor, memory and versions, as far as the system tells."""
    model = ""
    try:
        with open("/proc/cpuinfo", encoding="ascii", errors="replace") as file:
            model = next((line.split(":", 1)[1].strip() for line in file if line.startswith("model name")), "")
    except OSError:
        model = platform.processor()
    pages = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    return {"processor": model or platform.machine(), "processors": os.cpu_count(), "memory_gib": round(pages / 2**30, 1),
            "system": platform.platform(), "python": platform.python_version(), "numpy": numpy.__version__, "scipy": scipy.__version__}


def show(figures: dict[str, float], as_json: bool) -> None:
    """Print figures as one JSON object, or as a table of names and values."""
    if as_json:
        print(json.dumps({"figures": figures, "machine": machine()}))
        return
    width = max(map(len, figures))
    for name, value in figures.items():
        print(f"{name:<{width}}  {value:,.4g}")


def peak_mib(pid: int) -> float:
    """Peak resident memory of a process so far, MiB (VmHWM)."""
    with open(f"/proc/{pid}/status", encoding="ascii", errors="replace") as file:
        return next(int(line.split()[1]) for line in file if line.startswith("VmHWM")) / 1024


def children(pid: int) -> list[int]:
    """Process ids of all descendants."""
    found = []
    for task in os.listdir(f"/proc/{pid}/task"):
        with open(f"/proc/{pid}/task/{task}/children", encoding="ascii") as file:
            for child in map(int, file.read().split()):
                found += [child, *children(child)]
    return found
