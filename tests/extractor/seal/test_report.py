"""Report and ledger entries: what they must hold, what they must keep to themselves, what they refuse."""

from __future__ import annotations

import re
from dataclasses import replace

import pytest

from extractor.documents import certificate_document, declaration_document
from extractor.errors import Defect, InputError, ProofError
from extractor.seal import canonical, entries, readme, report
from tests.extractor.seal import casting

TIME = "2031-05-04T09:30:00Z"
ENTRY = entries.Entry("declaration", TIME, "declaration-7", {"digest": canonical.digest("x")})


def read(run: casting.Run) -> dict:
    return canonical.parse(run.contents()["report.json"], require_canonical=True)


@pytest.mark.parametrize("which", [casting.certified, casting.refused, casting.public])
def test_a_report_repeats_declaration_and_certificate_with_their_digests(which) -> None:
    """The documents inside are those outside, and sha256sum over the bundle's files gives the digests inside."""
    run, files, found = which(), which().contents(), read(which())
    for name, document in (("declaration", declaration_document(run.declaration)),
                           ("certificate", certificate_document(run.certificate))):
        assert found[name]["document"] == canonical.parse(canonical.canonical_bytes(document))
        assert found[name]["digest"] == canonical.bytes_digest(files[f"{name}.json"])
    assert found["format"] == "bellassay report 1" and found["run"] == run.name


def test_the_cautions_are_in_every_report() -> None:
    """Conditional on assumptions, batteries certify nothing, memory attacks, prevailing rules."""
    for run in (casting.certified(), casting.refused(), casting.public()):
        text = " ".join(read(run)["cautions"])
        for words in ("conditional on its assumptions", "isolated stations", "settings independent", "quantum theory",
                      "honest classical processing", "not revealed before sealing", "batteries certify nothing",
                      "memory attacks", "that rule prevails"):
            assert words in text


def test_a_report_says_whether_it_is_confidential() -> None:
    """Tally and digests make a report confidential unless the declaration paid for publication."""
    assert read(casting.certified())["confidentiality"].startswith("Confidential: tally and digests")
    assert read(casting.public())["confidentiality"].startswith("Public: what this report reveals was paid for")


def test_the_summary_says_the_outcome() -> None:
    """One sentence: the length, or the reason of the refusal."""
    assert read(casting.certified())["summary"] == (
        "777 bits were certified from 3000 rounds of two boxes of the demonstration by factor-closed "
        "with soundness error 0.001.")
    run = casting.refused()
    assert read(run)["summary"].endswith(f"was refused: {run.certificate.reason}.")


def test_only_the_documented_fields_of_a_segment_enter_the_report() -> None:
    """What the caller's rows hold beside them (tallies of segments, round numbers) stays out."""
    found = read(casting.certified())["records"]
    assert [set(one) for one in found["files"]] == [set(report.FILE_FIELDS)] * 3
    assert (found["rounds"], found["segments"], found["no_clicks"]) == (3000, 3, [0, 0])


def test_a_public_report_leaves_out_what_compares_segments() -> None:
    """Drift is computed from tallies of segments, which the penalty does not pay for."""
    drift = {"name": "drift", "value": 0.1, "p_value": 0.5, "flag": False, "sentence": "Within chance."}
    for run, expected in ((casting.certified(), True), (casting.public(), False)):
        found = read(replace(run, diagnostics=[*run.diagnostics, drift]))
        assert ("drift" in [one["name"] for one in found["diagnostics"]]) is expected


def test_parts_that_do_not_belong_together_are_a_defect() -> None:
    """Our own mistakes must stop before anything is signed."""
    run = casting.certified()
    fewer = run.records | {"segments": run.records["segments"][:2]}
    for wrong in (replace(run, records=fewer), replace(run, seed=None), replace(run, bits=None),
                  replace(casting.refused(), seed=b"x", bits=b"x")):
        with pytest.raises(Defect):
            wrong.contents(trail=casting.certified().entries())


