"""Check a bundle offline: START HERE if you are the auditor. `verify_bundle` is the list of checks, cheap ones first.

Nothing here trusts the service: signatures are checked against the key you bring, proofs against the signed
checkpoint, and numbers are computed again. What a passed check proves and does not prove: `readme`, which every bundle
carries. Each check ends in a sentence for `say`, or in a ProofError whose sentence says what is wrong.
"""

from __future__ import annotations

import hashlib
import itertools
import math
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, BinaryIO

from extractor import documents, tally as tallying
from extractor.errors import InputError, ProofError
from extractor.model import Certificate, Declaration, RoundBatch, Tally
from extractor.records.planes import BLOCK_ROUNDS, PlaneDigest, cut
from extractor.records.rounds import open_rounds
from extractor.seal import bundle, canonical, checkpoint, entries, note, trail
from extractor.seal.fields import check_fields
from extractor.seal.readme import README
from extractor.seal.report import REPORT_FORMAT, difference, restate

RoundFiles = Sequence[tuple[BinaryIO, str]]
_PIECE_BYTES = 2**20
SCORE_FIELDS = ("test_rounds", "generation_rounds", "settings_counts", "correlators", "chsh", "winning_probability",
                "wins", "losses")


@dataclass(frozen=True)
class Verdict:
    """What was checked and found right; a bundle with anything wrong gives no verdict but a ProofError.

    checks     (name, sentence) in the order they were made
    unchecked  sentences saying what this call could not check, and what it would take
    """

    ok: bool
    run: str
    outcome: str
    certified_length: int
    checks: tuple[tuple[str, str], ...]
    unchecked: tuple[str, ...]


class _Log:
    """Collects checks and says them."""

    def __init__(self, say: Callable[[str], object]) -> None:
        self._say = say
        self.checks: list[tuple[str, str]] = []
        self.unchecked: list[str] = []

    def right(self, name: str, sentence: str) -> None:
        self.checks.append((name, sentence))
        self._say(f"{name}: {sentence}")

    def left_open(self, sentence: str) -> None:
        self.unchecked.append(sentence)
        self._say(f"not checked: {sentence}")


@dataclass(frozen=True)
class _Papers:
    """The documents of a bundle, read and held against each other."""

    declaration: Declaration
    certificate: Certificate
    report: dict[str, Any]


def verify_bundle(data: bytes, *, rounds: RoundFiles | None = None, seed: BinaryIO | None = None,
                  bits: bytes | BinaryIO | None = None, bits_salt: bytes | None = None, trusted_key: str | None = None,
                  say: Callable[[str], object] = print) -> Verdict:
    """Check the bundle in `data`, and with what else is handed in everything that can be recomputed.

    rounds       the run's round files in order, as (seekable binary file, name for error texts), in any accepted format
    seed         the seed file
    bits         the bits; checked against the commitment (needs `bits_salt`) and the bits extracted again (needs
                 `rounds` and `seed`)
    bits_salt    32 bytes, handed out with the bits
    trusted_key  verifier key text that reached the auditor in another way than by the bundle
    say          called with each finding
    Errors raised: ProofError at the first thing that is wrong; InputError for arguments that make no sense.
    """
    log = _Log(say)
    files = _archive(data, log)
    verifier = _key(files, trusted_key, log)
    report = _signed_report(files, verifier, log)
    found = _ledger(files, verifier, log)
    papers = _papers(files, report, log)
    _trail(files, papers, found, log)
    _certificate(papers, log)
    _table(papers, log)
    _score(papers, log)
    if rounds is None:
        log.left_open("that tally and digests are those of the sealed rounds; give the round files.")
    else:
        _rounds(papers, found, rounds, log)
    if papers.certificate.outcome == "certified":
        _seed(papers, seed, log)
        _bits(papers, rounds, seed, _whole(bits), bits_salt, log)
    elif seed is not None or bits is not None:
        raise ProofError("the run was refused, so it has neither a seed nor bits", code="refused-run")
    return Verdict(True, report["run"], papers.certificate.outcome, papers.certificate.certified_length,
                   tuple(log.checks), tuple(log.unchecked))


def _archive(data: bytes, log: _Log) -> dict[str, bytes]:
    files = bundle.unpack(data)
    for name in sorted(bundle.FILES ^ files.keys()):
        what = "is missing from" if name in bundle.FILES else "does not belong into"
        raise ProofError(f"{name} {what} the bundle", code="bad-bundle")
    if files[bundle.SUMS] != bundle.sums(files):
        written = files[bundle.SUMS].splitlines()
        wrong = [line.split()[1].decode() for line in bundle.sums(files).splitlines() if line not in written]
        raise ProofError(f"SHA256SUMS does not match {', '.join(wrong) or 'the files'}", code="bad-sums")
    if files["README.txt"] != README.encode():
        raise ProofError("README.txt is not the text that belongs to bundles of this format", code="bad-readme")
    log.right("archive", f"{len(files)} files, none changed since the bundle was made.")
    return files


