"""Small complete runs for the tests: simulated rounds, a ledger with other people's entries, a signed bundle.

Everything is made by the product's own functions. `Run` keeps the parts apart, so that a test can exchange one and
have all that follows from it (digests, proofs, signatures) made anew, as a dishonest service could.
"""

from __future__ import annotations

import hashlib
import io
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from itertools import takewhile
from typing import Any

from extractor import pipeline
from extractor.bell.rigs import optimal_rig, simulate
from extractor.documents import certificate_document, declaration_document
from extractor.hashing.toeplitz import SeedBytes
from extractor.model import Certificate, Declaration, RoundBatch
from extractor.records.bits import slice_bits
from extractor.records.planes import digest_of, rebatch
from extractor.records.writers import write_csv, write_npz
from extractor.seal import bundle, canonical, checkpoint, entries, merkle, note, report

SIGNER = note.Signer.from_seed("rig.example/ledger", bytes(range(32)))
SALT, BITS_SALT = bytes(range(32, 64)), bytes(range(64, 96))
ORIGIN = "rig.example/ledger"


class Log:
    """A ledger in memory, kept as `merkle.append_nodes` says."""

    def __init__(self) -> None:
        self.hashes: dict[tuple[int, int], bytes] = {}
        self.size = 0

    def append(self, data: bytes) -> int:
        for level, index, value in merkle.append_nodes(self.size, merkle.leaf_hash(data), self.read):
            self.hashes[level, index] = value
        self.size += 1
        return self.size - 1

    def read(self, places: list[tuple[int, int]]) -> list[bytes]:
        return [self.hashes[place] for place in places]

    def checkpoint(self, signer: note.Signer) -> str:
        return note.sign(checkpoint.format(ORIGIN, self.size, merkle.root(self.size, self.read)), signer)


@dataclass(frozen=True)
class Run:
    """A finished run and what it was made from."""

    name: str
    declaration: Declaration
    certificate: Certificate
    segments: tuple[tuple[str, bytes], ...]         # (file name, file)
    records: dict[str, Any]
    score: dict[str, Any]
    diagnostics: list[dict[str, Any]]
    seed: bytes | None
    bits: bytes | None
    after: tuple[str, ...] = ("result",)            # kinds of entries that came after the report

    def files(self) -> list[tuple[io.BytesIO, str]]:
        return [(io.BytesIO(data), name) for name, data in self.segments]

    def seed_document(self) -> dict[str, Any] | None:
        return None if self.seed is None else {
            "source": self.declaration.seed_source, "bits": self.certificate.seed_bits,
            "digest": canonical.bytes_digest(self.seed)}

    def output_document(self) -> dict[str, Any] | None:
        return None if self.bits is None else {
            "bits": self.certificate.certified_length, "bits_commitment": canonical.commitment(BITS_SALT, self.bits),
            "backend": "definition"}

    def entries(self) -> list[entries.Entry]:
        """The honest entries, one every ten minutes."""
        declaration = canonical.digest(declaration_document(self.declaration))
        certificate = canonical.canonical_bytes(certificate_document(self.certificate))
        stated = {"certificate_commitment": entries.certificate_commitment(SALT, certificate),
                  "outcome": self.certificate.outcome, "length": self.certificate.certified_length}
        digests = [segment["planes_digest"] for segment in self.records["segments"]]
        made: list[tuple[str, dict[str, Any]]] = [
            ("declaration", {"digest": declaration}),
            ("seal", {"declaration": declaration, "segments": len(digests), "rounds": self.certificate.rounds,
                      "records_commitment": entries.records_commitment(SALT, digests)})]
        if self.seed is None:
            made.append(("refusal", stated))
        else:
            made += [("certificate", stated), ("seed", self.seed_document())]
        later = {"collection": {"bits_commitment": (self.output_document() or {}).get("bits_commitment")},
                 "erasure": {"what": "rounds, seed and bits"}}
        made += [(kind, later[kind]) for kind in self.after if kind != "result"]
        return [entries.Entry(kind, f"2031-05-04T09:{10 * k:02}:00Z", "declaration-7" if k == 0 else self.name, body)
                for k, (kind, body) in enumerate(made)]

    def contents(self, *, trail: list[entries.Entry] | None = None,
                 change: Callable[[dict[str, Any]], None] | None = None, signer: note.Signer = SIGNER,
                 checkpoint_signer: note.Signer | None = None) -> dict[str, bytes]:
        """The files of the bundle; `change` alters the report before it is signed, `trail` replaces the entries."""
        trail = self.entries() if trail is None else trail
        log, placed = Log(), []

        def place(entry: entries.Entry) -> None:
            for k in range(len(placed) + 1):
                log.append(b"another run's entry %d %d" % (len(placed), k))
            placed.append((log.append(entry.bytes), entry))

        early = list(takewhile(lambda entry: entry.kind not in self.after, trail))
        for entry in early:
            place(entry)
        document = report.build_report(
            self.name, self.declaration, trail[0].time, self.certificate, self.records, self.score, self.diagnostics,
            self.seed_document(), self.output_document(), SALT.hex(),
            [{"index": index, "kind": entry.kind, "time": entry.time, "digest": canonical.bytes_digest(entry.bytes)}
             for index, entry in placed], {"bellassay": "0.1.0"})
        if change:
            change(document)
        if "result" in self.after:
            body = {"report_digest": canonical.digest(document)}
            place(entries.Entry("result", early[-1].time, self.name, body))
        for entry in trail[len(early):]:
            place(entry)
        for k in range(7):
            log.append(b"a later entry %d" % k)
        return bundle.contents(
            document, [(index, entry.bytes) for index, entry in placed],
            [merkle.prove_inclusion(index, log.size, log.read) for index, _ in placed],
            log.checkpoint(checkpoint_signer or signer), signer)

    def bundle(self, **arguments: Any) -> bytes:
        return bundle.pack(self.contents(**arguments))

    def refit(self, certificate: Certificate) -> Run:
        """The run with another certificate, and seed and bits of the lengths it asks for."""
        return replace(self, certificate=certificate, seed=uniform(certificate.seed_bits, b"other"),
                       bits=uniform(certificate.certified_length, b"bits"))


