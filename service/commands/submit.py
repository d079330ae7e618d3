"""`submit`: rounds to a service, segment by segment, and on where an interrupted call stopped."""

from __future__ import annotations

import argparse
import json
import os
import time
import uuid
from pathlib import Path
from typing import Any

from extractor.errors import InputError
from service.client import FINAL_STATES, Client, sha256_of
from service.commands.common import (
    DONE,
    REFUSED,
    Progress,
    add_command,
    duration,
    emit,
    grouped,
    note,
    read_declaration,
    read_json,
    write_file,
)
from service.commands.remote import add_service_options, client_of, follow, run_lines

STATE_FORMAT = "bellassay submit state 1"


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "submit",
        submit,
        "upload the rounds of a run, seal it",
        """Records the declaration (if a file is given), opens a run, uploads the round files as segments 1, 2, ... and
        seals the run, which starts the job. When interrupted, give the same command again: it sends what is missing.
        The run's id is remembered in a small file next to the declaration. A seed, where the declaration asks for an
        uploaded one, is sent with --seed once the certificate says how long it must be.""",
        """
        bellassay submit rounds-*.npz --declaration run7.json --watch
        bellassay submit --run RUN --seed seed.bin
        """,
    )
    parser.add_argument("files", nargs="*", metavar="FILE", help="round files, in the order they were taken")
    parser.add_argument(
        "--declaration", metavar="D.json|ID", help="declaration file, or the id of a recorded declaration"
    )
    parser.add_argument(
        "--run", metavar="RUN", help="id of the run to go on with (default: remembered next to the declaration)"
    )
    parser.add_argument(
        "--seed", metavar="S.bin", help="seed file to upload when the certificate has said its length in bits"
    )
    parser.add_argument("--watch", action="store_true", help="stay until the run has ended, showing its progress")
    add_service_options(parser)


class _State:
    """What a later call must know to go on: a JSON file next to the declaration."""

    def __init__(self, path: Path, url: str) -> None:
        self.path, self.values = path, {"format": STATE_FORMAT, "url": url}
        if path.exists():
            found = read_json(path)
            if isinstance(found, dict) and found.get("format") == STATE_FORMAT and found.get("url") == url:
                self.values = found

    def get(self, name: str) -> Any:
        return self.values.get(name)

    def keep(self, **values: Any) -> None:
        self.values |= values
        write_file(self.path, json.dumps(self.values, indent=2).encode() + b"\n")


def submit(args: argparse.Namespace) -> int:
    if not args.files and not args.seed:
        raise InputError("give round files, or --seed for a run that waits for it", code="bad-usage")
    if not args.declaration and not args.run:
        raise InputError("give --declaration, or --run for a run that is open already", code="bad-usage")
    for path in [*args.files, *([args.seed] if args.seed else [])]:
        with open(path, "rb"):
            pass  # a missing file is noticed before anything is recorded
    client = client_of(args)
    run = client.run(args.run or _open(args, client))
    if args.files and run["state"] == "open":
        run = _send_segments(args, client, run)
    elif args.files:
        note(f"run {run['id']} is {run['state']} already: no rounds are sent")
    if args.seed:
        run = _send_seed(args, client, run)
    if args.watch:
        run = follow(client, run["id"])
    emit(args, run, run_lines(run))
    return REFUSED if run["state"] in ("refused", "failed") else DONE


def _open(args: argparse.Namespace, client: Client) -> str:
    """The id of the run for this declaration: remembered, or opened now. Each step is remembered before the next."""
    is_file = os.path.exists(args.declaration)
    if not is_file and ("/" in args.declaration or args.declaration.endswith(".json")):
        raise InputError("there is no such declaration file", code="no-file", file=args.declaration)
    state = _State(Path(f"{args.declaration}.run") if is_file else Path(f"bellassay-{args.declaration}.run"), args.url)
    document_digest = sha256_of(args.declaration).hex() if is_file else None
    if state.get("run") and state.get("file_sha256") == document_digest:
        note(f"going on with run {state.get('run')} (remembered in {state.path})")
        return state.get("run")
    if is_file:
        if not (state.get("declaration") and state.get("file_sha256") == document_digest):
            from extractor.documents import declaration_document

            recorded = client.declare(declaration_document(read_declaration(args.declaration)))
            state.keep(declaration=recorded["id"], file_sha256=document_digest, opening=str(uuid.uuid4()), run=None)
            note(f"declaration recorded: {recorded['id']} at {recorded['time']}")
        declaration = state.get("declaration")
    else:
        declaration = args.declaration
        if not state.get("opening"):
            state.keep(opening=str(uuid.uuid4()))
    run = client.open_run(declaration, state.get("opening"))
    state.keep(run=run["id"])
    note(f"run opened: {run['id']}")
    return run["id"]


def _send_segments(args: argparse.Namespace, client: Client, run: dict) -> dict:
    """Upload what is missing and seal."""
    there = {segment["segment"]: segment for segment in client.segments(run["id"])["segments"]}
    if extra := sorted(k for k in there if k > len(args.files)):
        raise InputError(
            f"the run has a segment {extra[0]} already, but only {len(args.files)} files were given; "
            "give all files of the run, in order",
            code="segments-differ",
        )
    sizes = [os.path.getsize(path) for path in args.files]
    started = time.monotonic()
    sent = 0
    with Progress("uploading", sum(sizes), "B") as progress:
        for k, (path, size) in enumerate(zip(args.files, sizes), start=1):
            digest = sha256_of(path)
            if k in there:
                if there[k]["digest"] != "sha256:" + digest.hex():
                    raise InputError(
                        f"segment {k} arrived earlier with another content; a segment is never replaced",
                        code="segment-differs",
                        file=path,
                    )
                progress.advance(size)
                continue
            there[k] = client.put_segment(run["id"], k, path, progress.advance, digest)
            sent += size
    if sent:
        seconds = max(time.monotonic() - started, 1e-9)
        note(f"uploaded {sent / 1e6:.1f} MB in {duration(seconds)} ({sent / 1e6 / seconds:.0f} MB/s)")
    rounds = sum(segment["rounds"] for segment in there.values())
    sealed = client.seal(run["id"], len(args.files), rounds)
    note(f"sealed: {len(args.files)} segments, {grouped(rounds)} rounds")
    return sealed


def _send_seed(args: argparse.Namespace, client: Client, run: dict) -> dict:
    """Wait until the run asks for its seed, then send it."""
    if run["seed"]["source"] != "upload":
        raise InputError(
            "the declaration says that the seed is drawn from the operating system",
            code="seed-not-wanted",
            file=args.seed,
        )
    if run["state"] == "open":
        raise InputError(
            "the run is not sealed yet; a seed is taken only after sealing", code="not-sealed", file=args.seed
        )
    if run["seed"]["received"]:
        note("the seed has arrived already")
        return run
    if run["waiting_for"] != "seed" and run["state"] not in FINAL_STATES:
        run = follow(client, run["id"], until_seed=True)
    if run["waiting_for"] != "seed":
        return run
    needed, size = run["seed"]["bits_needed"], os.path.getsize(args.seed)
    if needed is not None and size != (needed + 7) // 8:
        raise InputError(
            f"holds {size} bytes; the certificate asks for {needed} bits, which is {(needed + 7) // 8} bytes",
            code="seed-length",
            file=args.seed,
        )
    with Progress("sending the seed", size, "B") as progress:
        client.put_seed(run["id"], args.seed, progress.advance)
    note("seed sent")
    return client.run(run["id"])