def _key(files: dict[str, bytes], trusted_key: str | None, log: _Log) -> note.Verifier:
    text = files["key.txt"].decode("utf-8", errors="replace")
    with _reading("key.txt"):
        verifier = note.Verifier.from_text(text.removesuffix("\n"))
    if text != f"{verifier.text}\n":
        raise ProofError("key.txt is not one line with a verifier key", code="bad-key")
    if trusted_key is None:
        log.left_open(f"whose key signed; compare with a copy you trust: {verifier.text}")
    elif note.Verifier.from_text(trusted_key.strip()) != verifier:
        raise ProofError(f"the bundle is signed with another key than the trusted one: {verifier.text}",
                         code="other-key")
    else:
        log.right("key", f"the key in the bundle is the trusted one, {verifier.name}.")
    return verifier


def _signed_report(files: dict[str, bytes], verifier: note.Verifier, log: _Log) -> dict[str, Any]:
    signed = note.open(files["report.note"].decode("utf-8", errors="surrogateescape"), [verifier])
    if signed != bundle.report_note_text(files["report.json"]):
        raise ProofError("report.note signs another report than report.json", code="other-report")
    report = _document(files, "report.json", require_canonical=False)
    if report.get("format") != REPORT_FORMAT:
        raise ProofError(f"report.json is not a {REPORT_FORMAT!r}", code="bad-report")
    for name in ("declaration", "certificate"):
        claimed = report.get(name)
        if not isinstance(claimed, dict) or claimed.get("digest") != canonical.bytes_digest(files[f"{name}.json"]):
            raise ProofError(f"{name}.json is not the {name} of the report: its digest is another", code="disagreement")
    _document(files, "report.json")
    log.right("signature", f"{verifier.name} signed exactly this report, with this declaration and this certificate.")
    return report


def _ledger(files: dict[str, bytes], verifier: note.Verifier, log: _Log) -> list[tuple[int, entries.Entry]]:
    extract = _document(files, "ledger.json")
    signed = extract.get("checkpoint")
    if not isinstance(signed, str):
        raise ProofError("ledger.json has no checkpoint", code="bad-ledger")
    try:
        state = checkpoint.parse(note.open(signed, [verifier]))
    except ProofError as fault:
        raise ProofError(f"the checkpoint in ledger.json does not hold: {fault}", code=fault.code) from None
    log.right("checkpoint", f"{verifier.name} signed the ledger {state.origin} at {state.size} entries.")
    found = trail.included_entries(extract, state)
    log.right("inclusion", f"{len(found)} entries of the run are in that ledger.")
    return found


def _papers(files: dict[str, bytes], report: dict[str, Any], log: _Log) -> _Papers:
    """Declaration and certificate as the report repeats them, and the report as they make it."""
    with _reading("declaration.json"):
        document = canonical.parse(files["declaration.json"], require_canonical=True)
        declaration = documents.declaration_from(document)
        _same("declaration.json", document, documents.declaration_document(declaration))
    with _reading("certificate.json"):
        document = canonical.parse(files["certificate.json"], require_canonical=True)
        certificate = documents.certificate_from(document)
        _same("certificate.json", document, documents.certificate_document(certificate))
    _same("report.json", report, restate(report, declaration, certificate))
    check_fields(report, declaration, certificate)
    log.right("agreement", "report, declaration and certificate say the same wherever they repeat each other.")
    return _Papers(declaration, certificate, report)


def _trail(files: dict[str, bytes], papers: _Papers, found: list[tuple[int, entries.Entry]], log: _Log) -> None:
    report, certificate = papers.report, papers.certificate
    by_kind = trail.check_trail(found, report, certificate.outcome)
    if by_kind["declaration"].time != report["declaration"]["time"]:
        raise ProofError("the report dates the declaration otherwise than the ledger does", code="disagreement")
    salt = bytes.fromhex(report["ledger"]["salt"])
    stated = {"certificate_commitment": entries.certificate_commitment(salt, files["certificate.json"]),
              "outcome": certificate.outcome, "length": certificate.certified_length}
    records = report["records"]
    sealed = {"declaration": report["declaration"]["digest"], "segments": records["segments"],
              "rounds": certificate.rounds, "records_commitment": by_kind["seal"].body["records_commitment"]}
    listed = records["files"] or ([records] if records["segments"] == 1 else [])
    if listed:
        sealed["records_commitment"] = entries.records_commitment(salt, [one["planes_digest"] for one in listed])
    trail.check_bodies(by_kind, {
        "declaration": {"digest": report["declaration"]["digest"]}, "seal": sealed, "certificate": stated,
        "refusal": stated, "result": {"report_digest": canonical.bytes_digest(files["report.json"])}})
    if certificate.outcome == "certified":
        trail.check_bodies(by_kind, {"seed": report["seed"],
                                     "collection": {"bits_commitment": report["output"]["bits_commitment"]}})
    log.right("order", f"declared {by_kind['declaration'].time}, sealed {by_kind['seal'].time}; each step after the "
                       "one before it in the ledger.")
    log.right("commitments", "declaration, records and certificate are those the ledger fixed." if listed
              else "declaration and certificate are those the ledger fixed.")


