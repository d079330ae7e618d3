"""What the client commands share: address and token, following a run, showing it; and `watch`, which does just that."""

from __future__ import annotations

import argparse
import os
import sys
import time
from typing import Any
from urllib.parse import urlsplit

from extractor.errors import InputError
from service.client import DEFAULT_URL, Client
from service.commands.common import (
    DONE,
    REFUSED,
    add_command,
    bullets,
    due,
    duration,
    emit,
    note,
    rows,
    several,
)
from service.transport import is_this_machine


def add_service_options(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--url",
        default=os.environ.get("BELLASSAY_URL") or DEFAULT_URL,
        metavar="URL",
        help=f"address of the service (default: BELLASSAY_URL, else {DEFAULT_URL})",
    )
    parser.add_argument(
        "--token",
        default=None,
        metavar="TOKEN",
        help="access token (default: BELLASSAY_TOKEN, which other users cannot see)",
    )
    parser.add_argument("--ca", metavar="FILE", help="certificate authority to trust for https (PEM)")


def client_of(args: argparse.Namespace) -> Client:
    token = args.token or os.environ.get("BELLASSAY_TOKEN")
    if not token:
        raise InputError(
            "no token: set BELLASSAY_TOKEN or give --token; make one with: bellassay token create NAME", code="no-token"
        )
    parts = urlsplit(args.url)
    if parts.scheme == "http" and parts.hostname and not is_this_machine(parts.hostname):
        note("caution: token and data travel unencrypted to another machine; use https")
    return Client(args.url, token, verify=args.ca or True)


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "watch",
        watch,
        "show the progress of a run until it ends",
        """Shows stage, share done and time left of a run until it is certified, refused or failed. Interrupting it
        does not disturb the run. Exit code 1 when the run was refused or failed.""",
        """
        bellassay watch RUN
        """,
    )
    parser.add_argument("run_id", metavar="RUN", help="id of the run")
    add_service_options(parser)


def watch(args: argparse.Namespace) -> int:
    run = follow(client_of(args), args.run_id, seed_hint=seed_command(args, args.run_id))
    emit(args, run, run_lines(run))
    return REFUSED if run["state"] in ("refused", "failed") else DONE


def command_line(args: argparse.Namespace, words: str) -> str:
    """A further command as the user would type it: with the address, where this call was given another one."""
    elsewhere = args.url != (os.environ.get("BELLASSAY_URL") or DEFAULT_URL)
    return f"bellassay {words}" + (f" --url {args.url}" if elsewhere else "")


def seed_command(args: argparse.Namespace, run_id: str) -> str:
    return command_line(args, f"submit --run {run_id} --seed FILE")


def follow(client: Client, run_id: str, *, until_seed: bool = False, seed_hint: str = "") -> dict:
    """Show a run until it ends (or asks for its seed); the Run document as it is then.

    seed_hint  the command that sends a seed, said once if the run waits for one
    """
    said, said_at, share, bar = None, 0.0, 0.0, None
    try:
        for run in client.watch(run_id):
            place = (run["state"], run["stage"], run["waiting_for"])
            if bar is None:
                bar = _StageBar()
            done = run["fraction"] or 0.0
            if not bar.show(run) and (place != said or due(time.monotonic() - said_at, done - share)):
                said, said_at, share = place, time.monotonic(), done
                note(_progress_text(run))
            if run["waiting_for"] == "seed":
                if until_seed:
                    break
                if seed_hint:
                    if bar.close():
                        bar = None
                    note(f"send the seed with: {seed_hint}")
                    seed_hint = ""
    finally:
        if bar is not None:
            bar.close()
    return client.run(run_id)  # the last event tells how the run was then, not whether it was collected since


class _StageBar:
    """One line that is rewritten, on a terminal; does nothing elsewhere."""

    def __init__(self) -> None:
        self._stream = sys.stderr if sys.stderr.isatty() else None

    def show(self, run: dict) -> bool:
        if self._stream is None:
            return False
        filled = round(30 * (run["fraction"] or 0.0))
        line = f"[{'#' * filled}{'.' * (30 - filled)}] {_progress_text(run)}"[:79]
        self._stream.write(f"\r{line:<79}")
        self._stream.flush()
        return True

    def close(self) -> bool:
        """Ends the line; whether there was one."""
        if self._stream is not None:
            self._stream.write("\n")
        return self._stream is not None


def _progress_text(run: dict) -> str:
    if run["waiting_for"] == "seed":
        needed = run["seed"]["bits_needed"]
        return f"waits for its seed ({several(needed, 'bit')})" if needed else "waits for its seed"
    if run["state"] != "working":
        return run["state"]
    left = f", about {duration(run['eta_s'])} left" if run["eta_s"] is not None else ""
    return f"{run['stage'] or 'working'} {100 * (run['fraction'] or 0.0):.0f} %{left}"


def _received(segments: int, rounds: int) -> str:
    return f"{several(segments, 'segment')}, {several(rounds, 'round')}"


def run_lines(run: dict) -> list[str]:
    """A Run document for reading."""
    lines: list[tuple[str, object]] = [("run", run["id"]), ("state", run["state"])]
    if run.get("message"):
        lines.append(("message", run["message"]))
    if run.get("sealed"):
        sealed = run["sealed"]
        lines.append(("sealed", f"{_received(sealed['segments'], sealed['rounds'])}, {sealed['time']}"))
    else:
        lines.append(("received", _received(run["segments_received"], run["rounds_received"])))
    score = run.get("score") or {}
    if score.get("winning_probability") is not None:
        lines.append(("winning probability", f"{score['winning_probability']:.7f}"))
    if run.get("available_bits") is not None:
        lines.append(("available", several(run["available_bits"], "bit")))
    if run.get("certified_length") is not None:
        lines.append(("certified length", several(run["certified_length"], "bit")))
    if run.get("waiting_for") == "seed":
        lines.append(("waits for", f"its seed: bellassay submit --run {run['id']} --seed FILE"))
    if run.get("stage_seconds"):
        lines.append(("stages", ", ".join(f"{stage} {duration(s)}" for stage, s in run["stage_seconds"].items())))
    flagged = [item["sentence"] for item in run.get("diagnostics") or () if item.get("flag")]
    return rows(lines) + (["", "diagnostics (they certify nothing)", *bullets(flagged)] if flagged else [])
