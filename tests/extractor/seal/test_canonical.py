"""Canonical JSON: one value, one byte string, and nothing ambiguous is read."""

from __future__ import annotations

import hashlib
import hmac

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.errors import InputError
from extractor.seal import canonical

VALUES = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**53) + 1, 2**53 - 1) | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(exclude_categories=("Cs",))),
    lambda inner: st.lists(inner, max_size=4)
    | st.dictionaries(st.text(st.characters(exclude_categories=("Cs",))), inner, max_size=4),
    max_leaves=12)


@settings(max_examples=150, deadline=None, derandomize=True)
@given(VALUES)
def test_what_is_written_is_read_back_and_written_alike(value) -> None:
    """Every JSON value survives the round trip, and its bytes are a fixed point."""
    data = canonical.canonical_bytes(value)
    again = canonical.parse(data, require_canonical=True)
    assert again == value
    assert canonical.canonical_bytes(again) == data


@pytest.mark.parametrize("data, code", [
    (b'{"a":1,"a":1}', "repeated-key"),
    (b'[{"b":{"a":1,"\\u0061":2}}]', "repeated-key"),
    (b"NaN", "bad-number"), (b"[-Infinity]", "bad-number"), (b"1e999", "bad-number"), (b"-1e999", "bad-number"),
    (b"9007199254740993", "bad-number"), (b"1" + b"0" * 310, "bad-number"), (b"9" * 500, "bad-number"),
    (b"9" * 10_000, "bad-json"),
    (b'"\xff"', "bad-json"), (b"\xef\xbb\xbf1", "bad-json"), ("1".encode("utf-16"), "bad-json"),
    (b'"\xed\xa0\x80"', "bad-json"),
    (b"", "bad-json"), (b"{", "bad-json"), (b"1 2", "bad-json"), (b"01", "bad-json"), (b"[1,]", "bad-json"),
    (b"'a'", "bad-json"),
    (b"[" * 100_000, "bad-json"), (b"[" * 100_000 + b"]" * 100_000, "bad-json"),
    (b'"\\ud800"', "not-canonical"), (b'{"\\udfff":1}', "not-canonical"),
])
def test_ambiguous_or_broken_json_is_refused(data, code) -> None:
    """Duplicate keys, numbers no double holds, wrong encodings and broken syntax are InputErrors, nothing else."""
    with pytest.raises(InputError) as caught:
        canonical.parse(data)
    assert caught.value.code == code


@pytest.mark.parametrize("data", [
    b'{"b":1,"a":2}', b'{"a": 1}', b' 1', b'1\n', b'1.0', b'1e0', b'-0', b'"\\u0041"', b'"\\/"', b'[1, 2]', b'0.10',
    b'1E30'])
def test_other_spellings_are_read_but_not_where_canonical_bytes_are_required(data) -> None:
    """A value spelt in another way is a value, but not the bytes that were signed."""
    canonical.parse(data)
    with pytest.raises(InputError, match="canonical"):
        canonical.parse(data, require_canonical=True)


@pytest.mark.parametrize("value", [
    float("nan"), float("inf"), 2**53, -(2**53), {1: 2}, {"a": b"bytes"}, {"a"}, "\ud800", object()])
def test_values_outside_json_have_no_bytes(value) -> None:
    """What JSON cannot say is refused, not approximated."""
    with pytest.raises(InputError):
        canonical.canonical_bytes(value)


def test_digest_is_the_sha_256_of_the_canonical_bytes() -> None:
    """sha256sum over a canonical file must give the digest."""
    assert canonical.digest({"b": 1, "a": 2.0}) == "sha256:" + hashlib.sha256(b'{"a":2,"b":1}').hexdigest()


def test_commitment_is_hmac_and_depends_on_salt_and_data() -> None:
    """The commitment is HMAC-SHA-256 under the salt; a salt of another length is refused."""
    salt = bytes(range(32))
    expected = "hmac-sha256:" + hmac.new(salt, b"data", hashlib.sha256).hexdigest()
    assert canonical.commitment(salt, b"data") == expected
    assert canonical.commitment(salt[::-1], b"data") != expected
    for size in (0, 16, 31, 33, 64):
        with pytest.raises(InputError):
            canonical.commitment(bytes(size), b"data")