def uniform(bits: int, label: bytes) -> bytes:
    """Bits that look uniform, packed, tail zero; the same for the same label."""
    data = bytearray(hashlib.shake_128(label).digest((bits + 7) // 8))
    if bits % 8:
        data[-1] &= (1 << bits % 8) - 1
    return bytes(data)


def run(declaration: Declaration, split: tuple[int, ...], visibility: float = 1.0, seed: int = 1,
        after: tuple[str, ...] = ("result",)) -> Run:
    """Simulate rounds in segments of the sizes in `split` (NPZ and CSV in turn), certify, extract."""
    rig = optimal_rig(visibility=visibility) if visibility < 1 else optimal_rig()
    whole, = rebatch(simulate(rig, sum(split), seed))
    segments, described, at = [], [], 0
    for number, size in enumerate(split, 1):
        part = [RoundBatch(size, {name: slice_bits(plane, at, size) for name, plane in whole.planes.items()})]
        at += size
        target = io.BytesIO()
        (write_npz if number % 2 else write_csv)(target, iter(part))
        data = target.getvalue()
        segments.append((f"part-{number}.{'npz' if number % 2 else 'csv'}", data))
        described.append({
            "segment": number, "digest": canonical.bytes_digest(data), "bytes": len(data),
            "format": "npz" if number % 2 else "csv", "rounds": size, "no_clicks": (0, 0),
            "planes_digest": digest_of(iter(part)), "first_round": None, "tally": "left out of reports"})
    tally, digest = pipeline.read_run([whole])
    certificate = pipeline.certify(declaration, tally)
    score, diagnostics = pipeline.look(declaration, tally)
    made = Run("run-41", declaration, certificate, tuple(segments),
               {"segments": described, "planes_digest": digest}, score.document(),
               [one.document() for one in diagnostics], None, None, after)
    if certificate.outcome == "refused":
        return made
    seed_bytes = uniform(certificate.seed_bits, b"seed")
    bits = pipeline.extract(declaration, certificate, lambda first: [whole],
                            SeedBytes(seed_bytes, certificate.seed_bits))
    return replace(made, seed=seed_bytes, bits=bits)


@cache
def declared(**changes: Any) -> Declaration:
    return pipeline.declare(**{"rig": "two boxes of the demonstration", "rounds": 3000, "method": "factor-closed",
                               "soundness": 1e-3, "score": 0.85, "output_bits": 777, **changes})


@cache
def certified() -> Run:
    return run(declared(), (1001, 1200, 799), after=("result", "collection", "erasure"))


@cache
def refused() -> Run:
    return run(declared(), (1000, 2000), visibility=0.75, after=("result", "erasure"))


@cache
def public() -> Run:
    return run(declared(disclosure="public", output_bits=300), (1500, 1500))


@cache
def short() -> Run:
    """One segment, stopped early, length from credit."""
    return run(declared(output_rule="credit"), (2900,))
