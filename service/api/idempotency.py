"""Idempotency-Key: a request that was answered once is answered the same way again, not done again."""

from __future__ import annotations

from collections.abc import Callable
from typing import Annotated, Any

from fastapi import Header

from extractor.seal import canonical
from service.api.problems import Problem
from service.clock import now_s
from service.custody.tokens import Identity
from service.parts import Parts
from service.store.contracts import IdempotencyRow, Transaction

IdempotencyKey = Annotated[str | None, Header(
    alias="Idempotency-Key", min_length=1, max_length=255,
    description="any text of your choice; the same request with the same key is done once and answered the same way")]


def once(parts: Parts, identity: Identity, key: str | None, kind: str, body: Any,
         make: Callable[[Transaction], dict[str, Any]]) -> dict[str, Any]:
    """The answer of `make`, in one transaction with the note that this key has been used; or the earlier answer.

    Errors raised: Problem 422 if the key was used with another body.
    """
    now = now_s()
    with parts.store.write() as transaction:
        if key is None:
            return make(transaction)
        digest = canonical.digest({"kind": kind, "body": body})
        found = transaction.get_idempotent(identity.owner, key)
        if found is not None and found.created_s >= now - parts.settings.idempotency_keep_s:
            if found.request_digest != digest:
                raise Problem(422, "idempotency-key-reused",
                              "this Idempotency-Key was used for another request; take a new one")
            return found.response
        transaction.drop_idempotent(now - parts.settings.idempotency_keep_s)
        answer = make(transaction)
        transaction.insert_idempotent(IdempotencyRow(identity.owner, key, digest, 201, answer, now))
        return answer
