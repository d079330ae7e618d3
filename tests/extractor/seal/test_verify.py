"""Verification of whole bundles: honest ones pass, and what is handed in beside a bundle must be what it speaks of."""

from __future__ import annotations

import io
from dataclasses import replace

import numpy as np
import pytest

from extractor import pipeline
from extractor.errors import InputError, ProofError
from extractor.records.writers import write_npy, write_npz
from extractor.seal import bundle, canonical, note
from extractor.seal.verify import verify_bundle
from tests.extractor.seal import casting
from tests.extractor.seal.judging import KEY, everything, fails, quiet

OTHER = note.Signer.from_seed("rig.example/ledger", bytes(32))


@pytest.mark.parametrize("which", [casting.certified, casting.refused, casting.public, casting.short])
def test_an_honest_bundle_verifies_with_everything_at_hand(which) -> None:
    """Certified, refused, public and early stopped runs: with everything given, nothing stays unchecked."""
    run, said = which(), []
    verdict = verify_bundle(run.bundle(), say=said.append, **everything(run))
    assert verdict.ok and verdict.unchecked == ()
    assert (verdict.run, verdict.outcome) == (run.name, run.certificate.outcome)
    assert verdict.certified_length == run.certificate.certified_length
    names = [name for name, _ in verdict.checks]
    assert names == ["archive", "key", "signature", "checkpoint", "inclusion", "agreement", "order", "commitments",
                     "certificate", "score", "rounds", "segments"] + (
        ["seed", "bits", "extraction"] if run.seed is not None else [])
    assert said == [f"{name}: {sentence}" for name, sentence in verdict.checks]
    assert all(sentence.endswith(".") for _, sentence in verdict.checks)


@pytest.mark.parametrize("which, left", [(casting.certified, 4), (casting.refused, 2)])
def test_a_bundle_alone_verifies_and_says_what_stays_open(which, left) -> None:
    """Without rounds, seed, bits and key each gap is named, so that nobody takes silence for a check."""
    verdict = quiet(which().bundle())
    assert verdict.ok and len(verdict.unchecked) == left
    assert KEY in verdict.unchecked[0]


def test_refusal_is_reported_as_refusal() -> None:
    """The refused run of the tests is one, and its bundle has neither seed nor output."""
    run = casting.refused()
    assert run.certificate.outcome == "refused" and run.certificate.reason
    report = canonical.parse(run.contents()["report.json"])
    assert (report["seed"], report["output"]) == (None, None)
    fails("neither a seed nor bits", run.bundle(), seed=io.BytesIO(b"x"))
    fails("neither a seed nor bits", run.bundle(), bits=b"x")


# ---- the key and the signatures

def test_another_key_is_noticed_by_whoever_brings_the_right_one() -> None:
    """A bundle wholly signed with another key of the same name passes only for those who bring no key."""
    data = casting.certified().bundle(signer=OTHER)
    fails("another key than the trusted one", data, trusted_key=KEY)
    assert OTHER.verifier_text in quiet(data).unchecked[0]
    with pytest.raises(InputError):
        quiet(data, trusted_key="not a key")


def test_report_and_checkpoint_need_the_same_key() -> None:
    """A checkpoint of a ledger with another key does not lend its entries to the report."""
    fails("checkpoint in ledger.json does not hold", casting.certified().bundle(checkpoint_signer=OTHER))


def test_a_note_for_another_report_is_refused() -> None:
    """Signed note and report of two different runs do not go together."""
    files = casting.certified().contents()
    files["report.note"] = casting.refused().contents()["report.note"]
    fails("signs another report", bundle.pack(files | {bundle.SUMS: bundle.sums(files)}))


@pytest.mark.parametrize("name", ["declaration.json", "certificate.json"])
def test_documents_of_another_run_are_refused(name) -> None:
    """Declaration and certificate must be those of the signed report."""
    files = casting.certified().contents() | {name: casting.short().contents()[name]}
    fails("its digest is another", bundle.pack(files | {bundle.SUMS: bundle.sums(files)}))


def test_the_ledger_extract_of_another_run_is_refused() -> None:
    """Valid entries and proofs of another run say other things than this report."""
    files = casting.certified().contents() | {"ledger.json": casting.public().contents()["ledger.json"]}
    fails("list of ledger entries differs", bundle.pack(files | {bundle.SUMS: bundle.sums(files)}))


# ---- rounds, seed, bits

def rewritten(run: casting.Run, **options) -> list:
    """The run's rounds in one NPZ file."""
    target = io.BytesIO()
    write_npz(target, pipeline.batches_of(run.files(), run.declaration.rules), **options)
    return [(target, "joined.npz")]


def test_the_same_rounds_in_another_file_are_the_same_rounds() -> None:
    """Digest, tally and even the seal's segments do not depend on how the rounds are split into files."""
    run = casting.certified()
    verdict = quiet(run.bundle(), **everything(run) | {"rounds": rewritten(run, packed=False)})
    assert {"extraction", "segments"} <= {name for name, _ in verdict.checks} and verdict.unchecked == ()