def _certificate(papers: _Papers, log: _Log) -> None:
    from extractor import pipeline      # late: loading scipy takes longer than all cheap checks

    with _reading("certificate.json"):
        recomputed = pipeline.certify(papers.declaration, papers.certificate.tally)
    place = difference(documents.certificate_document(papers.certificate), documents.certificate_document(recomputed))
    if place:
        raise ProofError(f"the certificate is not what declaration and tally give: {place} differs (recomputed: "
                         f"{recomputed.outcome}, {recomputed.certified_length} bits)", code="wrong-certificate")
    log.right("certificate", f"recomputed from declaration and tally: {recomputed.outcome}, "
                             f"{recomputed.certified_length} bits.")


def _table(papers: _Papers, log: _Log) -> None:
    """A general score table once more, by a program written apart from the one that certifies."""
    if papers.declaration.method != "factor-table":
        return
    from extractor.seal import table_check

    if not table_check.table_holds(documents.declaration_document(papers.declaration)):
        raise ProofError("the score table of the declaration was not found valid by the second check: a quantum strategy may "
                         "earn more than it is worth", code="table-not-valid")
    log.right("table", "found valid over all quantum strategies a second time, by separately written code.")


def _score(papers: _Papers, log: _Log) -> None:
    """The headline numbers; p-values and diagnostics are left to the reader, who sees the tally."""
    from extractor import pipeline

    with _reading("report.json"):
        again = pipeline.look(papers.declaration, papers.certificate.tally)[0].document()
    for name in SCORE_FIELDS:
        if not _close(papers.report["score"].get(name), again[name]):
            raise ProofError(f"the score in the report is not that of the tally: {name} differs", code="wrong-score")
    log.right("score", "CHSH value, winning probability and counts in the report are those of the tally.")


def _rounds(papers: _Papers, found: list[tuple[int, entries.Entry]], files: RoundFiles, log: _Log) -> None:
    """Tally and digest again, and segment by segment that these are the rounds that were sealed, however they are split here."""
    records, salt = papers.report["records"], bytes.fromhex(papers.report["ledger"]["salt"])
    listed = records["files"]
    if listed is not None:
        sizes = [one["rounds"] for one in listed]
    else:           # a public report names no segments: one segment is the whole run, else the files must be the segments
        sizes = [records["rounds"]] if records["segments"] == 1 else None
    with _reading("the rounds"):
        tally, digest, parts = _count(papers.declaration, files, sizes)
    for part, one in zip(parts, listed or ()):
        if part != one["planes_digest"]:
            raise ProofError(f"the files do not hold the rounds of segment {one['segment']}: their digest is another",
                             code="other-rounds")
    if tally.rounds != records["rounds"]:
        raise ProofError(f"the files have {tally.rounds} rounds, the run has {records['rounds']}", code="other-rounds")
    if digest != records["planes_digest"]:
        raise ProofError("the files do not hold the rounds of the run: their digest is another", code="other-rounds")
    if tally != papers.certificate.tally:
        raise ProofError("the tally of the certificate is not the tally of the rounds", code="wrong-tally")
    log.right("rounds", f"{tally.rounds} rounds counted again: digest and tally are those of the report.")
    sealed = next(entry.body["records_commitment"] for _, entry in found if entry.kind == "seal")
    if entries.records_commitment(salt, parts) != sealed:
        raise ProofError("the files are not shown to be the rounds that were sealed" + (
            ": the commitment of the seal is another" if sizes else
            "; the report does not say how the run was split, so give the segments as they were uploaded"), code="other-rounds")
    log.right("segments", "these are the rounds that were sealed.")


def _count(declaration: Declaration, files: RoundFiles, sizes: list[int] | None) -> tuple[Tally, str, list[str]]:
    """Tally and digest of all files, and the digests of parts of `sizes` rounds (None: of each file), in one pass."""
    tally, whole, parts = Tally.empty(), PlaneDigest(), {}

    def pieces() -> Iterator[tuple[int, RoundBatch]]:
        read = ((number, batch) for number, (file, name) in enumerate(files)
                for batch in open_rounds(file, name, declaration.rules).batches())
        return read if sizes is None else cut((batch for _, batch in read), sizes)

    for number, batch in pieces():
        tally += tallying.tally_batch(batch)
        whole.update(batch)
        parts.setdefault(number, PlaneDigest()).update(batch)
    return tally, whole.hexdigest(), [parts[number].hexdigest() for number in sorted(parts)]


