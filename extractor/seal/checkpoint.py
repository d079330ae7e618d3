"""The checkpoint of the ledger: its whole state in three lines. Format: C2SP tlog-checkpoint, without extension lines.

    <origin: the ledger's name>
    <size: entries in the ledger, decimal>
    <root: Merkle root (RFC 9162), base64>

Each line ends with a line feed. The signed form is this text as a signed note (`note`). Whoever keeps a checkpoint
can later demand a consistency proof from it: the ledger cannot take back an entry without being caught.
"""

from __future__ import annotations

import base64
import binascii
from dataclasses import dataclass

from extractor.errors import InputError, ProofError

HASH_BYTES = 32
MAXIMUM_SIZE = 2**53 - 1


@dataclass(frozen=True)
class Checkpoint:
    """State of a ledger: origin (its name, one line), size (entries), root (32 bytes)."""

    origin: str
    size: int
    root: bytes

    def __post_init__(self) -> None:
        if not 1 <= len(self.origin) <= 200 or not self.origin.isprintable() or self.origin != self.origin.strip():
            raise InputError("the origin is one printable line of 1 to 200 characters", code="bad-checkpoint")
        if not 0 <= self.size <= MAXIMUM_SIZE or len(self.root) != HASH_BYTES:
            raise InputError("a checkpoint has a size of 0..2^53 - 1 and a root of 32 bytes", code="bad-checkpoint")

    @property
    def text(self) -> str:
        return f"{self.origin}\n{self.size}\n{base64.b64encode(self.root).decode()}\n"


def format(origin: str, size: int, root: bytes) -> str:  # noqa: A001 - the pair of words is format and parse
    """The checkpoint text. Errors raised: InputError."""
    return Checkpoint(origin, size, root).text


def parse(text: str) -> Checkpoint:
    """The checkpoint in a text. Errors raised: ProofError unless it is exactly what `format` writes."""
    lines = text.split("\n")
    if len(lines) == 4 and lines[3] == "" and lines[1].isdecimal() and len(lines[1]) <= 16:
        try:
            checkpoint = Checkpoint(lines[0], int(lines[1]), base64.b64decode(lines[2], validate=True))
        except (InputError, binascii.Error, ValueError):
            checkpoint = None
        if checkpoint is not None and checkpoint.text == text:
            return checkpoint
    raise ProofError("is not a checkpoint: origin, size and base64 root, one line each", code="bad-checkpoint")
