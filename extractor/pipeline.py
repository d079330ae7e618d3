"""START HERE. The whole job, from rounds to certified bits, as the steps that follow one another.

    round files --open--> batches --tally--> tally --certify--> certificate --extract (with a seed)--> bits

`declare` comes before the rounds exist, `plan` before that.
Each step takes frozen values and returns frozen values; nothing here waits, stores, or holds a key.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from typing import Any, BinaryIO

from extractor import tally as tallying
from extractor.bell.diagnostics import Diagnostic, diagnose
from extractor.bell.rigs import Rig as SimulatedRig
from extractor.bell.score import Score, score
from extractor.documents import tally_counts
from extractor.entropy import behaviours, bound, planning
from extractor.errors import Defect, InputError
from extractor.hashing.toeplitz import SeedReader, ToeplitzStream, find_backend
from extractor.model import Certificate, Convention, Declaration, RoundBatch, RoundRules, Tally
from extractor.records.planes import BLOCK_ROUNDS, TELLING_ROUNDS, PlaneDigest, rebatch
from extractor.records.rounds import open_rounds
from extractor.seal import canonical

check_declaration = bound.check_declaration
certify = bound.certify
plan = planning.plan
compare = planning.compare
rounds_for = planning.rounds_for


def expect(*, score: float | None = None, calibration: Tally | None = None, model: SimulatedRig | None = None,
           convention: Convention = Convention()) -> dict[str, Any]:
    """What a rig may be expected to do, as arguments of `plan`, `compare`, `rounds_for` (score, and for factor-table
    behaviour).

    Exactly one of an expected winning probability, a calibration tally (its likeliest quantum behaviour is taken) and
    a modelled rig.
    """
    if sum(value is not None for value in (calibration, model, score)) != 1:
        raise InputError("give exactly one of a score, a calibration tally and a modelled rig", code="bad-usage", field="/score")
    if score is not None:
        return {"score": score}
    if calibration is not None:
        return {"score": planning.score_of(calibration, convention),
                "behaviour": tuple(behaviours.of_tally(calibration).reshape(-1).tolist())}
    tests = model.cell_probabilities()[1]
    behaviour = tests / tests.sum(axis=(2, 3), keepdims=True)
    return {"score": model.winning_probability, "behaviour": tuple(behaviour.reshape(-1).tolist())}


def declare(*, calibration: Tally | None = None, score: float | None = None, model: SimulatedRig | None = None,
            **arguments) -> Declaration:
    """A declaration for a rig known by a calibration tally, an expected winning probability or a model (exactly one of them).

    The calibration's digest goes into the declaration. Arguments and errors otherwise as `entropy.planning.declare`.
    """
    expected = expect(score=score, calibration=calibration, model=model, convention=arguments.get("convention", Convention()))
    if calibration is not None:
        arguments |= {"calibration_digest": canonical.digest(tally_counts(calibration)), "calibration_rounds": calibration.rounds}
    return planning.declare(**expected, **arguments)


def batches_of(files: Iterable[tuple[BinaryIO, str]], rules: RoundRules) -> Iterator[RoundBatch]:
    """All rounds of some files in order, in batches of BLOCK_ROUNDS.

    Round numbers must run on from file to file, and no file may hold the rounds of an earlier one again.
    """
    def one_by_one() -> Iterator[RoundBatch]:
        last: int | None = None
        known: dict[str, str] = {}
        for file, name in files:
            opened, digest = open_rounds(file, name, rules), PlaneDigest()
            for batch in opened.batches():
                digest.update(batch)
                yield batch
            if opened.rounds >= TELLING_ROUNDS:
                rounds = digest.hexdigest()
                if rounds in known:
                    earlier = "itself, given before" if known[rounds] == name else known[rounds]
                    raise InputError(f"holds the same rounds as {earlier}; no round counts twice", code="repeated-rounds", file=name)
                known[rounds] = name
            if last is not None and opened.first_round is not None and opened.first_round != last + 1:
                code = "missing-round" if opened.first_round > last + 1 else "repeated-round"
                raise InputError(f"starts with round {opened.first_round}, the file before it ended with round {last}",
                                 code=code, file=name, row=1, field="round")
            last = opened.last_round
    return rebatch(one_by_one())


def read_run(batches: Iterable[RoundBatch], on_rounds: Callable[[int], None] | None = None) -> tuple[Tally, str]:
    """Tally and digest of a run in one pass over its rounds."""
    total, digest, seen = Tally.empty(), PlaneDigest(), 0
    for batch in batches:
        total = total + tallying.tally_batch(batch)
        digest.update(batch)
        seen += batch.rounds
        if on_rounds:
            on_rounds(seen)
    return total, digest.hexdigest()


def look(declaration: Declaration, tally: Tally, calibration: Tally | None = None) -> tuple[Score,
        tuple[Diagnostic, ...]]:
    """Score and diagnostics of a tally under its declaration: for people to read; neither certifies anything."""
    return (score(tally, declaration.convention, declaration.settings, declaration.no_click),
            diagnose(tally, declaration.convention, declaration.settings, calibration))


@dataclass(frozen=True)
class PartialHash:
    """The hash of the first `rounds` rounds of a run: `bits` is the XOR so far, packed, ceil(m/8) bytes. Secret like
    the bits."""

    rounds: int
    bits: bytes


def extract(declaration: Declaration, certificate: Certificate, batches_from: Callable[[int], Iterable[RoundBatch]],
            seed: SeedReader, *, resume: PartialHash | None = None,
                    on_partial: Callable[[PartialHash], None] | None = None,
            partial_every_rounds: int = 2**25, on_progress: Callable[[int, int], None] | None = None,
            backend: str | None = None, threads: int = 1) -> bytes:
    """The certified bits: Toeplitz hash of the run's raw string a_1 … a_N b_1 … b_N, N the declared rounds, zero
    padded.

    batches_from(k) yields the run's rounds from round k on (k a multiple of BLOCK_ROUNDS), in batches of BLOCK_ROUNDS.
    The a plane and the b plane are hashed side by side, each with its own window of the seed. on_partial is called
    about
    every `partial_every_rounds` rounds with what is done so far; handing the last one back as `resume` gives the same
    bits.
    Returns ceil(m/8) bytes, LSB first, tail bits zero. Raises InputError for a seed of the wrong length.
    """
    if certificate.outcome != "certified":
        raise Defect("a refused run has no bits")
    m, n = certificate.certified_length, declaration.raw_bits
    if seed.bits != certificate.seed_bits:
        raise InputError(f"the seed has {seed.bits} bits, exactly {certificate.seed_bits} are needed",
                code="seed-length")
    done = resume.rounds if resume else 0
    if done % BLOCK_ROUNDS and done != certificate.rounds:
        raise Defect(f"a partial hash ends at round {done}, not at a block's end")
    total = bytearray(resume.bits if resume else bytes((m + 7) // 8))
    streams = {name: ToeplitzStream(n, m, seed, start=start + done, backend=backend, threads=threads)
               for name, start in (("a", 0), ("b", declaration.rounds))}
    since = 0
    for batch in (batches_from(done) if done < certificate.rounds else ()):
        for name, stream in streams.items():
            stream.push(batch.planes[name], batch.rounds)
        done += batch.rounds
        since += batch.rounds
        if on_progress:
            on_progress(done, certificate.rounds)
        if on_partial and since >= partial_every_rounds and done < certificate.rounds:
            _fold(total, streams)
            on_partial(PartialHash(done, bytes(total)))
            since = 0
    if done != certificate.rounds:
        raise Defect(f"the rounds read ({done}) are not those certified ({certificate.rounds})")
    _fold(total, streams)
    return bytes(total)


def _fold(total: bytearray, streams: dict[str, ToeplitzStream]) -> None:
    for stream in streams.values():
        value = int.from_bytes(total, "little") ^ int.from_bytes(stream.partial(), "little")
        total[:] = value.to_bytes(len(total), "little")


def backend_name(backend: str | None = None) -> str:
    """Name of the hashing backend that `extract` uses when asked for `backend`."""
    return find_backend(backend).name
