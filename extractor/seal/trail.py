"""A run's trail in the ledger: are its entries there, in the right order, and do they say what the report says?"""

from __future__ import annotations

import base64
import binascii
from collections.abc import Mapping, Sequence
from typing import Any

from extractor.errors import ProofError
from extractor.seal import bundle, canonical, merkle
from extractor.seal.checkpoint import Checkpoint
from extractor.seal.entries import Entry, parse_entry
from extractor.seal.report import difference

BEFORE_REPORT = {"certified": ("declaration", "seal", "certificate", "seed"),
                 "refused": ("declaration", "seal", "refusal")}
AFTER_RESULT = {"certified": ("collection", "erasure"), "refused": ("erasure",)}      # "result" fixes the report itself


def included_entries(extract: object, checkpoint: Checkpoint) -> list[tuple[int, Entry]]:
    """The entries of ledger.json, each proved to be in the ledger of the checkpoint, else ProofError."""
    if not isinstance(extract, dict) or set(extract) != {"format", "checkpoint", "entries"}:
        raise ProofError("ledger.json is not an object of format, checkpoint and entries", code="bad-ledger")
    if extract["format"] != bundle.EXTRACT_FORMAT or not isinstance(extract["entries"], list):
        raise ProofError(f"ledger.json is not a {bundle.EXTRACT_FORMAT!r}", code="bad-ledger")
    found = []
    for item in extract["entries"]:
        if not isinstance(item, dict) or set(item) != {"index", "entry", "proof"}:
            raise ProofError("an entry of ledger.json is not an object of index, entry and proof", code="bad-ledger")
        index, text, proof = item["index"], item["entry"], item["proof"]
        if type(index) is not int or not isinstance(text, str) or not isinstance(proof, list):
            raise ProofError("an index, entry or proof in ledger.json has the wrong type", code="bad-ledger")
        data = text.encode()
        merkle.check_inclusion([_hash(one, index) for one in proof], merkle.leaf_hash(data), index, checkpoint.size,
                               checkpoint.root)
        try:
            found.append((index, parse_entry(data)))
        except ProofError as fault:
            raise ProofError(f"ledger entry {index} {fault}", code="bad-ledger") from None
    return found


def check_trail(entries: Sequence[tuple[int, Entry]], report: Mapping[str, Any], outcome: str) -> dict[str, Entry]:
    """The entries by kind, if they are those of this run, complete and in order, and listed so in the report."""
    kinds = [entry.kind for _, entry in entries]
    before = len(BEFORE_REPORT[outcome])
    needed = [*BEFORE_REPORT[outcome], "result"]
    for kind in needed:
        if kind not in kinds:
            raise ProofError(f"the ledger entry of the {kind} is missing", code="missing-entry")
    for (earlier, first), (later, second) in zip(entries, entries[1:]):
        if later <= earlier:
            raise ProofError(f"the ledger entries are out of order: {first.kind} (entry {earlier}) is listed before "
                             f"{second.kind} (entry {later})", code="wrong-order")
        if second.time < first.time:
            raise ProofError(f"the {second.kind} (ledger entry {later}) is dated {second.time}, before the "
                             f"{first.kind} (entry {earlier}) at {first.time}", code="wrong-order")
    if kinds[:len(needed)] != needed:
        raise ProofError(f"the ledger has the steps of this run in the wrong order: {', '.join(kinds)}; it must begin "
                         f"{', '.join(needed)}", code="wrong-order")
    rest = kinds[len(needed):]
    if rest != [kind for kind in AFTER_RESULT[outcome] if kind in rest]:
        raise ProofError(f"after the {needed[-1]} the ledger entries {', '.join(rest)} cannot belong to this run",
                         code="wrong-order")
    for index, entry in entries[1:]:        # the first one is about the declaration
        if entry.subject != report["run"]:
            raise ProofError(f"ledger entry {index} ({entry.kind}) is about {entry.subject}, not about this run, "
                             f"{report['run']}", code="other-run")
    listed = report["ledger"]["entries"]
    proved = [{"index": index, "kind": entry.kind, "time": entry.time, "digest": canonical.bytes_digest(entry.bytes)}
              for index, entry in entries]
    length = len(listed) if isinstance(listed, list) else 0
    place = difference(listed, proved[:max(length, before)])
    if place:
        raise ProofError(f"the report's list of ledger entries differs from the proved ones at {place}",
                         code="disagreement")
    return {entry.kind: entry for _, entry in entries}


def check_bodies(trail: Mapping[str, Entry], expected: Mapping[str, Mapping[str, Any]]) -> None:
    """Raise ProofError unless each entry's body says exactly what is expected; entries that do not exist are passed."""
    for kind, body in expected.items():
        place = difference(dict(trail[kind].body), dict(body)) if kind in trail else None
        if place:
            raise ProofError(f"the {kind} in the ledger disagrees with the report: its {place[1:]} is another",
                             code="disagreement")


def _hash(text: object, index: int) -> bytes:
    try:
        data = base64.b64decode(text, validate=True) if isinstance(text, str) else b""
    except (binascii.Error, ValueError):
        data = b""
    if len(data) != merkle.HASH_BYTES or base64.b64encode(data).decode() != text:
        raise ProofError(f"a hash in the inclusion proof of entry {index} is not base64 of 32 bytes",
                         code="bad-inclusion")
    return data
