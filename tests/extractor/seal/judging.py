"""Verifying in tests: shorthands, and changes of a report before it is signed."""

from __future__ import annotations

import io
import re
from collections.abc import Callable

import pytest

from extractor.errors import ProofError
from extractor.seal.verify import Verdict, verify_bundle
from tests.extractor.seal import casting

KEY = casting.SIGNER.verifier_text
REMOVED = object()


def quiet(data: bytes, **arguments) -> Verdict:
    """Verify without saying anything."""
    return verify_bundle(data, say=lambda sentence: None, **arguments)


def everything(run: casting.Run) -> dict:
    """All that can be handed in beside the bundle."""
    given = {"rounds": run.files(), "trusted_key": KEY}
    if run.seed is not None:
        given |= {"seed": io.BytesIO(run.seed), "bits": run.bits, "bits_salt": casting.BITS_SALT}
    return given


def fails(sentence: str, data: bytes, **arguments) -> None:
    """Verification must fail with a sentence that matches."""
    with pytest.raises(ProofError) as caught:
        quiet(data, **arguments)
    assert re.search(sentence, str(caught.value)), str(caught.value)


def put(pointer: str, value: object) -> Callable[[dict], None]:
    """A change of a report: the value at a pointer, REMOVED taking it away."""
    *path, last = pointer.strip("/").split("/")

    def change(document: dict) -> None:
        for name in path:
            document = document[int(name) if isinstance(document, list) else name]
        at = int(last) if isinstance(document, list) else last
        if value is REMOVED:
            del document[at]
        else:
            document[at] = value
    return change
