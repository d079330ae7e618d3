"""One value, one byte string: canonical JSON (RFC 8785), strict reading, digests and hiding commitments.

A digest or a signature over JSON is worth something only if the same value always has the same bytes and a byte
string has only one meaning. Hence reading refuses what readers are known to disagree about: a key that stands
twice, NaN and infinities, text that is not UTF-8, lone surrogates, numbers that a double cannot hold.
"""

from __future__ import annotations

import hashlib
import hmac
import json
import math
import re
from typing import Any, NoReturn

import rfc8785

from extractor.errors import InputError

SALT_BYTES = 32
EXACT_WHOLE = 2**53 - 1         # beyond it a double skips whole numbers
_SURROGATE = re.compile(rb"\\u[dD][89a-fA-F]")     # an escape that may be half a character


def canonical_bytes(value: object) -> bytes:
    """The RFC 8785 bytes of a value of dicts, lists, str, int, float, bool and None.

    Whole floats are written like whole numbers (2.0 as 2). Errors raised: InputError for NaN, infinities, whole
    numbers beyond 2^53 - 1, lone surrogates and types that JSON does not have.
    """
    try:
        return rfc8785.dumps(value)     # type: ignore[arg-type]
    except (ValueError, TypeError, RecursionError) as fault:
        raise InputError(f"has no canonical JSON form: {fault}", code="not-canonical") from None


def parse(data: bytes, *, require_canonical: bool = False) -> Any:
    """The value in JSON bytes; with `require_canonical` only if they are exactly its RFC 8785 bytes.

    Errors raised: InputError for anything that is not strict JSON (module text) or, if asked, not canonical.
    """
    try:
        value = json.loads(bytes(data).decode("utf-8"), object_pairs_hook=_object, parse_int=_whole, parse_float=_float,
                           parse_constant=_constant)
    except InputError:
        raise
    except UnicodeDecodeError as fault:
        raise InputError(f"is not UTF-8 text: byte {fault.start + 1} is wrong", code="bad-json") from None
    except json.JSONDecodeError as fault:
        raise InputError(f"is not JSON: {fault}", code="bad-json") from None
    except (ValueError, RecursionError):
        raise InputError("is not JSON that can be read: a number or a nesting is too long", code="bad-json") from None
    if not require_canonical and _SURROGATE.search(data) is None:
        return value                    # nothing left that has no canonical form; writing it is the slow part
    written = canonical_bytes(value)
    if require_canonical and written != data:
        places = (i for i, (one, other) in enumerate(zip(written, data)) if one != other)
        place = next(places, min(len(written), len(data)))
        raise InputError(f"is not canonical JSON (RFC 8785): byte {place + 1} differs", code="not-canonical")
    return value


def digest(value: object) -> str:
    """SHA-256 of the canonical bytes, as "sha256:" and 64 hexadecimal digits."""
    return bytes_digest(canonical_bytes(value))


def bytes_digest(data: bytes) -> str:
    """SHA-256 of bytes as they are, as "sha256:" and 64 hexadecimal digits."""
    return f"sha256:{hashlib.sha256(data).hexdigest()}"


def commitment(salt: bytes, data: bytes) -> str:
    """HMAC-SHA-256 of `data` keyed by a salt of 32 bytes, as "hmac-sha256:" and 64 hexadecimal digits.

    Binding as far as SHA-256 is collision resistant; it hides `data` as long as the salt is secret and uniform,
    which a bare digest of guessable data does not.
    """
    if len(salt) != SALT_BYTES:
        raise InputError(f"a salt has {SALT_BYTES} bytes, not {len(salt)}", code="bad-salt")
    return f"hmac-sha256:{hmac.new(salt, data, hashlib.sha256).hexdigest()}"


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    value = dict(pairs)
    if len(value) != len(pairs):
        seen: set[str] = set()
        for key, _ in pairs:
            if key in seen:
                raise InputError(f"the key {key!r} stands twice in one object", code="repeated-key")
            seen.add(key)
    return value


def _whole(text: str) -> int | float:
    value = int(text)
    if -EXACT_WHOLE <= value <= EXACT_WHOLE:
        return value
    # RFC 8785 writes doubles below 1e21 as whole numbers, padding the shortest digits with zeros: take these back.
    number = _float(text)
    if int(number) != value and canonical_bytes(number) != text.encode():
        raise InputError(f"the number {text[:40]} does not fit a double without loss", code="bad-number")
    return number


def _float(text: str) -> float:
    value = float(text)         # infinite, not an error, when too large
    if not math.isfinite(value):
        raise InputError(f"the number {text[:40]} does not fit a double", code="bad-number")
    return value


def _constant(text: str) -> NoReturn:
    raise InputError(f"{text} is not a JSON number", code="bad-number")
