"""The ledger's signing key: made on first start, handed out as a signer, never as bytes.

File: an Ed25519 private key as PKCS #8 PEM (readable by openssl), mode 0600. Losing it ends the ledger: checkpoints can
no longer be signed under the name the auditors know. Keep a copy of it, and of the verifier text, off the machine.
"""

from __future__ import annotations

from pathlib import Path

from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
from cryptography.hazmat.primitives.serialization import (
    Encoding, NoEncryption, PrivateFormat, load_pem_private_key,
)

from extractor.errors import InputError
from extractor.seal.note import Signer
from service.custody.run_keys import refuse_open_permissions
from service.store.durable import create_durably, make_folder


def ledger_signer(path: Path, origin: str, *, create: bool) -> Signer:
    """The signer with the key in the file; if there is none and `create`, a new key is made there, durably.

    Errors raised: InputError if the file is missing (and not to be made), may be read by others, or holds no such key.
    """
    if not path.exists():
        if not create:
            raise InputError(f"the ledger's signing key {path} is missing, but the ledger has entries signed with it; "
                             "put it back from where it is kept", code="ledger-key-missing")
        make_folder(path.parent)
        made = Ed25519PrivateKey.generate().private_bytes(Encoding.PEM, PrivateFormat.PKCS8, NoEncryption())
        create_durably(path, made, 0o600)           # of two processes starting at once, both read the winner's key
    refuse_open_permissions(path)
    try:
        key = load_pem_private_key(path.read_bytes(), password=None)
    except (ValueError, TypeError):
        key = None
    if not isinstance(key, Ed25519PrivateKey):
        raise InputError(f"{path} holds no Ed25519 private key in PEM form", code="bad-key-file")
    return Signer(origin, key)