def test_restating_an_honest_report_gives_the_same() -> None:
    """What follows from declaration and certificate is put in anew and must not differ by a byte."""
    run = casting.certified()
    found = read(run)
    assert report.difference(found, report.restate(found, run.declaration, run.certificate)) is None
    with pytest.raises(ProofError):
        report.restate({}, run.declaration, run.certificate)


@pytest.mark.parametrize("one, other, place", [
    ({"a": [1, {"b": 2}]}, {"a": [1, {"b": 3}]}, "/a/1/b"), ({"a": 1}, {}, "/a"), ({}, {"a": None}, "/a"),
    ([1], [1, 2], "/"), (1, True, "/"), ({"a": "1"}, {"a": 1}, "/a"), ([], {}, "/"), (1, 1.0, None),
    ({"a": [0.5]}, {"a": [0.5]}, None)])
def test_differences_are_found_where_they_are(one, other, place) -> None:
    """The pointer names the first place; true is not 1, but 1.0 is written as 1."""
    assert report.difference(one, other) == place


def test_entries_are_read_back_from_their_bytes() -> None:
    """An entry and its canonical bytes are the same thing."""
    for entry in [*casting.certified().entries(), *casting.refused().entries(), ENTRY]:
        assert entries.parse_entry(entry.bytes) == entry
        assert canonical.parse(entry.bytes, require_canonical=True)["format"] == "bellassay ledger entry 1"


@pytest.mark.parametrize("changes", [
    {"kind": "other"}, {"kind": 1}, {"time": "2031-05-04 09:30:00Z"}, {"time": "2031-05-04T09:30:00+00:00"},
    {"time": "2031-13-04T09:30:00Z"}, {"time": "2031-05-04T24:30:00Z"}, {"time": "2031-05-04T09:30:00.5Z"},
    {"time": TIME + "\n"}, {"time": None}, {"subject": ""}, {"subject": 7}, {"subject": "x" * 201}, {"body": {}},
    {"body": {"digest": 1, "more": 2}}, {"body": []}, {"kind": "erasure", "body": {"what": "x" * 60_000}},
    {"kind": "erasure", "body": {"what": float("nan")}}])
def test_malformed_entries_are_not_made(changes) -> None:
    """Kinds, times, subjects and bodies outside the documented form are refused before they reach the log."""
    with pytest.raises(InputError):
        replace(ENTRY, **changes)


@pytest.mark.parametrize("bit", range(8))
def test_a_changed_bit_of_an_entry_makes_another_entry_or_none(bit) -> None:
    """No two byte strings are read as the same entry."""
    data = ENTRY.bytes
    for place in range(len(data)):
        changed = bytearray(data)
        changed[place] ^= 1 << bit
        try:
            assert entries.parse_entry(bytes(changed)) != ENTRY
        except ProofError as fault:
            assert str(fault).startswith("is not a ledger entry: ")


def test_times_sort_like_their_texts() -> None:
    """Comparing the texts must be comparing the times, so one form only is accepted."""
    times = ["2030-12-31T23:59:59Z", "2031-01-01T00:00:00Z", "2031-01-01T00:00:01Z", "2031-02-01T00:00:00Z"]
    assert all(map(entries.is_time, times)) and sorted(times) == times
    others = ["2031-01-01T00:00:00z", "2031-1-1T00:00:00Z", "", 0, "\u0662031-01-01T00:00:00Z"]
    assert not any(map(entries.is_time, others))


def test_the_readme_explains_every_file_and_every_check() -> None:
    """Whoever opens a bundle finds each of its files and each kind of check explained, in lines that fit a screen."""
    for name in casting.certified().contents():
        assert name == "README.txt" or re.search(rf"\b{re.escape(name)}\b", readme.README)
    for word in ("archive", "signature", "inclusion", "order", "commitments", "certificate", "rounds", "assumptions"):
        assert word in readme.README
    assert max(map(len, readme.README.splitlines())) <= 120 and readme.README.isascii()
