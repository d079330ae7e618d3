"""`collect`: bits and audit documents from a service, checked before the collection is confirmed."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from extractor.errors import InputError, ProofError
from service.client import FINAL_STATES, Client, ServiceProblem
from service.commands.common import (
    DONE,
    REFUSED,
    Progress,
    add_command,
    emit,
    note,
    read_bytes,
    read_json,
    rows,
    write_file,
)
from service.commands.remote import add_service_options, client_of, command_line, seed_command


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "collect",
        collect,
        "fetch the bits and the audit documents of a run",
        """Downloads bits, salt, seed, certificate, report and bundle of a run, going on where an earlier download
        stopped, checks every digest and the whole bundle, and then confirms the collection: the service erases its
        key, and the copy in DIR is the only one. With --keep nothing is confirmed and the bits stay at the service.""",
        """
        bellassay collect RUN --out run7/
        """,
    )
    parser.add_argument("run_id", metavar="RUN", help="id of the run")
    parser.add_argument("--out", required=True, metavar="DIR", help="folder for the files; made if missing")
    parser.add_argument(
        "--keep", action="store_true", help="do not confirm: the bits stay at the service and can be fetched again"
    )
    add_service_options(parser)


def collect(args: argparse.Namespace) -> int:
    client = client_of(args)
    run = client.run(args.run_id)
    if run["waiting_for"] == "seed":
        raise InputError(
            "the run waits for its seed; there is nothing to collect before it has come: "
            + seed_command(args, run["id"]),
            code="waits-for-seed",
        )
    if run["state"] not in FINAL_STATES:
        raise InputError(
            f"the run is {run['state']}; there is nothing to collect yet: {command_line(args, 'watch ' + run['id'])}",
            code="not-finished",
        )
    if run["state"] == "failed":
        note(f"the run failed: {run['message']}")
        return REFUSED
    out = Path(args.out)
    _check_folder(out, run["id"])
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
    result = {
        "run": run["id"],
        "state": "collected" if collected else run["state"],
        "certified_length": run["certified_length"],
        "files": files,
        "collection": collected,
    }
    emit(args, result, rows([("run", run["id"]), ("state", result["state"]), *files.items()]))
    if run["state"] in ("collected", "erased") and not (out / "bits.bin").exists():
        note("the bits were collected before; only the audit documents were fetched")
    return REFUSED if run["state"] == "refused" else DONE


def _check_folder(out: Path, run_id: str) -> None:
    """Refuse a folder with the files of another run: its bits may be the only copy there is."""
    if (out / "report.json").exists():
        report = read_json(out / "report.json")
        if isinstance(report, dict) and report.get("run") == run_id:
            return
    elif not (out / "bits.bin").exists():
        return
    raise InputError("holds the files of another run; choose another folder", code="folder-taken", file=str(out))


def _fetch_bits(client: Client, run: dict, out: Path, size: int, files: dict[str, str]) -> tuple[bytes, str]:
    with Progress("fetching the bits", size, "B") as progress:
        digest, salt = client.get_bits(run["id"], out / "bits.bin", progress.advance)
    if (out / "bits.bin").stat().st_size != size:
        raise ProofError(
            f"{size} bytes of bits were promised, {(out / 'bits.bin').stat().st_size} arrived", code="wrong-length"
        )
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
    from service.commands.offline import LARGEST_BUNDLE_BYTES, salt_of

    try:
        with open(out / "bits.bin", "rb") as bits:
            verify_bundle(
                read_bytes(out / "bundle.zip", LARGEST_BUNDLE_BYTES),
                bits=bits,
                bits_salt=salt_of(salt),
                say=lambda _: None,
            )
    except ProofError as fault:
        raise ProofError(
            f"{fault}; nothing was confirmed, the bits are still at the service", code=fault.code
        ) from None
