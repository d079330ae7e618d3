"""Signed notes and checkpoints: the written format is the one documented, and no changed byte passes."""

from __future__ import annotations

import base64
import hashlib

import pytest

from extractor.errors import InputError, ProofError
from extractor.seal import checkpoint, note

SEED = bytes.fromhex("9d61b19deffd5a60ba844af492ec2cc44449c5697b326919703bac031cae7f60")    # RFC 8032 TEST 1
SIGNER = note.Signer.from_seed("example.org/ledger", SEED)
OTHER = note.Signer.from_seed("other.example/ledger", bytes(range(32)))
TEXT = "a first line\na second line\n"


def test_the_worked_example_of_the_module_text_is_true() -> None:
    """Verifier key and note in the documentation must be what the code writes and accepts."""
    documented = note.__doc__.split("Worked example:")[1]
    signed = note.sign(TEXT, SIGNER)
    assert f"\n    {SIGNER.verifier_text}\n" in documented
    assert "".join(f"    {line}\n" if line else "\n" for line in signed[:-1].split("\n")) in documented
    assert note.open(signed, [note.Verifier.from_text(SIGNER.verifier_text)]) == TEXT


def test_key_id_and_signature_line_follow_the_specification() -> None:
    """The id is SHA-256(name, LF, 1, key)[:4] and stands before the 64 signature bytes in the line."""
    key = SIGNER.verifier.public_key
    expected = hashlib.sha256(b"example.org/ledger\n\x01" + key).digest()[:4]
    text, line = note.sign(TEXT, SIGNER).split("\n\n")
    data = base64.b64decode(line.removesuffix("\n").split(" ")[2])
    assert (text + "\n", line[:21]) == (TEXT, "\u2014 example.org/ledger ")
    assert data == expected + SIGNER.sign(TEXT.encode())
    encoded = base64.b64encode(b"\x01" + key).decode()
    assert SIGNER.verifier_text == f"example.org/ledger+{expected.hex()}+{encoded}"


@pytest.mark.parametrize("bit", range(8))
def test_every_changed_bit_of_a_note_is_refused(bit) -> None:
    """Flip this bit of each byte of the note: text, separator, name, key id, signature and line ends all matter."""
    signed = note.sign(TEXT, SIGNER).encode()
    for place in range(len(signed)):
        changed = bytearray(signed)
        changed[place] ^= 1 << bit
        with pytest.raises(ProofError):
            note.open(changed.decode("utf-8", errors="surrogateescape"), [SIGNER.verifier])


def test_every_prefix_and_every_missing_character_is_refused() -> None:
    """No shortened note passes."""
    signed = note.sign(TEXT, SIGNER)
    for place in range(len(signed)):
        for changed in (signed[:place], signed[:place] + signed[place + 1:]):
            with pytest.raises(ProofError):
                note.open(changed, [SIGNER.verifier])


def test_every_changed_or_shortened_key_text_is_refused() -> None:
    """A verifier key with one changed bit, or any substring of it, is not a key."""
    text = SIGNER.verifier_text
    for place in range(len(text)):
        for bit in range(7):
            changed = text[:place] + chr(ord(text[place]) ^ 1 << bit) + text[place + 1:]
            with pytest.raises(InputError):
                note.Verifier.from_text(changed)
    for start in range(len(text)):
        for end in range(start, len(text) + 1):
            if (start, end) != (0, len(text)):
                with pytest.raises(InputError):
                    note.Verifier.from_text(text[start:end])


def test_signatures_of_unknown_keys_are_passed_over_and_known_ones_must_hold() -> None:
    """A witness's line does no harm; a bad line of a known key refuses the note even beside a good one."""
    both = note.sign(TEXT, SIGNER, OTHER)
    for known in ([SIGNER.verifier], [OTHER.verifier], [SIGNER.verifier, OTHER.verifier]):
        assert note.open(both, known) == TEXT
    with pytest.raises(ProofError, match="no signature by other"):
        note.open(note.sign(TEXT, SIGNER), [OTHER.verifier])
    with pytest.raises(ProofError, match="no signature"):
        note.open(both, [])
    stolen = note.sign("another text\n", OTHER).splitlines()[-1]
    forged = note.sign(TEXT, SIGNER) + stolen + "\n"
    assert note.open(forged, [SIGNER.verifier]) == TEXT
    with pytest.raises(ProofError, match="signature of other.example/ledger is not valid"):
        note.open(forged, [SIGNER.verifier, OTHER.verifier])


