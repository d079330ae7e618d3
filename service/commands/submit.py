"""`submit`: rounds to a service, segment by segment, and on where an interrupted call stopped."""

from __future__ import annotations

import argparse
import json
import os
import time
import uuid
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from extractor.errors import InputError
from service.client import FINAL_STATES, Client, ServiceProblem, sha256_of
from service.commands.common import (
    DONE,
    REFUSED,
    Progress,
    add_command,
    duration,
    emit,
    note,
    read_declaration,
    read_json,
    several,
    volume,
    write_file,
)
from service.commands.remote import add_service_options, client_of, command_line, follow, run_lines, seed_command

STATE_FORMAT = "bellassay submit state 1"


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "submit",
        submit,
        "upload the rounds of a run, seal it",
        """Records the declaration (if a file is given and it is not recorded yet), opens a run, uploads the round
        files as segments 1, 2, ... and seals the run, which starts the job. When interrupted, give the same command
        again: it sends what is missing. The run's id is remembered in a small file next to the declaration. A seed,
        where the declaration asks for an uploaded one, is sent with --seed once the certificate says how long it must
        be.""",
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
    run = client.run(_given_run(args, client) if args.run else _open(args, client))
    if args.files and run["state"] == "open":
        run = _send_segments(args, client, run)
    elif args.files:
        _compare_segments(args, client, run)
        note(f"run {run['id']} is {run['state']} already and holds just these files: no rounds are sent")
    if args.seed:
        run = _send_seed(args, client, run)
    if args.watch:
        run = follow(client, run["id"], until_seed=not args.seed)
    emit(args, run, run_lines(run))
    if step := _next_step(args, run):
        note(f"next: {step}")
    return REFUSED if run["state"] in ("refused", "failed") else DONE


def _next_step(args: argparse.Namespace, run: dict) -> str:
    """The command that goes on from here, empty if there is none."""
    wants_seed = run["seed"]["source"] == "upload" and not run["seed"]["received"] and run["state"] not in FINAL_STATES
    if wants_seed and not args.seed:
        return seed_command(args, run["id"])
    if run["state"] in ("certified", "refused"):
        return command_line(args, f"collect {run['id']} --out DIR")
    return "" if run["state"] in FINAL_STATES else command_line(args, f"watch {run['id']}")


def _given_run(args: argparse.Namespace, client: Client) -> str:
    """The run named by --run; a declaration given beside it must be the run's own."""
    run = client.run(args.run)
    recorded = client.declaration(run["declaration"])
    note(f"declaration recorded: {recorded['id']} at {recorded['time']}")
    if args.declaration and args.declaration != recorded["id"]:
        if not _is_file(args.declaration):
            raise InputError(
                f"run {run['id']} is under declaration {recorded['id']}, not {args.declaration}",
                code="declaration-differs",
            )
        _check_same(args.declaration, recorded, f"run {run['id']} was opened", "give the declaration of this run")
    return run["id"]


def _is_file(declaration: str) -> bool:
    """Whether --declaration names a file rather than an id. Errors raised: InputError if the file is missing."""
    if os.path.exists(declaration):
        return True
    if "/" in declaration or declaration.endswith(".json"):
        raise InputError("there is no such declaration file", code="no-file", file=declaration)
    return False


def _document_in(path: str) -> dict:
    from extractor.documents import declaration_document

    return declaration_document(read_declaration(path))


def _check_same(path: str, recorded: dict, what: str, advice: str) -> None:
    """Errors raised: InputError unless the file holds the recorded declaration, however it is laid out."""
    from extractor.seal import canonical

    if canonical.digest(_document_in(path)) != recorded["digest"]:
        raise InputError(
            f"is not the declaration under which {what} (recorded as {recorded['id']} at {recorded['time']}); "
            f"a declaration cannot be changed afterwards: {advice}",
            code="declaration-differs",
            file=path,
        )


def _open(args: argparse.Namespace, client: Client) -> str:
    """The id of the run for this declaration: remembered, or opened now. Each step is remembered before the next."""
    is_file = _is_file(args.declaration)
    state = _State(Path(f"{args.declaration}.run") if is_file else Path(f"bellassay-{args.declaration}.run"), args.url)
    if is_file and state.get("declaration"):
        recorded = _remembered(client, state)
        what = f"run {state.get('run')} was opened" if state.get("run") else "an earlier call began"
        _check_same(
            args.declaration,
            recorded,
            what,
            f"put the old text back, or keep the changed one under another name, which makes another run "
            f"(what is remembered stands in {state.path})",
        )
        note(f"declaration recorded: {recorded['id']} at {recorded['time']}")
    elif is_file:
        document = _document_in(args.declaration)
        with _naming(args.declaration, "declaration"):
            recorded, new = client.record(document)
        state.keep(declaration=recorded["id"], opening=str(uuid.uuid4()), run=None)
        note(f"declaration recorded: {recorded['id']} at {recorded['time']}")
        if new:
            note("CAUTION: it was recorded only now. Rounds that exist already were not covered by")
            note("an earlier record: nobody can tell whether the declaration was chosen after")
            note("looking at them. Next time record it first (bellassay declare ... --post), then")
            note("take the rounds.")
    else:
        recorded = client.declaration(args.declaration)
        note(f"declaration recorded: {recorded['id']} at {recorded['time']}")
        if not state.get("opening"):
            state.keep(opening=str(uuid.uuid4()))
    if state.get("run"):
        note(f"going on with run {state.get('run')} (remembered in {state.path})")
        return state.get("run")
    run = client.open_run(recorded["id"], state.get("opening"))
    state.keep(run=run["id"])
    note(f"run opened: {run['id']}")
    return run["id"]


