"""/v1/ledger: the signed log, for anybody with a token. It names objects and commitments, no contents."""

from __future__ import annotations

import base64
from typing import Annotated, Any

from fastapi import APIRouter, Query
from fastapi.responses import PlainTextResponse

from extractor.errors import InputError
from extractor.seal import canonical
from service.api import schemas
from service.api.auth import Anybody, PartsOf
from service.api.bodies import StrictRoute
from service.api.problems import documented, sending
from service.ledger import ENTRIES_LIMIT

router = APIRouter(prefix="/v1/ledger", tags=["ledger"], route_class=StrictRoute)
def _place(text: str) -> Any:
    return Query(ge=0, le=2**53 - 1, description=text)


Start = Annotated[int | None, _place("index of the first entry")]
End = Annotated[int | None, _place("index after the last entry")]
Size = Annotated[int | None, _place("number of entries of the tree the proof ends in")]
Index = Annotated[int | None, _place("index of the entry to prove included")]
Old = Annotated[int | None, _place("number of entries of the smaller, earlier tree")]


@router.get("/checkpoint", operation_id="read_checkpoint", summary="The newest checkpoint, a signed note",
            response_class=PlainTextResponse, responses=sending("text/plain", "C2SP tlog-checkpoint", 401))
def checkpoint(parts: PartsOf, identity: Anybody) -> Any:
    """Origin, size and root hash of the ledger, signed. Keep one: a later checkpoint can be proved to contain it."""
    return parts.ledger.checkpoint()


@router.get("/key", operation_id="read_ledger_key", summary="The key that signs the checkpoints",
            response_class=PlainTextResponse, responses=sending("text/plain", "C2SP signed-note verifier key", 401))
def key(parts: PartsOf, identity: Anybody) -> Any:
    """Name, key id and Ed25519 public key in one line. Auditors should get it in another way than from a bundle."""
    return parts.ledger.verifier_text + "\n"


@router.get("/entries", response_model=schemas.LedgerEntries, operation_id="read_entries",
            summary="Entries start <= index < end", responses=documented(401, 422))
def entries(parts: PartsOf, identity: Anybody, start: Start = 0, end: End = None) -> Any:
    """At most 1000 at once; without `end`, as many as there are."""
    size = parts.ledger.size()
    start = start or 0
    stop = min(size, start + ENTRIES_LIMIT) if end is None else end
    rows = parts.ledger.entries(start, stop) if size or end is not None or start else []
    return {"size": size, "start": start, "entries": [
        {"index": row.index, "entry": canonical.parse(row.entry), "leaf_hash": _text(row.leaf_hash)} for row in rows]}


@router.get("/proof", response_model=schemas.LedgerProof, response_model_exclude_none=True, operation_id="read_proof",
            summary="Inclusion of an entry (index) or consistency of two trees (old)", responses=documented(401, 422))
def proof(parts: PartsOf, identity: Anybody, size: Size = None, index: Index = None, old: Old = None) -> Any:
    """RFC 9162 proofs in the tree of the first `size` entries; without `size`, in the newest tree."""
    if (index is None) == (old is None):
        raise InputError("give either index or old", code="bad-usage", field="index")
    size = parts.ledger.size() if size is None else size
    if index is not None:
        hashes = parts.ledger.inclusion(index, size)
        return {"kind": "inclusion", "size": size, "index": index, "hashes": [*map(_text, hashes)]}
    hashes = parts.ledger.consistency(old or 0, size)
    return {"kind": "consistency", "size": size, "old": old, "hashes": [*map(_text, hashes)]}


def _text(value: bytes) -> str:
    return base64.b64encode(value).decode()
