"""The entries of the ledger: what each kind says, as canonical JSON, and the hiding commitments some of them carry.

    {"format": "bellassay ledger entry 1", "kind": ..., "time": ..., "subject": id, "body": {...}}

Times are RFC 3339, UTC, in whole seconds.

    kind         subject      body
    declaration  declaration  digest                                           SHA-256 of declaration.json
    seal         run          declaration, segments, rounds, records_commitment    (declaration: that digest)
    certificate  run          certificate_commitment, outcome, length
    refusal      run          the same, of a refused run
    seed         run          source, bits, digest
    result       run          report_digest                                    SHA-256 of report.json
    collection   run          bits_commitment
    erasure      run          free

The ledger is public, so it must not hold a digest of anything that could be guessed or that tells about secret
rounds: records and certificate are committed to under the run's ledger salt, the bits under a salt of their own.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from extractor.errors import InputError, ProofError
from extractor.seal.canonical import canonical_bytes, commitment, parse

ENTRY_FORMAT = "bellassay ledger entry 1"
MAXIMUM_ENTRY_BYTES = 60_000
BODIES: dict[str, frozenset[str] | None] = {
    "declaration": frozenset({"digest"}),
    "seal": frozenset({"declaration", "segments", "rounds", "records_commitment"}),
    "certificate": frozenset({"certificate_commitment", "outcome", "length"}),
    "refusal": frozenset({"certificate_commitment", "outcome", "length"}),
    "seed": frozenset({"source", "bits", "digest"}),
    "result": frozenset({"report_digest"}),
    "collection": frozenset({"bits_commitment"}),
    "erasure": None,
}
_TIME = re.compile(r"\d{4}-(0[1-9]|1[0-2])-(0[1-9]|[12]\d|3[01])T([01]\d|2[0-3]):[0-5]\d:[0-5]\d\Z", re.ASCII)


@dataclass(frozen=True)
class Entry:
    """One entry. Errors raised on construction: InputError if it is not as the module text says."""

    kind: str
    time: str
    subject: str
    body: Mapping[str, Any]

    def __post_init__(self) -> None:
        if self.kind not in BODIES:
            raise InputError(f"{self.kind!r} is no kind of ledger entry", code="bad-entry", field="/kind")
        if not is_time(self.time):
            raise InputError("is not a time such as 2031-05-04T09:30:00Z", code="bad-entry", field="/time")
        if not isinstance(self.subject, str) or not 1 <= len(self.subject) <= 200:
            raise InputError("is not the id of an object", code="bad-entry", field="/subject")
        fields = BODIES[self.kind]
        if not isinstance(self.body, Mapping) or (fields is not None and set(self.body) != fields):
            wanted = ", ".join(sorted(fields or ()))
            raise InputError(f"the body of a {self.kind} entry holds {wanted}", code="bad-entry", field="/body")
        if len(self.bytes) > MAXIMUM_ENTRY_BYTES:
            raise InputError(f"a ledger entry has at most {MAXIMUM_ENTRY_BYTES} bytes", code="bad-entry", field="/body")

    @property
    def bytes(self) -> bytes:
        return canonical_bytes({"format": ENTRY_FORMAT, "kind": self.kind, "time": self.time, "subject": self.subject,
                                "body": dict(self.body)})


def parse_entry(data: bytes) -> Entry:
    """The entry in its canonical bytes. Errors raised: ProofError for anything else."""
    try:
        document = parse(data, require_canonical=True)
        if not isinstance(document, dict) or set(document) != {"format", "kind", "time", "subject", "body"}:
            raise InputError("is not an object of format, kind, time, subject and body", code="bad-entry")
        if document.pop("format") != ENTRY_FORMAT:
            raise InputError(f"is not {ENTRY_FORMAT!r}", code="bad-entry", field="/format")
        return Entry(**document)
    except (InputError, TypeError) as fault:
        raise ProofError(f"is not a ledger entry: {fault}", code="bad-entry") from None


def is_time(text: object) -> bool:
    """Whether `text` is RFC 3339 UTC in whole seconds; such texts sort like the times they name."""
    return isinstance(text, str) and text.endswith("Z") and _TIME.match(text[:-1]) is not None


def records_commitment(salt: bytes, planes_digests: Sequence[str]) -> str:
    """Commitment of a seal to its rounds: over the canonical JSON list of the segments' planes digests, in order."""
    return commitment(salt, canonical_bytes(list(planes_digests)))


def certificate_commitment(salt: bytes, certificate: bytes) -> str:
    """Commitment to the bytes of certificate.json."""
    return commitment(salt, certificate)
