"""Coherent forgeries: the forger owns the signing key and the ledger, and makes every digest, proof and signature anew.

Each must be refused with a sentence that says what is wrong.
"""

from __future__ import annotations

import io
from dataclasses import replace

import pytest

from extractor import documents, pipeline
from extractor.errors import ProofError
from extractor.model import Tally, cell_index
from extractor.records.writers import write_npz
from extractor.seal import bundle, canonical, entries
from tests.extractor.seal import casting
from tests.extractor.seal.judging import REMOVED, everything, fails, put, quiet

# ---- the ledger

@pytest.mark.parametrize("missing", range(4))
def test_a_removed_entry_is_noticed(missing) -> None:
    """Declaration, seal, certificate and seed must all be there."""
    run = replace(casting.certified(), after=("result",))
    kinds = ["declaration", "seal", "certificate", "seed"]
    trail = [entry for entry in run.entries() if entry.kind != kinds[missing]]
    fails(f"entry of the {kinds[missing]} is missing", run.bundle(trail=trail))


@pytest.mark.parametrize("order", [(1, 0, 2, 3), (0, 2, 1, 3), (0, 1, 3, 2), (0, 3, 1, 2)])
def test_steps_in_another_order_are_refused(order) -> None:
    """A seal before the declaration, a seed before the seal or the certificate: the ledger itself shows it."""
    run = replace(casting.certified(), after=("result",))
    honest = run.entries()
    trail = [replace(honest[k], time=honest[0].time, subject=honest[0].subject if place == 0 else run.name)
             for place, k in enumerate(order)]
    fails("steps of this run in the wrong order", run.bundle(trail=trail))


def test_a_list_that_hides_the_order_is_refused() -> None:
    """Listing late entries first does not help: their indices tell."""
    run = replace(casting.certified(), after=("result",))
    files = run.contents()
    extract = canonical.parse(files["ledger.json"])
    extract["entries"][1], extract["entries"][3] = extract["entries"][3], extract["entries"][1]
    files["ledger.json"] = canonical.canonical_bytes(extract)
    fails("out of order", bundle.pack(files | {bundle.SUMS: bundle.sums(files)}))


def test_times_that_run_backwards_are_refused() -> None:
    """A declaration dated after the seal is refused although the entries stand in order."""
    run = replace(casting.certified(), after=("result",))
    trail = run.entries()
    late = replace(trail[0], time="2031-05-04T10:00:00Z")
    fails("the seal .* is dated .* before the declaration", run.bundle(trail=[late, *trail[1:]]))
    same = [replace(entry, time=trail[0].time) for entry in trail]
    assert quiet(run.bundle(trail=same)).ok     # a quick run has all its steps within one second


def test_entries_about_another_run_are_refused() -> None:
    """A seal of another run does not seal this one."""
    run = replace(casting.certified(), after=("result",))
    trail = run.entries()
    trail[1] = replace(trail[1], subject="run-40")
    fails("is about run-40, not about this run", run.bundle(trail=trail))


@pytest.mark.parametrize("kind, field, value", [
    ("declaration", "digest", canonical.digest("another declaration")),
    ("seal", "declaration", canonical.digest("another declaration")), ("seal", "segments", 2), ("seal", "rounds", 9),
    ("seal", "records_commitment", canonical.commitment(casting.SALT, b"other records")),
    ("certificate", "certificate_commitment", canonical.commitment(casting.SALT, b"another certificate")),
    ("certificate", "outcome", "refused"), ("certificate", "length", 776),
    ("seed", "source", "upload"), ("seed", "bits", 1), ("seed", "digest", canonical.digest("another seed")),
    ("collection", "bits_commitment", canonical.commitment(casting.SALT, b"other bits")),
])
def test_entries_that_say_something_else_are_refused(kind, field, value) -> None:
    """Every field of every entry is held against the report."""
    run = replace(casting.certified(), after=("result", "collection"))
    trail = [replace(entry, body={**entry.body, field: value}) if entry.kind == kind else entry
             for entry in run.entries()]
    fails(f"the {kind} in the ledger disagrees with the report: its {field}", run.bundle(trail=trail))


def test_late_entries_are_those_that_can_follow() -> None:
    """After the report come its own digest, the collection and the erasure, each once; a second seal cannot."""
    run = replace(casting.certified(), after=("result", "collection"))
    trail = run.entries()
    for late in (trail[1], trail[4]):
        fails("cannot belong to this run", run.bundle(trail=[*trail, replace(late, time=trail[4].time)]))
    refused = replace(casting.refused(), after=("result", "collection"))
    fails("cannot belong to this run", refused.bundle(trail=[
        *casting.refused().entries()[:3], replace(trail[4], subject=refused.name)]))


def test_a_result_entry_must_name_this_report() -> None:
    """The digest of the report that the ledger recorded is that of report.json."""
    run = replace(casting.certified(), after=("other",))
    wrong = entries.Entry("result", "2031-05-04T10:00:00Z", run.name, {"report_digest": canonical.digest("other")})
    fails("the result in the ledger disagrees",
          replace(run, after=("collection",)).bundle(trail=[*replace(run, after=()).entries(), wrong]))


