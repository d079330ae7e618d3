"""`certify` and `verify`: the whole chain on files, and the check of a bundle; both without any service."""

from __future__ import annotations

import argparse
import os
import sys
import textwrap
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

from extractor.errors import Defect, InputError, ProofError
from extractor.model import Certificate, Declaration, RoundBatch
from service.commands.common import (
    DONE,
    REFUSED,
    WIDTH,
    Progress,
    add_command,
    bullets,
    emit,
    grouped,
    note,
    read_bytes,
    read_declaration,
    rows,
    several,
    whole,
    write_file,
)
from service.commands.rounds import opened

SEED_PIECE_BYTES = 1 << 22
LARGEST_BUNDLE_BYTES = 1 << 30


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "certify",
        certify,
        "the whole chain on files, without a service",
        """Reads the rounds, tallies them, certifies a length under the declaration and extracts the bits, all on this
        machine. Writes certificate.json, bits.bin and, unless one was given, the seed it drew from the operating
        system (seed.bin). There is no ledger here: nobody but you can tell what was declared when. Exit code 1 and no
        bits when the run earns too little.""",
        """
        bellassay certify rounds-*.npz --declaration run7.json --out run7/
        """,
    )
    parser.add_argument("files", nargs="+", metavar="FILE", help="round files, in the order they were taken")
    parser.add_argument(
        "--declaration", required=True, metavar="D.json", help="the declaration the rounds were taken under"
    )
    parser.add_argument(
        "--seed",
        metavar="S.bin",
        help="uniform seed bits, least significant bit first, of exactly the length the certificate asks for",
    )
    parser.add_argument(
        "--threads",
        type=whole,
        default=os.cpu_count() or 1,
        metavar="T",
        help="threads of the hash (default: one per processor)",
    )
    parser.add_argument("--out", required=True, metavar="DIR", help="folder for the results; made if missing")

    parser = add_command(
        commands,
        "verify",
        verify,
        "check a bundle, offline",
        """Checks the bundle of a run without asking anybody: signatures and proofs of the ledger, the declaration's
        place before the seal, and the certificate, recomputed from declaration and tally. With the rounds, the seed
        and the bits at hand it also recounts and re-extracts everything. Prints each check as a sentence; exit code 1
        with the sentence of what is wrong.""",
        """
        bellassay verify bundle.zip --rounds rounds-*.npz --seed seed.bin \\
            --bits bits.bin --bits-salt bits-salt.hex
        """,
    )
    parser.add_argument("bundle", metavar="BUNDLE", help="bundle file (zip) as collected")
    parser.add_argument(
        "--rounds", nargs="+", metavar="FILE", help="the round files of the run, in order: recounts them"
    )
    parser.add_argument("--seed", metavar="S.bin", help="the seed that was used")
    parser.add_argument("--bits", metavar="B.bin", help="the bits; with rounds and seed they are extracted again")
    parser.add_argument(
        "--bits-salt", metavar="HEX|FILE", help="salt of the commitment to the bits: 64 hexadecimal digits, or a file"
    )
    parser.add_argument(
        "--key", metavar="K", help="the ledger's verifier key (text or file), got from somebody you trust"
    )