def _seed(papers: _Papers, seed: BinaryIO | None, log: _Log) -> None:
    if seed is None:
        log.left_open("that the seed is the one in the ledger; give the seed file.")
        return
    claimed, digest, size = papers.report["seed"], hashlib.sha256(), 0
    seed.seek(0)
    while piece := seed.read(_PIECE_BYTES):
        digest.update(piece)
        size += len(piece)
    if size != (claimed["bits"] + 7) // 8:
        raise ProofError(f"the seed file has {size} bytes, {claimed['bits']} bits take {(claimed['bits'] + 7) // 8}",
                         code="other-seed")
    if f"sha256:{digest.hexdigest()}" != claimed["digest"]:
        raise ProofError("the seed file is not the seed of the run: its digest is another", code="other-seed")
    log.right("seed", f"{claimed['bits']} bits, the seed that the ledger names.")


def _bits(papers: _Papers, rounds: RoundFiles | None, seed: BinaryIO | None, bits: bytes | None, salt: bytes | None,
          log: _Log) -> None:
    claimed = papers.report["output"]
    if bits is not None and len(bits) != (claimed["bits"] + 7) // 8:
        raise ProofError(f"the bits have {len(bits)} bytes, {claimed['bits']} bits take {(claimed['bits'] + 7) // 8}",
                         code="other-bits")
    if bits is not None and salt is not None:
        if canonical.commitment(salt, bits) != claimed["bits_commitment"]:
            raise ProofError("the bits are not those committed to in the report", code="other-bits")
        log.right("bits", f"{claimed['bits']} bits, those committed to in the report.")
    if rounds is not None and seed is not None:
        again = _extract(papers, rounds, seed)
        if bits is not None and again != bits:
            raise ProofError("the bits are not those that rounds and seed give", code="other-bits")
        if salt is not None and canonical.commitment(salt, again) != claimed["bits_commitment"]:
            raise ProofError("rounds and seed give other bits than those committed to in the report", code="other-bits")
        if bits is None and salt is None:
            log.left_open("the extracted bits against anything; give the bits, or the salt of their commitment.")
        else:
            log.right("extraction", f"{claimed['bits']} bits extracted again from rounds and seed: the same.")
    elif bits is None:
        log.left_open("the bits; give them with their salt, and rounds and seed to extract them again.")
    elif salt is None:
        log.left_open("where the bits come from; give their salt, or rounds and seed.")
    else:
        log.left_open("that the bits are the hash of the rounds; give rounds and seed.")


def _extract(papers: _Papers, files: RoundFiles, seed: BinaryIO) -> bytes:
    from extractor import pipeline
    from extractor.hashing.toeplitz import SeedFile

    def batches_from(first: int) -> Iterator[RoundBatch]:
        return itertools.islice(pipeline.batches_of(files, papers.declaration.rules), first // BLOCK_ROUNDS, None)

    with _reading("rounds or seed"):
        return pipeline.extract(papers.declaration, papers.certificate, batches_from,
                                SeedFile(seed, papers.certificate.seed_bits))


def _document(files: dict[str, bytes], name: str, *, require_canonical: bool = True) -> dict[str, Any]:
    with _reading(name):
        document = canonical.parse(files[name], require_canonical=require_canonical)
    if not isinstance(document, dict):
        raise ProofError(f"{name} is not a JSON object", code="bad-document")
    return document


def _same(name: str, found: object, expected: object) -> None:
    place = difference(found, expected)
    if place:
        raise ProofError(f"{name} contradicts the rest of the bundle, or itself, at {place}", code="disagreement")


@contextmanager
def _reading(name: str) -> Iterator[None]:
    """What cannot be read or recomputed is a failed proof here, whatever it was that stumbled over it."""
    try:
        yield
    except (InputError, TypeError, ValueError, KeyError, AttributeError, ArithmeticError) as fault:
        raise ProofError(f"{name}: {fault}", code="bad-document") from None


def _close(found: object, expected: object) -> bool:
    """Equal, but for the last digits of floating point numbers made on another machine."""
    if isinstance(expected, list):
        return isinstance(found, list) and len(found) == len(expected) and all(map(_close, found, expected))
    if isinstance(expected, float) and isinstance(found, (int, float)):
        return math.isclose(found, expected, rel_tol=1e-9, abs_tol=1e-12)
    return found == expected


def _whole(bits: bytes | BinaryIO | None) -> bytes | None:
    return bits if bits is None or isinstance(bits, bytes) else bits.read()
