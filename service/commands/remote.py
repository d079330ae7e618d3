"""`submit`, `watch`, `collect`: the client of a service."""

from __future__ import annotations

import argparse
import json
import os
import time
import uuid
from pathlib import Path
from typing import Any

from extractor.errors import InputError, ProofError
from service.client import FINAL_STATES, Client, ServiceProblem, sha256_of
from service.commands.common import (
    DONE, REFUSED, SPARSE_LINE_S, Progress, add_command, bullets, duration, emit, grouped, note, read_bytes, read_declaration,
    read_json, rows, write_file,
)
from service.transport import DEFAULT_URL, is_this_machine

STATE_FORMAT = "bellassay submit state 1"
SEED_WAIT_S = 1.0


def add_service_options(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--url", default=os.environ.get("BELLASSAY_URL") or DEFAULT_URL, metavar="URL",
                        help=f"address of the service (default: BELLASSAY_URL, else {DEFAULT_URL})")
    parser.add_argument("--token", default=None, metavar="TOKEN", help="access token (default: BELLASSAY_TOKEN, which other users cannot see)")
    parser.add_argument("--ca", metavar="FILE", help="certificate authority to trust for https (PEM)")


def client_of(args: argparse.Namespace) -> Client:
    from urllib.parse import urlsplit

    token = args.token or os.environ.get("BELLASSAY_TOKEN")
    if not token:
        raise InputError("no token: set BELLASSAY_TOKEN or give --token; make one with: bellassay token create NAME", code="no-token")
    parts = urlsplit(args.url)
    if parts.scheme == "http" and parts.hostname and not is_this_machine(parts.hostname):
        note("caution: token and data travel unencrypted to another machine; use https")
    return Client(args.url, token, verify=args.ca or True)


def add(commands: Any) -> None:
    parser = add_command(
        commands, "submit", submit, "upload the rounds of a run, seal it",
        """Records the declaration (if a file is given), opens a run, uploads the round files as segments 1, 2, ... and
        seals the run, which starts the job. When interrupted, give the same command again: it sends what is missing.
        The run's id is remembered in a small file next to the declaration. A seed, where the declaration asks for an
        uploaded one, is sent with --seed once the certificate says how long it must be.""",
        """
        bellassay submit rounds-*.npz --declaration run7.json --watch
        bellassay submit --run RUN --seed seed.bin
        """)
    parser.add_argument("files", nargs="*", metavar="FILE", help="round files, in the order they were taken")
    parser.add_argument("--declaration", metavar="D.json|ID", help="declaration file, or the id of a recorded declaration")
    parser.add_argument("--run", metavar="RUN", help="id of the run to go on with (default: remembered next to the declaration)")
    parser.add_argument("--seed", metavar="S.bin", help="seed file to upload when the certificate has said its length in bits")
    parser.add_argument("--watch", action="store_true", help="stay until the run has ended, showing its progress")
    add_service_options(parser)

    parser = add_command(
        commands, "watch", watch, "show the progress of a run until it ends",
        """Shows stage, share done and time left of a run until it is certified, refused or failed. Interrupting it
        does not disturb the run. Exit code 1 when the run was refused or failed.""",
        """
        bellassay watch RUN
        """)
    parser.add_argument("run_id", metavar="RUN", help="id of the run")
    add_service_options(parser)

    parser = add_command(
        commands, "collect", collect, "fetch the bits and the audit documents of a run",
        """Downloads bits, salt, seed, certificate, report and bundle of a run, going on where an earlier download
        stopped, checks every digest and the whole bundle, and then confirms the collection: the service erases its
        key, and the copy in DIR is the only one. With --keep nothing is confirmed and the bits stay at the service.""",
        """
        bellassay collect RUN --out run7/
        """)
    parser.add_argument("run_id", metavar="RUN", help="id of the run")
    parser.add_argument("--out", required=True, metavar="DIR", help="folder for the files; made if missing")
    parser.add_argument("--keep", action="store_true", help="do not confirm: the bits stay at the service and can be fetched again")
    add_service_options(parser)