def certify(args: argparse.Namespace) -> int:
    from extractor import pipeline
    from extractor.documents import certificate_document
    from extractor.seal import canonical

    declaration = read_declaration(args.declaration)
    if args.seed and declaration.seed_source == "system":
        note("mind: the declaration says that the seed is drawn from the operating system,")
        note("but --seed gives another one")
    elif not args.seed and declaration.seed_source == "upload":
        note("mind: the declaration says that you bring the seed, but no --seed is given:")
        note("it is drawn from the operating system if the run is certified")
    out = Path(args.out)
    for name in ("certificate.json", "bits.bin"):
        if (out / name).exists():
            raise InputError(
                "exists already: bits are made once; choose another folder", code="file-exists", file=str(out / name)
            )
    with Progress("counting", declaration.rounds, "rounds") as progress:
        total, digest = pipeline.read_run(pipeline.batches_of(opened(args.files), declaration.rules), progress.move_to)
    certificate = pipeline.certify(declaration, total)
    document = certificate_document(certificate)
    diagnostics = [item.document() for item in pipeline.look(declaration, total)[1]]
    out.mkdir(parents=True, exist_ok=True)
    result: dict[str, Any] = {
        "outcome": certificate.outcome,
        "certificate": document,
        "diagnostics": diagnostics,
        "records_digest": digest,
        "files": {"certificate": str(out / "certificate.json")},
    }
    bits = None
    if certificate.certified_length:
        seed_path, drawn = _seed(args, certificate, out)
        bits = _extract(args, declaration, certificate, seed_path, result["records_digest"])
        write_file(out / "bits.bin", bits, secret=True, replace=False)
        result["files"]["bits"] = str(out / "bits.bin")
        result["files"]["seed"] = str(seed_path)
        result["seed_drawn"] = drawn
    write_file(out / "certificate.json", canonical.canonical_bytes(document))
    emit(
        args,
        result,
        [
            *certificate_lines(certificate),
            "",
            *diagnostic_lines(diagnostics),
            "",
            *rows((name, path) for name, path in result["files"].items()),
        ],
    )
    return DONE if bits is not None else REFUSED


def _seed(args: argparse.Namespace, certificate: Certificate, out: Path) -> tuple[Path, bool]:
    """The seed file, drawn from the operating system if none was given; and whether it was."""
    if args.seed:
        return Path(args.seed), False
    path = out / "seed.bin"
    size, tail = (certificate.seed_bits + 7) // 8, certificate.seed_bits % 8
    try:
        handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    except FileExistsError:
        raise InputError(
            "exists already: a seed is used once; choose another folder", code="file-exists", file=str(path)
        ) from None
    with os.fdopen(handle, "wb") as file:
        left = size
        while left:
            piece = bytearray(os.urandom(min(left, SEED_PIECE_BYTES)))
            left -= len(piece)
            if not left and tail:
                piece[-1] &= (1 << tail) - 1  # bits beyond the end are zero in every packed file
            file.write(piece)
        file.flush()
        os.fsync(file.fileno())
    return path, True


def _extract(
    args: argparse.Namespace, declaration: Declaration, certificate: Certificate, seed_path: Path, digest: str
) -> bytes:
    """The bits; the second reading of the files must find the rounds the first one counted."""
    from extractor import pipeline
    from extractor.hashing.toeplitz import SeedFile
    from extractor.records.planes import PlaneDigest

    again = PlaneDigest()

    def batches_from(first: int) -> Iterator[RoundBatch]:
        if first:
            raise Defect("a hash without partial results begins with the first round")
        for batch in pipeline.batches_of(opened(args.files), declaration.rules):
            again.update(batch)
            yield batch

    with open(seed_path, "rb") as seed_file, Progress("hashing", certificate.rounds, "rounds") as progress:
        seed = SeedFile(seed_file, certificate.seed_bits)
        bits = pipeline.extract(
            declaration,
            certificate,
            batches_from,
            seed,
            threads=args.threads,
            on_progress=lambda done, _: progress.move_to(done),
        )
    if again.hexdigest() != digest:
        raise InputError(
            "the round files changed while they were being read; nothing was written", code="files-changed"
        )
    return bits


def diagnostic_lines(diagnostics: list[dict[str, Any]]) -> list[str]:
    """The flagged diagnostics as sentences."""
    flagged = [item["sentence"] for item in diagnostics if item["flag"]]
    if not flagged:
        return ["diagnostics: nothing odd (they certify nothing)"]
    return ["diagnostics (they certify nothing)", *bullets(flagged)]


