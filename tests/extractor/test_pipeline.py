"""The steps put together: files read as one run, extraction with resume, and what the pipeline refuses."""

from __future__ import annotations

import io
from dataclasses import replace

import numpy as np
import pytest

from extractor import pipeline
from extractor.bell.rigs import Rig, simulate
from extractor.errors import Defect, InputError
from extractor.hashing._reference import hash_bits
from extractor.hashing.toeplitz import SeedBytes
from extractor.model import RoundRules
from extractor.records.planes import BLOCK_ROUNDS, rebatch
from extractor.records.writers import write_csv, write_npy, write_npz


def file_of(writer, rounds: int, seed: int, **options) -> tuple[io.BytesIO, str]:
    target = io.BytesIO()
    writer(target, simulate(Rig(visibility=0.98), rounds, seed), **options)
    return target, f"{writer.__name__}-{seed}"


def seed_of(bits: int) -> SeedBytes:
    data = bytearray(np.random.default_rng(4).bytes((bits + 7) // 8))
    if bits % 8:
        data[-1] &= (1 << bits % 8) - 1
    return SeedBytes(bytes(data), bits)


def test_no_round_counts_twice():
    """A file given twice, even in another format, is an error that names both; short files may be equal by chance."""
    first, again = file_of(write_npz, 5000, 1), file_of(write_csv, 5000, 1)
    with pytest.raises(InputError, match="same rounds as write_npz-1") as caught:
        list(pipeline.batches_of([first, file_of(write_npz, 700, 2), again], RoundRules()))
    assert caught.value.code == "repeated-rounds" and caught.value.file == "write_csv-1"
    name = "twice.npz"          # one and the same text, as when a path is typed twice
    with pytest.raises(InputError, match="itself, given before"):
        list(pipeline.batches_of([(first[0], name), (file_of(write_npz, 5000, 1)[0], name)], RoundRules()))
    assert sum(b.rounds for b in pipeline.batches_of([file_of(write_npz, 9, 1), file_of(write_npz, 9, 1)], RoundRules())) == 18


def test_round_numbers_run_on_from_file_to_file():
    """A gap or an overlap between two files is named with the file."""
    one = file_of(write_csv, 100, 1, first_round=1)
    for begin, code in ((103, "missing-round"), (100, "repeated-round")):
        with pytest.raises(InputError) as caught:
            list(pipeline.batches_of([one, file_of(write_csv, 100, 2, first_round=begin)], RoundRules()))
        assert caught.value.code == code and caught.value.file == "write_csv-2"
    assert sum(b.rounds for b in pipeline.batches_of([one, file_of(write_csv, 100, 2, first_round=101)], RoundRules())) == 200


def test_an_array_on_its_side_is_not_read_as_planes():
    """0/1 values in 4 long rows would, read as packed planes, invent seven of eight rounds: refused with advice."""
    values = np.random.default_rng(1).integers(0, 2, (4, 1000)).astype(np.uint8)
    target = io.BytesIO()
    np.save(target, values)
    with pytest.raises(InputError, match="transpose"):
        list(pipeline.batches_of([(target, "sideways.npy")], RoundRules()))
    target = io.BytesIO()
    np.save(target, values.T)
    assert sum(b.rounds for b in pipeline.batches_of([(target, "upright.npy")], RoundRules())) == 1000
    packed = file_of(write_npy, 8000, 3, packed=True)
    assert sum(b.rounds for b in pipeline.batches_of([packed], RoundRules())) == 8000


def small_run(rounds: int, declared: int):
    declaration = pipeline.declare(score=0.84, rig="Wren bench", rounds=declared, method="factor-closed", soundness=1e-2, output_rule="credit")
    batches = list(rebatch(simulate(Rig(visibility=0.99), rounds, 6)))
    return declaration, batches, pipeline.certify(declaration, pipeline.read_run(batches)[0])


@pytest.mark.parametrize("rounds, declared", [(1501, 1501), (1203, 1501)])
def test_extraction_is_the_definition_on_the_raw_string(rounds, declared):
    """The bits are the Toeplitz hash of a_1..a_N b_1..b_N, N the declared rounds, zero padded after an early stop."""
    declaration, batches, certificate = small_run(rounds, declared)
    assert certificate.certified_length > 20
    seed = seed_of(certificate.seed_bits)
    raw = np.zeros(2 * declared, int)
    for start, name in ((0, "a"), (declared, "b")):
        raw[start:start + rounds] = np.unpackbits(batches[0].planes[name], bitorder="little", count=rounds)
    seed_list = np.unpackbits(seed.read(0, seed.bits), bitorder="little", count=seed.bits).astype(int)
    m = certificate.certified_length
    definition = np.array([int(np.sum(seed_list[i:i + 2 * declared][::-1] & raw) & 1) for i in range(m)])
    bits = pipeline.extract(declaration, certificate, lambda first: batches, seed)
    assert np.array_equal(np.unpackbits(np.frombuffer(bits, np.uint8), bitorder="little", count=m), definition)
    head = hash_bits(list(map(int, seed_list)), list(map(int, raw)), m)[:8]
    assert list(map(int, definition[:8])) == list(map(int, head))


def test_resuming_from_any_partial_gives_the_same_bits():
    """Every partial hash that was handed out can be continued; the bits are those of one go."""
    rounds = 3 * BLOCK_ROUNDS + 77
    declaration = pipeline.declare(score=0.80, rig="Wren bench", rounds=rounds + 5, method="factor-closed", soundness=1e-6, output_rule="credit",
                                   output_bits=3001)
    batches = list(rebatch(simulate(Rig(visibility=0.95), rounds, 8)))
    certificate = pipeline.certify(declaration, pipeline.read_run(batches)[0])
    seed, partials, told = seed_of(certificate.seed_bits), [], []
    read = lambda first: batches[first // BLOCK_ROUNDS:]   # noqa: E731
    bits = pipeline.extract(declaration, certificate, read, seed, on_partial=partials.append, partial_every_rounds=BLOCK_ROUNDS,
                            on_progress=lambda done, total: told.append((done, total)))
    assert [p.rounds for p in partials] == [BLOCK_ROUNDS, 2 * BLOCK_ROUNDS, 3 * BLOCK_ROUNDS] and told[-1] == (rounds, rounds)
    assert all(pipeline.extract(declaration, certificate, read, seed, resume=partial) == bits for partial in partials)


def test_what_extraction_refuses():
    """A seed of another length, missing rounds and a refused certificate never give bits."""
    declaration, batches, certificate = small_run(1501, 1501)
    with pytest.raises(InputError, match="exactly"):
        pipeline.extract(declaration, certificate, lambda first: batches, seed_of(certificate.seed_bits + 1))
    with pytest.raises(Defect, match="rounds read"):
        pipeline.extract(declaration, certificate, lambda first: [], seed_of(certificate.seed_bits))
    with pytest.raises(Defect):
        pipeline.extract(declaration, replace(certificate, outcome="refused"), lambda first: batches, seed_of(certificate.seed_bits))


def test_a_declaration_from_a_calibration_names_it():
    """The calibration's digest and size enter the declaration; score and calibration exclude each other."""
    calibration = pipeline.read_run(simulate(Rig(visibility=0.9), 10**6, 1))[0]
    arguments = dict(rig="Wren bench", rounds=10**6, method="factor-closed", soundness=1e-6)
    declaration = pipeline.declare(calibration=calibration, **arguments)
    assert declaration.calibration_rounds == 10**6 and declaration.calibration_digest.startswith("sha256:")
    assert declaration.expected_score == pytest.approx(Rig(visibility=0.9).winning_probability, abs=2e-3)
    for wrong in (dict(calibration=calibration, score=0.8), {}):
        with pytest.raises(InputError, match="exactly one"):
            pipeline.declare(**wrong, **arguments)