# ---- submit

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
            pass                                        # a missing file is noticed before anything is recorded
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
        raise InputError(f"the run has a segment {extra[0]} already, but only {len(args.files)} files were given; "
                         "give all files of the run, in order", code="segments-differ")
    sizes = [os.path.getsize(path) for path in args.files]
    started = time.monotonic()
    sent = 0
    with Progress("uploading", sum(sizes), "B") as progress:
        for k, (path, size) in enumerate(zip(args.files, sizes), start=1):
            digest = sha256_of(path)
            if k in there:
                if there[k]["digest"] != "sha256:" + digest.hex():
                    raise InputError(f"segment {k} arrived earlier with another content; a segment is never replaced",
                                     code="segment-differs", file=path)
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
        raise InputError("the declaration says that the seed is drawn from the operating system", code="seed-not-wanted", file=args.seed)
    if run["state"] == "open":
        raise InputError("the run is not sealed yet; a seed is taken only after sealing", code="not-sealed", file=args.seed)
    if run["seed"]["received"]:
        note("the seed has arrived already")
        return run
    if run["waiting_for"] != "seed" and run["state"] not in FINAL_STATES:
        run = follow(client, run["id"], until_seed=True)
    if run["waiting_for"] != "seed":
        return run
    needed, size = run["seed"]["bits_needed"], os.path.getsize(args.seed)
    if needed is not None and size != (needed + 7) // 8:
        raise InputError(f"holds {size} bytes; the certificate asks for {needed} bits, which is {(needed + 7) // 8} bytes",
                         code="seed-length", file=args.seed)
    with Progress("sending the seed", size, "B") as progress:
        client.put_seed(run["id"], args.seed, progress.advance)
    note("seed sent")
    return client.run(run["id"])


# ---- watch

def watch(args: argparse.Namespace) -> int:
    run = follow(client_of(args), args.run_id)
    emit(args, run, run_lines(run))
    return REFUSED if run["state"] in ("refused", "failed") else DONE


def follow(client: Client, run_id: str, *, until_seed: bool = False) -> dict:
    """Show a run until it ends (or asks for its seed); the last Run document."""
    said, said_at, bar, run = None, 0.0, None, None
    try:
        for run in client.watch(run_id):
            place = (run["state"], run["stage"], run["waiting_for"])
            if bar is None:
                bar = _StageBar()
            if not bar.show(run) and (place != said or time.monotonic() - said_at >= SPARSE_LINE_S):
                said, said_at = place, time.monotonic()
                note(_progress_text(run))
            if until_seed and run["waiting_for"] == "seed":
                break
    finally:
        if bar is not None:
            bar.close()
    if run is None:
        return client.run(run_id)
    return run


class _StageBar:
    """One line that is rewritten, on a terminal; does nothing elsewhere."""

    def __init__(self) -> None:
        import sys

        self._stream = sys.stderr if sys.stderr.isatty() else None

    def show(self, run: dict) -> bool:
        if self._stream is None:
            return False
        filled = round(30 * (run["fraction"] or 0.0))
        line = f"[{'#' * filled}{'.' * (30 - filled)}] {_progress_text(run)}"[:79]
        self._stream.write(f"\r{line:<79}")
        self._stream.flush()
        return True

    def close(self) -> None:
        if self._stream is not None:
            self._stream.write("\n")


def _progress_text(run: dict) -> str:
    if run["waiting_for"] == "seed":
        needed = run["seed"]["bits_needed"]
        return f"waits for its seed ({grouped(needed)} bits)" if needed else "waits for its seed"
    if run["state"] != "working":
        return run["state"]
    left = f", about {duration(run['eta_s'])} left" if run["eta_s"] is not None else ""
    return f"{run['stage'] or 'working'} {100 * (run['fraction'] or 0.0):.0f} %{left}"


