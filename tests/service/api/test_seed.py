"""Uploaded seeds: refused before seal and certificate, taken once, of exactly the right length."""

from __future__ import annotations

import hashlib
import io
import os

from extractor.seal.verify import verify_bundle
from tests.service.harness import ROUNDS, Caller, Service, document, npz, problem


def test_an_uploaded_seed_wakes_its_run(service: Service, north: Caller) -> None:
    """From the open run to the bits: when a seed is refused, what it must look like, and that it is taken once."""
    run = north.open_run(document(seed_source="upload"))
    path = f"/v1/runs/{run}/seed"
    problem(north.put(path, b"x"), 409, "run-not-sealed")
    north.put(f"/v1/runs/{run}/segments/1", npz())
    north.post(f"/v1/runs/{run}/seal", {"segments": 1, "rounds": ROUNDS})
    answer = north.put(path, b"x")
    problem(answer, 409, "certificate-pending")
    assert int(answer.headers["Retry-After"]) >= 1
    service.work()
    state = north.get(f"/v1/runs/{run}").json()
    assert (state["state"], state["stage"], state["waiting_for"]) == ("working", "seed", "seed")
    assert state["seed"]["received"] is False
    problem(north.get(path), 409, "seed-pending")
    assert service.work() == 0                          # a waiting run is nobody's work
    bits = state["seed"]["bits_needed"]
    seed = bytearray(os.urandom((bits + 7) // 8))
    seed[-1] &= (1 << (bits % 8 or 8)) - 1
    problem(north("PUT", path, data=bytes(seed)), 400, "content-digest-missing")
    problem(north.put(path, bytes(seed[:-1])), 422, "seed-length")
    problem(north.put(path, bytes(seed) + b"\0"), 422, "seed-length")
    problem(north.put(path, bytes(seed) + bytes(100)), 413, "upload-too-large")
    assert bits % 8, "the tail check needs a tail"
    problem(north.put(path, bytes(seed[:-1]) + bytes([seed[-1] | 0x80])), 422, "seed-tail")
    digest = "sha256:" + hashlib.sha256(seed).hexdigest()
    for _ in range(2):
        answer = north.put(path, bytes(seed))
        assert (answer.status_code, answer.json()) == (200, {"bits": bits, "digest": digest})
    problem(north.put(path, os.urandom(len(seed))), 409, "seed-differs")
    assert north.get(path).content == bytes(seed)
    service.work()
    assert service.state(run) == "certified"
    assert north.put(path, bytes(seed)).status_code == 200
    output = north.get(f"/v1/runs/{run}/bits")
    verdict = verify_bundle(north.get(f"/v1/runs/{run}/bundle").content, rounds=[(io.BytesIO(npz()), "rounds")],
                            seed=io.BytesIO(seed),
                            bits=output.content, bits_salt=bytes.fromhex(output.headers["Bits-Salt"]),
                            say=lambda _: None)
    assert "extraction" in dict(verdict.checks)


def test_no_seed_where_none_is_expected(service: Service, north: Caller) -> None:
    """A run whose seed the service draws takes none; a refused run needs none."""
    problem(north.put(f"/v1/runs/{north.open_run()}/seed", b"x"), 409, "seed-not-expected")
    refused = north.sealed_run(document(seed_source="upload"), files=[npz(visibility=0.72)])
    service.work()
    problem(north.put(f"/v1/runs/{refused}/seed", b"x"), 409, "seed-not-needed")
