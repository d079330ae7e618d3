"""Signed notes: a text and its Ed25519 signatures in one small text file. Format: C2SP signed-note.

Wire format
-----------
A note is UTF-8 text in two parts, separated by one empty line:

    <text: one or more lines, each ended by a line feed>
    <empty line>
    <signature line> ...

* The text ends with a line feed. It has no control characters other than line feeds. It may itself contain
  empty lines: the LAST empty line separates it from the signatures. The text with its final line feed, without
  the separating empty line, is what is signed.
* A signature line is an em dash (U+2014), a space, the key name, a space, base64 (standard alphabet, padded), a
  line feed. The base64 holds 4 bytes of key id and 64 bytes of Ed25519 signature (RFC 8032).
* A key name is not empty and has neither white space nor "+".
* Key id = first 4 bytes of SHA-256(name || 0x0A || 0x01 || public key); 0x01 means Ed25519.
* A verifier key is written  name + key id in 8 lower-case hexadecimal digits + base64(0x01 || public key),
  joined by "+".

A reader that knows some keys must find at least one valid signature by one of them; a signature line that claims a
known key and does not verify refuses the note; lines of unknown keys (such as witnesses) are passed over.

Worked example: the key pair of RFC 8032 section 7.1, TEST 1, under the name example.org/ledger.

    example.org/ledger+47c1c1b2+AddamAGCsQq31Uv+08lkBzoO4XLz2qYjJa8CGmj3B1Ea

signs a text of two lines as the note

    a first line
    a second line

    — example.org/ledger R8HBsqZihDXzoFR8NPYnn/JYiBkkARiqLTWVe+VYREFN/Osj1J/UfGmUHQV5GRLKYA4FEMa5I/DHYaDIQjtOiHkfag0=
"""

from __future__ import annotations

import base64
import binascii
import hashlib
from collections.abc import Iterable
from dataclasses import dataclass

from cryptography.exceptions import InvalidSignature
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey, Ed25519PublicKey

from extractor.errors import InputError, ProofError

ED25519 = b"\x01"
PUBLIC_KEY_BYTES, SIGNATURE_BYTES, KEY_ID_BYTES = 32, 64, 4
MAXIMUM_NOTE_BYTES = 1_000_000
MAXIMUM_SIGNATURES = 100
_DASH = "\u2014 "


@dataclass(frozen=True)
class Verifier:
    """A public key under a name. Errors raised on construction: InputError."""

    name: str
    public_key: bytes

    def __post_init__(self) -> None:
        if not _is_name(self.name):
            raise InputError("a key name has 1 to 200 characters, without spaces and +", code="bad-key")
        if len(self.public_key) != PUBLIC_KEY_BYTES:
            raise InputError(f"an Ed25519 key has {PUBLIC_KEY_BYTES} bytes, not {len(self.public_key)}", code="bad-key")

    @classmethod
    def from_text(cls, text: str) -> Verifier:
        """The key in name+id+base64. Errors raised: InputError unless the text is exactly what `text` writes."""
        name, _, rest = text.partition("+")
        _, _, encoded = rest.partition("+")
        key = _decode(encoded)
        if key is None or not key.startswith(ED25519):
            raise InputError("is not an Ed25519 verifier key of the form name+id+base64", code="bad-key")
        verifier = cls(name, key[1:])
        if verifier.text != text:
            raise InputError("the key id does not belong to this name and key: the text was changed", code="bad-key")
        return verifier

    @property
    def key_id(self) -> bytes:
        return hashlib.sha256(self.name.encode() + b"\n" + ED25519 + self.public_key).digest()[:KEY_ID_BYTES]

    @property
    def text(self) -> str:
        return f"{self.name}+{self.key_id.hex()}+{base64.b64encode(ED25519 + self.public_key).decode()}"

    def check(self, message: bytes, signature: bytes) -> None:
        """Raise ProofError unless `signature` is this key's for `message`."""
        try:
            Ed25519PublicKey.from_public_bytes(self.public_key).verify(signature, message)
        except (InvalidSignature, ValueError):
            raise ProofError(f"the signature of {self.name} is not valid for this text", code="bad-signature") from None