def test_a_public_report_needs_the_segments_as_they_were() -> None:
    """A public report does not say how the run was split, so files split otherwise prove nothing and are refused with advice."""
    run = casting.public()
    with pytest.raises(ProofError, match="give the segments as they were uploaded"):
        quiet(run.bundle(), **everything(run) | {"rounds": rewritten(run)})


def test_other_rounds_are_refused() -> None:
    """Changed rounds, missing, doubled or exchanged files and unreadable ones are refused in words that say which."""
    run = casting.certified()
    data, files = run.bundle(), run.files()
    fails("2201 rounds, the run has 3000", data, rounds=files[:2])
    fails("4001 rounds|run has 3000", data, rounds=[*files, files[0]])
    fails("digest is another", data, rounds=[files[1], files[0], files[2]])
    text = bytearray(run.segments[1][1])
    text[text.index(b"\n") + 1] ^= 1           # the first value of the first row
    altered = [files[0], (io.BytesIO(text), "part-2.csv"), files[2]]
    fails("not hold the rounds of segment 2", data, rounds=altered)
    target = io.BytesIO()
    batch, = pipeline.batches_of(files, run.declaration.rules)
    write_npy(target, [replace(batch, planes=batch.planes | {"a": batch.planes["a"] ^ (np.arange(375) == 7)})])
    fails("their digest is another", data, rounds=[(target, "altered.npy")])
    fails("the rounds: file cut.npz", data, rounds=[(io.BytesIO(run.segments[0][1][:-30]), "cut.npz"), *files[1:]])
    fails("empty", data, rounds=[(io.BytesIO(b""), "empty.npz")])


def test_other_seeds_are_refused() -> None:
    """Another length, one changed bit or a set tail bit."""
    run = casting.certified()
    data, seed = run.bundle(), bytearray(run.seed)
    fails(f"{len(seed) - 1} bytes", data, seed=io.BytesIO(seed[:-1]))
    fails(f"{len(seed) + 1} bytes", data, seed=io.BytesIO(seed + b"\0"))
    seed[100] ^= 4
    fails("its digest is another", data, seed=io.BytesIO(seed))


def test_other_bits_are_refused() -> None:
    """Against commitment, and against rounds and seed, each alone and both."""
    run = casting.certified()
    data, wrong = run.bundle(), bytearray(run.bits)
    wrong[5] ^= 1
    alone = {"rounds": run.files(), "seed": io.BytesIO(run.seed)}
    fails("not those committed to", data, bits=bytes(wrong), bits_salt=casting.BITS_SALT)
    fails("not those committed to", data, bits=run.bits, bits_salt=casting.SALT)
    fails("not those that rounds and seed give", data, bits=bytes(wrong), **alone)
    fails("97 bytes|98 bytes", data, bits=run.bits[:-1])
    assert "extraction" in dict(quiet(data, bits=io.BytesIO(run.bits), **alone).checks)
    assert "extraction" in dict(quiet(data, bits_salt=casting.BITS_SALT, **alone).checks)
    assert "bits" in dict(quiet(data, bits=run.bits, bits_salt=casting.BITS_SALT).checks)
    with pytest.raises(InputError):
        quiet(data, bits=run.bits, bits_salt=b"short")


def test_false_bits_committed_to_are_found_by_extracting_again() -> None:
    """Bits that are not the hash of the rounds pass against their own commitment, but not against rounds and seed."""
    run = replace(casting.certified(), bits=casting.uniform(777, b"made up"))
    data = run.bundle()
    assert quiet(data, bits=run.bits, bits_salt=casting.BITS_SALT).ok
    fails("not those that rounds and seed give", data, **everything(run))
    fails("rounds and seed give other bits", data, **everything(run) | {"bits": None})


def test_what_was_given_but_not_enough_is_said() -> None:
    """Bits without salt or rounds, rounds and seed without bits: the gap is named."""
    run = casting.certified()
    data = run.bundle()
    assert "where the bits come from" in quiet(data, bits=run.bits).unchecked[-1]
    assert "hash of the rounds" in quiet(data, bits=run.bits, bits_salt=casting.BITS_SALT).unchecked[-1]
    both = quiet(data, rounds=run.files(), seed=io.BytesIO(run.seed))
    assert "against anything" in both.unchecked[-1]


def test_a_general_table_is_checked_a_second_time(monkeypatch) -> None:
    """A factor-table bundle is verified with its table found valid twice; if the second check fails, there is no verdict."""
    made = casting.run(casting.declared(method="factor-table", order=1.05, output_bits=1000), (3000,), after=("result",))
    assert made.certificate.outcome == "certified"
    verdict = verify_bundle(made.bundle(), say=lambda text: None)
    assert "table" in dict(verdict.checks)
    monkeypatch.setattr("extractor.seal.table_check.ROUNDING", 1.0)     # an impossible margin: nothing passes
    with pytest.raises(ProofError, match="second check"):
        verify_bundle(made.bundle(), say=lambda text: None)
