"""/v1/declarations: recording what is fixed before the rounds exist."""

from __future__ import annotations

from typing import Annotated, Any

from fastapi import APIRouter, Query, Response

from extractor.documents import declaration_document, declaration_from
from extractor.errors import InputError
from extractor.pipeline import check_declaration
from extractor.seal import canonical
from service.api import schemas
from service.api.auth import Anybody, PartsOf, Submitter
from service.api.bodies import StrictRoute
from service.api.idempotency import IdempotencyKey, once
from service.api.paging import Before, Limit, next_page
from service.api.problems import documented
from service.clock import now_text
from service.runs import new_id, owned_declaration
from service.store.contracts import DeclarationRow, Transaction

router = APIRouter(prefix="/v1/declarations", tags=["declarations"], route_class=StrictRoute)


@router.post("", status_code=201, response_model=schemas.RecordedDeclaration, operation_id="record_declaration",
             summary="Record a declaration in the ledger", responses=documented(400, 401, 403, 413, 415, 422) | {200: {"model": schemas.RecordedDeclaration, "description": "Recorded before"}})
def record(body: schemas.DeclarationDocument, parts: PartsOf, identity: Submitter, response: Response,
           key: IdempotencyKey = None) -> Any:
    """Gives it an id, a time and a place in the ledger: do this before the first round is taken. The rounds of a run
    opened under it must all be later. An identical declaration that you recorded before is answered with its record (200)."""
    declaration = declaration_from(body.model_dump())
    check_declaration(declaration)
    if declaration.rounds > parts.settings.run_rounds:
        raise InputError(f"{declaration.rounds} is more than the {parts.settings.run_rounds} this service takes",
                         code="out-of-range", field="/rounds")
    document = declaration_document(declaration)

    def make(transaction: Transaction) -> dict[str, Any]:
        declaration_id, digest = new_id("d"), canonical.digest(document)
        earlier = transaction.find_declaration(identity.owner, digest)
        if earlier is not None:         # a second, later record of the same text would only hide when it was declared
            response.status_code = 200
            return _shown(earlier)
        now = parts.ledger.time(transaction, now_text())
        index = parts.ledger.append(transaction, "declaration", declaration_id, {"digest": digest}, now)
        return _shown(transaction.insert_declaration(DeclarationRow(
            id=declaration_id, owner=identity.owner, digest=digest, time=now, ledger_index=index, document=document)))

    answer = once(parts, identity, key, "declarations", document, make)
    response.headers["Location"] = f"/v1/declarations/{answer['id']}"
    return answer


@router.get("", response_model=schemas.Declarations, operation_id="list_declarations",
            summary="Your declarations, newest first",
            responses=documented(401, 422))
def list_(parts: PartsOf, identity: Anybody, response: Response, limit: Limit = 50, before: Before = None,
          everybody: Annotated[bool, Query(description="of all owners (admin only)")] = False) -> Any:
    """Newest first, a page at a time; `next` is the address of the next page. A token with the scope admin may ask
    for everybody's."""
    limit = min(limit, parts.settings.page_items)
    owner = None if everybody and identity.may("admin") else identity.owner
    with parts.store.read() as reading:
        rows = reading.list_declarations(owner, before=before, limit=limit + 1)
    return {"declarations": [_shown(row) for row in rows[:limit]],
            "next": next_page(response, "/v1/declarations", rows, limit, {"everybody": everybody or None})}


@router.get("/{declaration}", response_model=schemas.RecordedDeclaration, operation_id="read_declaration",
            summary="Read a declaration", responses=documented(401, 404))
def read(declaration: schemas.DeclarationId, parts: PartsOf, identity: Anybody) -> Any:
    """The document as it was recorded, with its digest, its time and its place in the ledger."""
    with parts.store.read() as reading:
        return _shown(owned_declaration(reading, declaration, identity))


def _shown(row: DeclarationRow) -> dict[str, Any]:
    return {"id": row.id, "digest": row.digest, "time": row.time, "ledger_index": row.ledger_index,
            "declaration": row.document}