class Signer:
    """A private key under a name; shows neither the key nor anything derived from it but the public half."""

    def __init__(self, name: str, private_key: Ed25519PrivateKey) -> None:
        self._private_key = private_key
        self.verifier = Verifier(name, private_key.public_key().public_bytes_raw())

    @classmethod
    def from_seed(cls, name: str, seed: bytes) -> Signer:
        """The key pair of a 32-byte RFC 8032 private key."""
        if len(seed) != 32:
            raise InputError("an Ed25519 private key has 32 bytes", code="bad-key")
        return cls(name, Ed25519PrivateKey.from_private_bytes(seed))

    @property
    def name(self) -> str:
        return self.verifier.name

    @property
    def verifier_text(self) -> str:
        return self.verifier.text

    def sign(self, message: bytes) -> bytes:
        return self._private_key.sign(message)

    def __repr__(self) -> str:
        return f"Signer({self.verifier_text})"


def sign(text: str, *signers: Signer) -> str:
    """The note of `text` with one signature line per signer. Errors raised: InputError for a text no note can hold."""
    if not _is_text(text):
        raise InputError("a note's text ends with a line feed and has no control characters", code="bad-note")
    if not 1 <= len(signers) <= MAXIMUM_SIGNATURES:
        raise InputError(f"a note has 1 to {MAXIMUM_SIGNATURES} signatures", code="bad-note")
    lines = (
        f"{_DASH}{signer.name} {base64.b64encode(signer.verifier.key_id + signer.sign(text.encode())).decode()}\n"
        for signer in signers)
    return f"{text}\n{''.join(lines)}"


def open(signed: str, verifiers: Iterable[Verifier]) -> str:  # noqa: A001 - the pair of words is sign and open
    """The text of a note with a valid signature by one of `verifiers` (rules in the module text), else ProofError."""
    text, lines = _parts(signed)
    known = {(verifier.name, verifier.key_id): verifier for verifier in verifiers}
    valid = 0
    for number, line in enumerate(lines, 1):
        name, space, encoded = line.removeprefix(_DASH).partition(" ")
        data = _decode(encoded)
        if not line.startswith(_DASH) or not space or not _is_name(name) or data is None or len(data) <= KEY_ID_BYTES:
            raise ProofError(f"signature line {number} of the note is malformed", code="bad-note")
        verifier = known.get((name, data[:KEY_ID_BYTES]))
        if verifier is not None:
            verifier.check(text.encode(), data[KEY_ID_BYTES:])
            valid += 1
    if not valid:
        names = ", ".join(sorted({name for name, _ in known})) or "any key"
        raise ProofError(f"the note carries no signature by {names}", code="no-signature")
    return text


def _parts(signed: str) -> tuple[str, list[str]]:
    """Text and signature lines (without line feeds) of a note."""
    try:
        too_long = len(signed.encode()) > MAXIMUM_NOTE_BYTES
    except UnicodeEncodeError:
        raise ProofError("the note is not UTF-8 text", code="bad-note") from None
    if too_long:
        raise ProofError(f"the note is longer than {MAXIMUM_NOTE_BYTES} bytes", code="bad-note")
    body, separator, signatures = signed.rpartition("\n\n")
    text = body + "\n"
    if not separator or not signatures.endswith("\n") or not _is_text(text):
        raise ProofError("is not a signed note: text, empty line, signature lines", code="bad-note")
    lines = signatures[:-1].split("\n")
    if len(lines) > MAXIMUM_SIGNATURES:
        raise ProofError(f"the note has more than {MAXIMUM_SIGNATURES} signatures", code="bad-note")
    return text, lines


def _is_text(text: str) -> bool:
    if not text.endswith("\n") or text == "\n" or any(ord(char) < 0x20 and char != "\n" for char in text):
        return False
    try:
        return len(text.encode()) < MAXIMUM_NOTE_BYTES
    except UnicodeEncodeError:
        return False


def _is_name(name: str) -> bool:
    return 1 <= len(name) <= 200 and "+" not in name and name.isprintable() and not any(char.isspace() for char in name)


def _decode(encoded: str) -> bytes | None:
    """The bytes of padded standard base64, None if it is anything else (also unused bits that are not zero)."""
    try:
        data = base64.b64decode(encoded.encode("ascii"), validate=True)
    except (binascii.Error, ValueError):
        return None
    return data if base64.b64encode(data).decode() == encoded else None