def certificate_lines(certificate: Certificate) -> list[str]:
    """A certificate for reading: outcome, numbers, terms."""
    c = certificate
    lines = rows(
        [
            ("outcome", c.outcome if c.reason is None else f"{c.outcome}: {c.reason}"),
            ("certified length", several(c.certified_length, "bit")),
            ("available", several(c.available_bits, "bit")),
            ("rounds", f"{grouped(c.rounds)} of {grouped(c.declared_rounds)} declared"),
            ("soundness error", f"{c.soundness:g}"),
            ("method", c.method),
            ("seed", several(c.seed_bits, "bit")),
        ]
    )
    lines += ["", "terms (bits)"] + [f"  {term.name:<28}{_bits(term.bits):>22}" for term in c.terms]
    return [
        *lines,
        "",
        "The certificate is conditional on these assumptions:",
        *bullets(c.assumptions),
        "",
        "Mind:",
        *bullets(c.cautions),
    ]


def _bits(value: float) -> str:
    return f"{value:.0e}" if 0 < abs(value) < 0.0005 else f"{value:,.3f}".replace(",", " ")


def verify(args: argparse.Namespace) -> int:
    from extractor.seal.verify import verify_bundle

    trusted_key, bits_salt = _key_of(args.key), salt_of(args.bits_salt)
    data = read_bytes(args.bundle, LARGEST_BUNDLE_BYTES)
    sentences: list[str] = []

    def say(sentence: str) -> None:
        sentences.append(sentence)
        for line in textwrap.wrap(
            sentence, WIDTH, subsequent_indent="  ", break_long_words=False, break_on_hyphens=False
        ):
            print(line, file=sys.stderr if args.json else sys.stdout, flush=True)

    with ExitStack() as stack:
        rounds = [(stack.enter_context(open(path, "rb")), Path(path).name) for path in args.rounds or ()]
        seed = stack.enter_context(open(args.seed, "rb")) if args.seed else None
        bits = stack.enter_context(open(args.bits, "rb")) if args.bits else None
        try:
            verdict = verify_bundle(
                data,
                rounds=rounds or None,
                seed=seed,
                bits=bits,
                bits_salt=bits_salt,
                trusted_key=trusted_key,
                say=say,
            )
        except ProofError as fault:
            if args.json:
                emit(args, {"verified": False, "code": fault.code, "reason": str(fault), "checks": sentences}, [])
            raise
    emit(
        args,
        {
            "verified": True,
            "run": verdict.run,
            "outcome": verdict.outcome,
            "certified_length": verdict.certified_length,
            "checks": [{"name": name, "sentence": sentence} for name, sentence in verdict.checks],
            "unchecked": list(verdict.unchecked),
        },
        [
            "",
            f"verified: run {verdict.run}, {verdict.outcome}, {several(verdict.certified_length, 'bit')}; "
            f"{several(len(verdict.checks), 'check')} made, {len(verdict.unchecked) or 'none'} not made"
            + (":" if verdict.unchecked else ""),
            *bullets(sentence.partition(";")[0] for sentence in verdict.unchecked),
        ],
    )
    return DONE


def salt_of(text: str | None) -> bytes | None:
    """A 32-byte salt from 64 hexadecimal digits or a file that holds them."""
    if text is None:
        return None
    digits = text.strip()
    if os.path.exists(text):
        digits = read_bytes(text, 4096).decode("ascii", "replace").strip()
    try:
        salt = bytes.fromhex(digits)
    except ValueError:
        salt = b""
    if len(salt) != 32:
        raise InputError("--bits-salt: is neither 64 hexadecimal digits nor a file with them", code="bad-salt")
    return salt


def _key_of(text: str | None) -> str | None:
    """The verifier key in an option or in the file it names. Errors raised: InputError that names the option."""
    from extractor.seal import note as notes

    if text is None:
        return None
    is_file = os.path.exists(text)
    key = (read_bytes(text, 65536).decode("utf-8", "replace") if is_file else text).strip()
    try:
        notes.Verifier.from_text(key)
    except InputError as fault:
        place = f"the file {text} " if is_file else "" if fault.message.startswith("the key") else "the value "
        raise InputError(f"--key: {place}{fault.message}", code=fault.code) from None
    return key