def _remembered(client: Client, state: _State) -> dict:
    """The record of the declaration an earlier call made."""
    try:
        return client.declaration(state.get("declaration"))
    except ServiceProblem as problem:
        if problem.status != 404:
            raise
        raise InputError(
            f"remembers declaration {state.get('declaration')}, which the service at {state.get('url')} does not know "
            "to this token: use the token of its owner, or, if the service was set up anew, remove this file",
            code="not-found",
            file=str(state.path),
        ) from None


@contextmanager
def _naming(path: str, sent_as: str) -> Iterator[None]:
    """What the service says about an upload names the file as the user does."""
    try:
        yield
    except ServiceProblem as problem:
        raise problem.about(path, sent_as) from None


def _digests(paths: Sequence[str]) -> list[bytes]:
    """SHA-256 of each file."""
    with Progress("computing SHA-256", sum(map(os.path.getsize, paths)), "B") as progress:
        return [sha256_of(path, progress.advance) for path in paths]


def _compare_segments(args: argparse.Namespace, client: Client, run: dict) -> None:
    """Errors raised: InputError unless the files given are the segments of a run that takes no more."""
    there = {segment["segment"]: segment["digest"] for segment in client.segments(run["id"])["segments"]}
    if len(there) != len(args.files):
        raise InputError(
            f"run {run['id']} is {run['state']} already, with {several(len(there), 'segment')}, but "
            f"{several(len(args.files), 'file')} {'was' if len(args.files) == 1 else 'were'} given; "
            "a sealed run takes no more rounds: new rounds need a new declaration and a new run",
            code="segments-differ",
        )
    for k, (path, digest) in enumerate(zip(args.files, _digests(args.files)), start=1):
        if there.get(k) != "sha256:" + digest.hex():
            raise InputError(
                f"is not what run {run['id']}, which is {run['state']} already, received as segment {k}; a segment is "
                "never replaced: new rounds need a new declaration and a new run",
                code="segment-differs",
                file=path,
            )


def _send_segments(args: argparse.Namespace, client: Client, run: dict) -> dict:
    """Upload what is missing and seal."""
    there = {segment["segment"]: segment for segment in client.segments(run["id"])["segments"]}
    if extra := sorted(k for k in there if k > len(args.files)):
        raise InputError(
            f"the run has a segment {extra[0]} already, but only {several(len(args.files), 'file')} came with the "
            "command; give all files of the run, in order",
            code="segments-differ",
        )
    sizes = [os.path.getsize(path) for path in args.files]
    digests = _digests(args.files)
    for k, (path, digest) in enumerate(zip(args.files, digests), start=1):
        if k in there and there[k]["digest"] != "sha256:" + digest.hex():
            raise InputError(
                f"segment {k} arrived earlier with another content; a segment is never replaced",
                code="segment-differs",
                file=path,
            )
    if there:
        note(f"{len(there)} of {several(len(sizes), 'segment')} had arrived before")
    started = time.monotonic()
    sent = 0
    with Progress("uploading", sum(sizes), "B") as progress:
        for k, (path, size, digest) in enumerate(zip(args.files, sizes, digests), start=1):
            if k in there:
                progress.advance(size)
                continue
            with _naming(path, Path(path).name):
                there[k] = client.put_segment(run["id"], k, path, progress.advance, digest)
            sent += size
    if sent:
        seconds = max(time.monotonic() - started, 1e-9)
        note(f"uploaded {volume(sent)} in {duration(seconds)} ({volume(sent / seconds)}/s)")
    rounds = sum(segment["rounds"] for segment in there.values())
    sealed = client.seal(run["id"], len(args.files), rounds)
    note(f"sealed: {several(len(args.files), 'segment')}, {several(rounds, 'round')}")
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
    if run["waiting_for"] != "seed" and not run["seed"]["received"] and run["state"] not in FINAL_STATES:
        run = follow(client, run["id"], until_seed=True)
    if run["seed"]["received"]:
        with _naming(args.seed, "seed"):
            client.put_seed(run["id"], args.seed)  # the service compares: another seed is refused
        note("this seed had arrived before")
        return run
    if run["waiting_for"] != "seed":
        note(f"the run is {run['state']}: no seed is sent")
        return run
    needed, size = run["seed"]["bits_needed"], os.path.getsize(args.seed)
    if needed is not None and size != (needed + 7) // 8:
        raise InputError(
            f"holds {several(size, 'byte')}; the certificate asks for {several(needed, 'bit')}, which is "
            f"{several((needed + 7) // 8, 'byte')}",
            code="seed-length",
            file=args.seed,
        )
    with Progress("sending the seed", size, "B") as progress, _naming(args.seed, "seed"):
        client.put_seed(run["id"], args.seed, progress.advance)
    note("seed sent")
    return client.run(run["id"])