def test_same_name_with_another_key_is_another_signer() -> None:
    """Taking over the name without the key gains nothing."""
    imitator = note.Signer.from_seed(SIGNER.name, bytes(32))
    with pytest.raises(ProofError, match="no signature"):
        note.open(note.sign(TEXT, imitator), [SIGNER.verifier])


@pytest.mark.parametrize("text", [
    "a\n\nb\n", "a\n\n", "\n\n", "\n\n\u2014 looks like a signature\n", "\u20ac\n", "x" * 5000 + "\n"])
def test_texts_with_empty_lines_survive(text) -> None:
    """The last empty line is the separator, whatever the text holds."""
    assert note.open(note.sign(text, SIGNER), [SIGNER.verifier]) == text


@pytest.mark.parametrize("text", [
    "", "\n", "no line feed", "tab\t\n", "return\r\n", "zero\0\n", "\ud800\n", "x" * 1_000_000 + "\n"])
def test_texts_no_note_can_hold_are_not_signed(text) -> None:
    """What a reader would refuse must not be signed."""
    with pytest.raises(InputError):
        note.sign(text, SIGNER)


@pytest.mark.parametrize("name", ["", "a b", "a+b", "a\nb", "a\u2003b", "x" * 201])
def test_key_names_without_ambiguity(name) -> None:
    """Spaces, plus signs and line feeds would break the formats the name stands in."""
    with pytest.raises(InputError):
        note.Signer.from_seed(name, SEED)


def test_too_many_signatures_are_refused() -> None:
    """The number of lines a stranger can make us look at is bounded."""
    line = note.sign(TEXT, OTHER).splitlines()[-1] + "\n"
    assert note.open(note.sign(TEXT, SIGNER) + line * 99, [SIGNER.verifier]) == TEXT
    with pytest.raises(ProofError, match="more than 100"):
        note.open(note.sign(TEXT, SIGNER) + line * 100, [SIGNER.verifier])


def test_a_signer_shows_no_private_key() -> None:
    """Neither repr nor attributes that logs print may hold the private bytes."""
    assert SEED.hex() not in repr(SIGNER) and repr(SEED)[2:-1] not in repr(SIGNER)
    assert repr(SIGNER) == f"Signer({SIGNER.verifier_text})"


def test_checkpoint_text_is_three_lines() -> None:
    """Origin, size, base64 root: the checkpoint text format, read back to the same value."""
    text = checkpoint.format("example.org/ledger", 12, bytes(range(32)))
    assert text == "example.org/ledger\n12\nAAECAwQFBgcICQoLDA0ODxAREhMUFRYXGBkaGxwdHh8=\n"
    assert checkpoint.parse(text) == checkpoint.Checkpoint("example.org/ledger", 12, bytes(range(32)))


@pytest.mark.parametrize("text", [
    "", "o\n1\n", "o\n01\nROOT\n", "o\n-1\nROOT\n", "o\n1\nROOT", "o\n1\nROOT\n\n",
    "o\n1\nROOT\nextension\n", "\n1\nROOT\n",
    " o\n1\nROOT\n", "o\n\u0661\nROOT\n", "o\n1\nAAAA\n", "o\n1\nROOT \n",
    "o\n9007199254740992\nROOT\n", "o\n1\nnot base64\n", "o\r\n1\nROOT\n",
    "o\n1\nAAECAwQFBgcICQoLDA0ODxAREhMUFRYXGBkaGxwdHh9=\n"])
def test_other_checkpoint_texts_are_refused(text) -> None:
    """One state, one text: leading zeros, other digits, unused bits, missing or further lines are refused."""
    with pytest.raises(ProofError):
        checkpoint.parse(text.replace("ROOT", "AAECAwQFBgcICQoLDA0ODxAREhMUFRYXGBkaGxwdHh8="))


@pytest.mark.parametrize("origin, size, root", [
    ("", 1, bytes(32)), ("a\nb", 1, bytes(32)), ("o", -1, bytes(32)), ("o", 1, bytes(31))])
def test_states_that_cannot_be_are_not_written(origin, size, root) -> None:
    """A checkpoint of a nameless ledger, negative size or short root is the caller's mistake."""
    with pytest.raises(InputError):
        checkpoint.format(origin, size, root)
