"""Who is asking: bearer tokens, scopes, and what a route may demand of them."""

from __future__ import annotations

from collections.abc import Callable
from typing import Annotated

from fastapi import Depends, Request, Security
from fastapi.security import HTTPAuthorizationCredentials, HTTPBearer

from service.api.problems import Problem
from service.clock import now_s, now_text
from service.custody.tokens import Identity, identify
from service.parts import Parts

_bearer = HTTPBearer(auto_error=False, scheme_name="token", description=(
    "A token made with `bellassay token create`. Scopes: submit (declarations, runs, rounds, seeds), collect (bits, "
    "collection), audit (certificate, report, bundle, seed), admin (everything, for every owner)."))
_CHALLENGE = {"WWW-Authenticate": 'Bearer realm="bellassay"'}
TOUCH_EVERY_S = 3600.0          # how exact "last used" is; each note of it is a durable write


def get_parts(request: Request) -> Parts:
    return request.app.state.parts


PartsOf = Annotated[Parts, Depends(get_parts)]


def needs(*scopes: str) -> Callable[..., Identity]:
    """A dependency: the caller's identity, if its token has one of `scopes` (any token at all if none is named)."""
    def identity_of(request: Request, parts: PartsOf,
                    credentials: Annotated[HTTPAuthorizationCredentials | None, Security(_bearer)]) -> Identity:
        if credentials is None:
            raise Problem(401, "token-missing", "send the header Authorization: Bearer <token>", headers=_CHALLENGE)
        with parts.store.read() as reading:
            identity = identify(reading, credentials.credentials, now_s())
        if identity is None:
            raise Problem(401, "token-invalid", "the token is unknown, revoked or expired", headers=_CHALLENGE)
        if scopes and not any(identity.may(scope) for scope in scopes):
            raise Problem(403, "scope-missing", f"this needs a token with the scope {' or '.join(scopes)}")
        _touch(request, parts, identity)
        return identity

    return identity_of


def _touch(request: Request, parts: Parts, identity: Identity) -> None:
    """Notes that the token is in use, now and then."""
    touched: dict[str, float] = request.app.state.touched
    now = now_s()
    if now - touched.get(identity.token_id, 0.0) < TOUCH_EVERY_S:
        return
    touched[identity.token_id] = now
    with parts.store.write() as transaction:
        transaction.touch_token(identity.token_id, now_text())


Anybody = Annotated[Identity, Depends(needs())]
Submitter = Annotated[Identity, Depends(needs("submit"))]
Collector = Annotated[Identity, Depends(needs("collect"))]
Auditor = Annotated[Identity, Depends(needs("audit"))]
Reader = Annotated[Identity, Depends(needs("audit", "collect"))]
