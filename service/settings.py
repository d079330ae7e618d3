"""Every setting of the service: name, default, unit, limits; from BELLASSAY_* variables and explicit arguments.

    explicit argument  >  environment variable BELLASSAY_<NAME>  >  default

The unit is the last part of a name (`_s` seconds, `_bytes`, `_rounds`). A value that is no number or lies outside its
limits is an `InputError` naming the setting; nothing is clipped silently.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from extractor.errors import InputError

PREFIX = "BELLASSAY_"
CLIENT_VARIABLES = frozenset({"BELLASSAY_URL", "BELLASSAY_TOKEN"})     # read by the client commands, not here


def _setting(default: Any, text: str, *, unit: str = "", low: float | None = None, high: float | None = None) -> Any:
    return field(default=default, metadata={"text": text, "unit": unit, "low": low, "high": high})


@dataclass(frozen=True)
class ServiceSettings:
    """Checked on construction. `data` holds everything the service keeps."""

    data: Path = _setting(Path("bellassay-data"), "folder that holds everything the service keeps")
    host: str = _setting("127.0.0.1", "address the HTTP server listens on")
    port: int = _setting(8383, "port the HTTP server listens on; 0 = any free one", low=0, high=65535)

    segment_bytes: int = _setting(4 * 2**30, "largest body of one segment", unit="bytes", low=1, high=2**40)
    segments_per_run: int = _setting(100_000, "most segments of one run", low=1, high=10_000_000)
    run_rounds: int = _setting(2**40, "most rounds a declaration may name", unit="rounds", low=1, high=2**50)
    document_bytes: int = _setting(1_000_000, "largest JSON body", unit="bytes", low=1024, high=100_000_000)
    upload_chunk_timeout_s: float = _setting(30.0, "longest wait for the next piece of an upload",
                                             unit="s", low=0.1, high=3600)
    uploads_at_once: int = _setting(16, "uploads received at the same time; further ones are asked to come back",
                                    low=1, high=1024)
    connections: int = _setting(512, "connections served at the same time", low=1, high=65536)
    page_items: int = _setting(200, "most items of one page of a list", low=1, high=10_000)
    idempotency_keep_s: float = _setting(86_400.0, "how long answers to an Idempotency-Key are kept",
                                         unit="s", low=60, high=31_536_000)
    event_poll_s: float = _setting(0.5, "how often an event stream looks for news", unit="s", low=0.01, high=60)
    event_keepalive_s: float = _setting(15.0, "longest silence of an event stream", unit="s", low=1, high=600)

    workers: int = _setting(1, "runs worked on at the same time by this process; 0 = serve only", low=0, high=64)
    lease_s: float = _setting(30.0, "how long a worker that falls silent keeps its run", unit="s", low=1, high=3600)
    heartbeat_s: float = _setting(5.0, "how often a worker extends its lease", unit="s", low=0.1, high=1200)
    poll_s: float = _setting(1.0, "how often an idle worker looks for a run", unit="s", low=0.01, high=600)
    attempts: int = _setting(5, "claims of a run without progress before it is called failed", low=1, high=1000)
    retry_wait_s: float = _setting(5.0, "wait before a run is tried again, doubled each time",
                                   unit="s", low=0, high=3600)
    hash_threads: int = _setting(0, "threads of the hash; 0 = one per processor", low=0, high=1024)
    partial_rounds: int = _setting(2**25, "rounds between two stored partial hashes",
                                   unit="rounds", low=2**20, high=2**40)
    stop_s: float = _setting(20.0, "time granted to work in hand when the service is stopped",
                             unit="s", low=0, high=3600)

    free_disk_bytes: int = _setting(2**30, "space left free on the data disk; uploads that would go below are refused",
                                    unit="bytes", low=0, high=2**50)
    store_wait_s: float = _setting(30.0, "longest wait for another writer of the database", unit="s", low=0.1, high=600)
    ledger_origin: str = _setting("bellassay/ledger",
                                  "name of the ledger, part of every signed checkpoint; never change it later")
    master_key_file: Path | None = _setting(None, "file of the master key; default: keys/master.key in the data folder")
    ledger_key_file: Path | None = _setting(
        None, "file of the ledger's signing key; default: keys/ledger.key in the data folder")
    token_days: float = _setting(365.0, "life of a new token unless said otherwise",
                                 unit="days", low=0.001, high=36_500)
    log_level: str = _setting("info", "debug, info, warning or error")

    def __post_init__(self) -> None:
        for item in dataclasses.fields(self):
            _check(item, getattr(self, item.name))
        if self.heartbeat_s * 2 > self.lease_s:
            raise _bad("heartbeat_s", f"{self.heartbeat_s:g} s is more than half of lease_s ({self.lease_s:g} s); "
                                      "one late heartbeat would lose the run: lower it or raise lease_s")
        if self.partial_rounds % 2**20:
            raise _bad("partial_rounds", "must be a multiple of 1048576 (one block of stored rounds)")
        if not self.ledger_origin or any(c.isspace() or c == "+" or not c.isprintable() for c in self.ledger_origin):
            raise _bad("ledger_origin", f"{self.ledger_origin!r} is empty or holds spaces or a plus sign")
        if len(self.ledger_origin) > 200 or len(self.host) > 255 or not self.host:
            raise _bad("host" if len(self.ledger_origin) <= 200 else "ledger_origin", "is empty or too long")
        if self.log_level not in ("debug", "info", "warning", "error"):
            raise _bad("log_level", f"{self.log_level!r} is none of debug, info, warning, error")

    @classmethod
    def load(cls, environ: Mapping[str, str], **given: Any) -> ServiceSettings:
        """Settings from the variables in `environ` and explicit arguments; a given None means "not given".

        Errors raised: InputError (code "bad-setting") naming the setting and, if it came from there, the variable.
        """
        values: dict[str, Any] = {}
        for item in dataclasses.fields(cls):
            variable = PREFIX + item.name.upper()
            if given.get(item.name) is not None:
                values[item.name] = _read(item, given[item.name], item.name)
            elif environ.get(variable, "") != "":
                values[item.name] = _read(item, environ[variable], f"{item.name} (from {variable})")
        if unknown := set(given) - {item.name for item in dataclasses.fields(cls)}:
            raise _bad(sorted(unknown)[0], "is not a setting")
        return cls(**values)

    @property
    def master_key_path(self) -> Path:
        return self.master_key_file or self.data / "keys" / "master.key"

    @property
    def ledger_key_path(self) -> Path:
        return self.ledger_key_file or self.data / "keys" / "ledger.key"

    @property
    def database_path(self) -> Path:
        return self.data / "bellassay.sqlite"

    @property
    def checkpoint_path(self) -> Path:
        return self.data / "ledger.checkpoint"


def unknown_variables(environ: Mapping[str, str]) -> list[str]:
    """BELLASSAY_* variables that name no setting: probably a slip of the pen, worth a line in the log."""
    known = {PREFIX + item.name.upper() for item in dataclasses.fields(ServiceSettings)} | CLIENT_VARIABLES
    return sorted(name for name in environ if name.startswith(PREFIX) and name not in known)


def setting_rows() -> list[dict[str, str]]:
    """Name, variable, default, unit, limits and meaning of every setting as text, for help and documentation."""
    rows = []
    for item in dataclasses.fields(ServiceSettings):
        low, high = item.metadata["low"], item.metadata["high"]
        rows.append({
            "name": item.name, "variable": PREFIX + item.name.upper(),
            "default": "" if item.default is None else str(item.default), "unit": item.metadata["unit"],
            "limits": "" if low is None else f"{low:.15g} .. {high:.15g}", "meaning": item.metadata["text"],
        })
    return rows


def _bad(name: str, why: str) -> InputError:
    return InputError(f"setting {name}: {why}", code="bad-setting")


def _read(item: dataclasses.Field, value: Any, name: str) -> Any:
    """The value of a setting from text or an already typed argument."""
    kind = str(item.type)
    if not isinstance(value, str):
        return Path(value) if kind.startswith("Path") else value
    text = value.strip()
    if kind.startswith("Path"):
        return Path(text)
    if kind not in ("int", "float"):
        return text
    try:
        return int(text) if kind == "int" else float(text)
    except ValueError:
        hint = ("; a cluster that injects variables for a service named bellassay overwrites this one: switch "
                "service links off") if "://" in text else ""
        wanted = "a whole number" if kind == "int" else "a number"
        raise _bad(name, f"{text!r} is not {wanted}{hint}") from None


def _check(item: dataclasses.Field, value: Any) -> None:
    """Type and limits of one setting."""
    kind, low, high = str(item.type), item.metadata["low"], item.metadata["high"]
    if kind.startswith("Path"):
        right = isinstance(value, Path) or (value is None and "None" in kind)
    elif kind == "float":
        right = isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
    else:
        right = type(value).__name__ == kind
    if not right:
        raise _bad(item.name, f"{value!r} is not a value of the kind {kind}")
    if low is not None and not low <= value <= high:
        unit = f" {item.metadata['unit']}" if item.metadata["unit"] else ""
        raise _bad(item.name, f"{value}{unit} is outside {low:.15g} .. {high:.15g}")