@pytest.mark.parametrize("change", [
    put("/ledger/entries/1/index", 0), put("/ledger/entries/1/time", "2031-05-04T09:09:59Z"),
    put("/ledger/entries/2/kind", "refusal"), put("/ledger/entries/0/digest", canonical.digest("x")),
    put("/ledger/entries/3", REMOVED), put("/ledger/entries", [])])
def test_a_report_that_lists_other_entries_is_refused(change) -> None:
    """The report's own list of entries must be the beginning of the proved ones."""
    fails("list of ledger entries differs", casting.certified().bundle(change=change))


def test_every_changed_proof_index_and_entry_is_refused() -> None:
    """A proof of another entry, another index, a hash less or an altered entry does not lead to the signed root."""
    files = casting.certified().contents()
    extract = canonical.parse(files["ledger.json"])
    for number, item in enumerate(extract["entries"]):
        other = extract["entries"][number - 1]
        for field, value in (("proof", other["proof"]), ("proof", item["proof"][:-1]), ("proof", item["proof"][::-1]),
                             ("proof", ["AAAA"]), ("proof", [7]), ("proof", "x"), ("index", item["index"] + 1),
                             ("index", -1), ("index", 10**9), ("index", "1"), ("index", True),
                             ("entry", other["entry"]), ("entry", None),
                             ("entry", item["entry"].replace("2031", "2030"))):
            altered = extract | {"entries": [*extract["entries"][:number], item | {field: value},
                                             *extract["entries"][number + 1:]]}
            changed = files | {"ledger.json": canonical.canonical_bytes(altered)}
            with pytest.raises(ProofError):
                quiet(bundle.pack(changed | {bundle.SUMS: bundle.sums(changed)}))


# ---- report, declaration, certificate

@pytest.mark.parametrize("pointer, value", [
    ("/summary", "9999 bits were certified."), ("/confidentiality", "Public."), ("/cautions", []),
    ("/format", "bellassay report 2"), ("/declaration/document/soundness", 1e-9),
    ("/certificate/document/certified_length", 778), ("/cautions", REMOVED), ("/summary", REMOVED),
    ("/score", REMOVED), ("/software", REMOVED), ("/more", 1), ("/run", ""), ("/run", 7),
    ("/declaration/time", "2031-05-04T08:00:00Z"), ("/declaration/time", None), ("/declaration/digest", "sha256:00"),
    ("/certificate/digest", "sha256:00"), ("/records", None), ("/records/rounds", 2999), ("/records/segments", 2),
    ("/records/no_clicks", [0, 1]), ("/records/no_clicks", [0.5, 0]), ("/records/planes_digest", "sha256:"),
    ("/records/files", None), ("/records/files/0/rounds", 1000), ("/records/files/0/segment", 2),
    ("/records/files/0/digest", "x"), ("/records/files/1/bytes", -1), ("/records/files/1/format", ""),
    ("/records/files/2/no_clicks", [1, 0]), ("/records/files/2/planes_digest", canonical.digest("x")),
    ("/records/files/2/more", 1), ("/records/files", []), ("/seed", None), ("/seed/bits", 1),
    ("/seed/source", "upload"), ("/seed/digest", 0), ("/seed/digest", canonical.digest("x")), ("/output", None),
    ("/output/bits", 776), ("/output/bits_commitment", "x"), ("/output/backend", None),
    ("/output/bits_commitment", canonical.commitment(casting.SALT, b"x")), ("/ledger", None), ("/ledger/salt", "00"),
    ("/ledger/salt", "00" * 32), ("/ledger/entries", None), ("/ledger/entries", [1]), ("/score", []),
    ("/diagnostics", [1]), ("/diagnostics", None), ("/software", {"x": 1}), ("/score/chsh", 2.9),
    ("/score/chsh", None), ("/score/winning_probability", 0.9), ("/score/wins", 3000), ("/score/correlators", [1]),
    ("/score/correlators/0", 0.5),
])
def test_a_changed_field_of_a_signed_report_is_refused(pointer, value) -> None:
    """Whatever field its signer changed: the report contradicts the rest of the bundle or its own form."""
    if pointer == "/output/bits_commitment" and str(value).startswith("hmac"):
        run = replace(casting.certified(), after=("result", "collection"))   # before the collection only the bits could tell
        fails("collection in the ledger disagrees", run.bundle(change=put(pointer, value)))
        return
    with pytest.raises(ProofError) as caught:
        quiet(casting.certified().bundle(change=put(pointer, value)))
    assert len(str(caught.value)) > 20


@pytest.mark.parametrize("changes", [
    {"certified_length": 778}, {"available_bits": 5000}, {"assumptions": ()}, {"cautions": ()}, {"soundness": 1e-9},
    {"terms": ()}, {"cells": ()}, {"numbers": {}}, {"method": "eat-2018"}, {"declared_rounds": 10**6},
    {"raw_bits": 10**6}])
