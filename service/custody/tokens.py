"""Bearer tokens: 256 random bits, shown once, kept only as a SHA-256.

Text: bellassay_<id, 16 hex digits>_<secret, 64 hex digits>. The id finds the row, the secret is compared in constant
time. A plain SHA-256 is enough at rest because the secret is not guessable; slow password hashes protect weak secrets
and would only slow each request. The fixed prefix lets secret scanners recognise a token that slipped into a text.
"""

from __future__ import annotations

import hashlib
import hmac
import re
import secrets
from collections.abc import Sequence
from dataclasses import dataclass

from extractor.errors import InputError
from service.store.contracts import Reading, TokenRow, Transaction

SCOPES = ("submit", "collect", "audit", "admin")
_TEXT = re.compile(r"bellassay_([0-9a-f]{16})_([0-9a-f]{64})", re.ASCII)
_NOBODY = hashlib.sha256(b"no such token").hexdigest()


@dataclass(frozen=True)
class Identity:
    """Who is asking. An admin may do everything an owner may, for every owner."""

    token_id: str
    owner: str
    scopes: frozenset[str]

    def may(self, scope: str) -> bool:
        return scope in self.scopes or "admin" in self.scopes


def new_token(transaction: Transaction, *, owner: str, scopes: Sequence[str], label: str, time: str,
              expires_s: float | None) -> tuple[str, TokenRow]:
    """Makes and stores a token; the returned text is the only copy of the secret.

    Errors raised: InputError for an empty owner, an unknown or missing scope, an overlong text.
    """
    if not 1 <= len(owner) <= 100 or not owner.isprintable():
        raise InputError("needs 1 to 100 printable characters", code="bad-token", field="/owner")
    if len(label) > 200 or not (label.isprintable() or not label):
        raise InputError("needs at most 200 printable characters", code="bad-token", field="/label")
    unknown = [scope for scope in scopes if scope not in SCOPES]
    if unknown or not scopes:
        raise InputError(f"{', '.join(unknown) or 'no scope'}: choose from {', '.join(SCOPES)}",
                         code="bad-token", field="/scopes")
    token_id, secret = secrets.token_hex(8), secrets.token_hex(32)
    row = TokenRow(id=token_id, digest=_digest(secret), owner=owner, label=label, created=time, expires_s=expires_s,
                   scopes=tuple(scope for scope in SCOPES if scope in scopes))
    transaction.insert_token(row)
    return f"bellassay_{token_id}_{secret}", row


def identify(reading: Reading, text: str, now_s: float) -> Identity | None:
    """Who the token text belongs to; None if it is malformed, unknown, wrong, revoked or expired (never says which)."""
    match = _TEXT.fullmatch(text)
    if match is None:
        return None
    row = reading.get_token(match[1])
    # An unknown id goes through the same comparison, so that the time taken does not tell ids apart.
    right = hmac.compare_digest(_digest(match[2]), row.digest if row else _NOBODY)
    if row is None or not right or row.revoked is not None:
        return None
    if row.expires_s is not None and now_s >= row.expires_s:
        return None
    return Identity(row.id, row.owner, frozenset(row.scopes))


def _digest(secret: str) -> str:
    return hashlib.sha256(bytes.fromhex(secret)).hexdigest()