def run_lines(run: dict) -> list[str]:
    """A Run document for reading."""
    lines: list[tuple[str, object]] = [("run", run["id"]), ("state", run["state"])]
    if run.get("message"):
        lines.append(("message", run["message"]))
    if run.get("sealed"):
        lines.append(("sealed", f"{run['sealed']['segments']} segments, {grouped(run['sealed']['rounds'])} rounds, {run['sealed']['time']}"))
    else:
        lines.append(("received", f"{run['segments_received']} segments, {grouped(run['rounds_received'])} rounds"))
    score = run.get("score") or {}
    if score.get("winning_probability") is not None:
        lines.append(("winning probability", f"{score['winning_probability']:.7f}"))
    if run.get("available_bits") is not None:
        lines.append(("available", f"{grouped(run['available_bits'])} bits"))
    if run.get("certified_length") is not None:
        lines.append(("certified length", f"{grouped(run['certified_length'])} bits"))
    if run.get("waiting_for") == "seed":
        lines.append(("waits for", f"its seed: bellassay submit --run {run['id']} --seed S.bin"))
    if run.get("stage_seconds"):
        lines.append(("stages", ", ".join(f"{stage} {duration(s)}" for stage, s in run["stage_seconds"].items())))
    flagged = [item["sentence"] for item in run.get("diagnostics") or () if item.get("flag")]
    return rows(lines) + (["", "diagnostics (they certify nothing)", *bullets(flagged)] if flagged else [])


# ---- collect

def collect(args: argparse.Namespace) -> int:
    client = client_of(args)
    run = client.run(args.run_id)
    if run["state"] not in FINAL_STATES:
        raise InputError(f"the run is {run['state']}; there is nothing to collect yet (bellassay watch {run['id']})", code="not-finished")
    if run["state"] == "failed":
        note(f"the run failed: {run['message']}")
        return REFUSED
    out = Path(args.out)
    out.mkdir(parents=True, exist_ok=True)
    files: dict[str, str] = {}

    def store(name: str, data: bytes) -> None:
        write_file(out / name, data)
        files[name] = str(out / name)

    store("certificate.json", client.certificate(run["id"]))
    store("report.json", client.report(run["id"]))
    client.bundle(run["id"], out / "bundle.zip")
    files["bundle.zip"] = str(out / "bundle.zip")
    collected = None
    if run["state"] == "certified":
        size = (run["certified_length"] + 7) // 8
        digest, salt = _fetch_bits(client, run, out, size, files)
        _check_before_confirming(out, salt)
        if args.keep:
            note("not confirmed (--keep): the bits stay at the service")
        else:
            collected = client.collect(run["id"], digest)
            note("collected: the service has erased its key; the copy here is the only one")
    result = {"run": run["id"], "state": "collected" if collected else run["state"], "certified_length": run["certified_length"],
              "files": files, "collection": collected}
    emit(args, result, rows([("run", run["id"]), ("state", result["state"]), *files.items()]))
    if run["state"] in ("collected", "erased") and not (out / "bits.bin").exists():
        note("the bits were collected before; only the audit documents were fetched")
    return REFUSED if run["state"] == "refused" else DONE


def _fetch_bits(client: Client, run: dict, out: Path, size: int, files: dict[str, str]) -> tuple[bytes, str]:
    with Progress("fetching the bits", size, "B") as progress:
        digest, salt = client.get_bits(run["id"], out / "bits.bin", progress.advance)
    if (out / "bits.bin").stat().st_size != size:
        raise ProofError(f"{size} bytes of bits were promised, {(out / 'bits.bin').stat().st_size} arrived", code="wrong-length")
    write_file(out / "bits-salt.hex", salt.encode() + b"\n", secret=True)
    files |= {"bits.bin": str(out / "bits.bin"), "bits-salt.hex": str(out / "bits-salt.hex")}
    try:
        client.get_seed(run["id"], out / "seed.bin")
        files["seed.bin"] = str(out / "seed.bin")
    except ServiceProblem as problem:
        if problem.status not in (403, 404):
            raise
        note(f"seed not fetched: {problem}")
    return digest, salt


def _check_before_confirming(out: Path, salt: str) -> None:
    """The bundle holds, and the bits are the ones it commits to; otherwise nothing is confirmed (ProofError)."""
    from extractor.seal.verify import verify_bundle

    verify_bundle(read_bytes(out / "bundle.zip", 1 << 30), bits=read_bytes(out / "bits.bin", 1 << 40),
                  bits_salt=bytes.fromhex(salt), say=lambda *_: None)