def test_a_forged_certificate_is_refused(changes) -> None:
    """All is signed, committed to and consistent, but declaration and tally give another certificate."""
    run = casting.certified()
    forged = run.refit(replace(run.certificate, **changes))
    fails("the certificate is not what declaration and tally give", forged.bundle())


def test_an_outcome_that_does_not_exist_is_refused() -> None:
    """A certificate is certified or refused; a third word has no rules by which it could be checked."""
    run = casting.certified()
    fails("/certificate/document/outcome", run.refit(replace(run.certificate, outcome="postponed")).bundle())


def test_a_refusal_turned_into_a_certificate_is_refused() -> None:
    """A run that earned too little stays refused whatever is signed."""
    run = casting.refused()
    forged = replace(run.certificate, outcome="certified", reason=None, certified_length=777)
    fails("recomputed: refused, 0 bits", replace(run.refit(forged), after=("result",)).bundle())


def test_a_false_tally_passes_only_until_the_rounds_are_given() -> None:
    """A certificate truly computed from a false tally is refused as soon as the rounds are counted."""
    run = casting.certified()
    counts = list(run.certificate.tally.counts)
    counts[cell_index(1, 0, 0, 0, 0)] += 1
    counts[cell_index(1, 0, 0, 0, 1)] -= 1
    tally = Tally(tuple(counts))
    score, diagnostics = pipeline.look(run.declaration, tally)
    forged = replace(run.refit(pipeline.certify(run.declaration, tally)), score=score.document(),
                     diagnostics=[one.document() for one in diagnostics])
    data = forged.bundle()
    assert "give the round files" in " ".join(quiet(data).unchecked)
    fails("tally of the certificate is not the tally of the rounds", data, rounds=run.files())


def test_a_declaration_changed_afterwards_is_refused() -> None:
    """A declaration fitted to the data has another digest than the one in the ledger."""
    run = replace(casting.certified(), after=("result",))
    later = replace(run.declaration, output_bits=run.certificate.available_bits)
    forged = replace(run, declaration=later).refit(pipeline.certify(later, run.certificate.tally))
    assert quiet(forged.bundle()).certified_length > 777     # had it been declared in time
    trail = [run.entries()[0], *forged.entries()[1:]]
    fails("the declaration in the ledger disagrees with the report: its digest", forged.bundle(trail=trail))


def test_a_public_report_reveals_what_was_paid_for_and_no_more() -> None:
    """Files and segments may not be listed under public disclosure; a signed report that does is refused."""
    run = casting.public()
    files = casting.certified().contents()
    listed = canonical.parse(files["report.json"])["records"]["files"]
    fails("/records/files", run.bundle(change=put("/records/files", listed)))
    text = run.contents()["report.json"].decode()
    for segment in run.records["segments"]:
        assert segment["digest"] not in text and segment["planes_digest"] not in text

@pytest.mark.parametrize("name", ["declaration", "certificate"])
def test_signed_nonsense_is_a_proof_error(name) -> None:
    """A signed document with fields of wrong types or extra fields ends in ProofError, never another exception."""
    run = casting.certified()
    good = (documents.declaration_document(run.declaration) if name == "declaration"
            else documents.certificate_document(run.certificate))
    for field in (*good, "more"):
        for value in (None, [{}], "x", 1e300):
            if field in good and canonical.canonical_bytes(good[field]) == canonical.canonical_bytes(value):
                continue
            altered = good | {field: value}

            def change(document, altered=altered):
                document[name] |= {"document": altered, "digest": canonical.digest(altered)}

            files = run.contents(change=change)
            with pytest.raises(ProofError):
                quiet(bundle.pack(files))


def test_a_bundle_without_the_result_entry_is_refused() -> None:
    """Only the result entry fixes the report itself; without it a second report of the same run would pass as well."""
    fails("entry of the result is missing", replace(casting.certified(), after=()).bundle())


@pytest.mark.parametrize("disclosure", ["confidential", "public"])
@pytest.mark.parametrize("joined", [True, False])
def test_rounds_that_were_not_sealed_are_refused(disclosure, joined) -> None:
    """A lab that owns the key seals the segments of one run and certifies another one: the seal is held against the rounds handed in."""
    changes = {} if disclosure == "confidential" else {"disclosure": "public", "output_bits": 300}
    sealed = casting.run(casting.declared(**changes), (1400, 1600), seed=1)
    other = casting.run(casting.declared(**changes), (1400, 1600), seed=2)
    forged = replace(other, records={"segments": sealed.records["segments"], "planes_digest": other.records["planes_digest"]})
    rounds = other.files()
    if joined:
        target = io.BytesIO()
        write_npz(target, pipeline.batches_of(other.files(), other.declaration.rules))
        rounds = [(target, "joined.npz")]
    fails("rounds of segment 1|not shown to be the rounds that were sealed", forged.bundle(), **everything(other) | {"rounds": rounds})
