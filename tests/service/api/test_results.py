"""What comes out: certificate, report, bundle, bits with ranges, the seed, and the one collection."""

from __future__ import annotations

import base64
import hashlib
import io
import json
import threading
from concurrent.futures import ThreadPoolExecutor

import pytest

from extractor.seal import canonical
from extractor.seal.verify import verify_bundle
from service.collection import erase, finish_erasures
from service.jobs import states
from tests.service.harness import ROUNDS, Caller, Service, digest_header, document, npz, problem, split_npz

WHAT = ("certificate", "report", "bundle", "bits", "seed")


@pytest.fixture(scope="module")
def run(service: Service, north: Caller) -> str:
    """A certified run that is not collected."""
    made = north.sealed_run(files=split_npz(7_000))
    service.work()
    return made


def test_nothing_is_there_before_its_time(service: Service, north: Caller) -> None:
    """While a run is open or sealed its results are 409 with a code that says they are pending."""
    made = north.open_run()
    codes = {"bits": "not-certified", "seed": "seed-pending"}
    for what in WHAT:
        answer = north.get(f"/v1/runs/{made}/{what}")
        problem(answer, 409, codes.get(what, f"{what}-pending"))
    problem(north.post(f"/v1/runs/{made}/collection", {"digest": "sha256:" + "0" * 64}), 409, "not-certified")
    north.put(f"/v1/runs/{made}/segments/1", npz())
    north.post(f"/v1/runs/{made}/seal", {"segments": 1, "rounds": ROUNDS})
    assert "Retry-After" in north.get(f"/v1/runs/{made}/bits").headers


def test_everything_is_verifiable_offline(north: Caller, run: str) -> None:
    """With bundle, rounds, seed, bits and salt an auditor can recompute everything; nothing stays unchecked."""
    bits = north.get(f"/v1/runs/{run}/bits")
    seed, bundle = north.get(f"/v1/runs/{run}/seed").content, north.get(f"/v1/runs/{run}/bundle")
    assert bundle.headers["Content-Type"] == "application/zip"
    verdict = verify_bundle(
        bundle.content, rounds=[(io.BytesIO(data), f"segment {k}") for k, data in enumerate(split_npz(7_000), 1)],
        seed=io.BytesIO(seed), bits=bits.content, bits_salt=bytes.fromhex(bits.headers["Bits-Salt"]),
        trusted_key=north.get("/v1/ledger/key").text, say=lambda _: None)
    assert verdict.ok and not verdict.unchecked and verdict.run == run
    state = north.get(f"/v1/runs/{run}").json()
    assert state["certified_length"] == verdict.certified_length
    assert len(bits.content) == (verdict.certified_length + 7) // 8
    assert state["seed"]["bits_needed"] == 2 * ROUNDS + verdict.certified_length - 1


def test_documents_are_canonical_and_digested(north: Caller, run: str) -> None:
    """Certificate and report are RFC 8785 bytes under a strong ETag and a Repr-Digest that agree."""
    for what in ("certificate", "report"):
        answer = north.get(f"/v1/runs/{run}/{what}")
        assert answer.headers["Content-Type"] == "application/json"
        assert canonical.canonical_bytes(json.loads(answer.content)) == answer.content
        assert answer.headers["Repr-Digest"] == digest_header(answer.content)
        assert answer.headers["ETag"] == f'"sha256:{hashlib.sha256(answer.content).hexdigest()}"'


@pytest.mark.parametrize("accept, status", [
    ("application/json", 200), ("*/*", 200), ("application/*;q=0.5, text/html", 200), ("text/html", 406),
    ("application/json;q=0, */*", 406), ("application/pdf", 406)])
def test_the_report_is_negotiated(north: Caller, run: str, accept: str, status: int) -> None:
    """A form that does not exist is 406."""
    answer = north.get(f"/v1/runs/{run}/report", headers={"Accept": accept})
    assert answer.status_code == status
    if status == 406:
        problem(answer, 406, "not-acceptable")


def test_bits_in_ranges(north: Caller, run: str) -> None:
    """Ranges put together are the whole; wrong ones are 416; If-Range of another state gives everything."""
    path = f"/v1/runs/{run}/bits"
    whole = north.get(path)
    data, size = whole.content, len(whole.content)
    assert whole.headers["Repr-Digest"] == digest_header(data) and whole.headers["Accept-Ranges"] == "bytes"
    assert whole.headers["Cache-Control"] == "no-store" and len(bytes.fromhex(whole.headers["Bits-Salt"])) == 32
    first, rest = (north.get(path, headers={"Range": value}) for value in ("bytes=0-99", "bytes=100-"))
    assert (first.status_code, rest.status_code) == (206, 206) and first.content + rest.content == data
    assert first.headers["Content-Range"] == f"bytes 0-99/{size}"
    assert north.get(path, headers={"Range": "bytes=-7"}).content == data[-7:]
    assert north.get(path, headers={"Range": f"bytes=5-{size * 9}"}).content == data[5:]
    for value in (f"bytes={size}-", "bytes=-0"):
        answer = north.get(path, headers={"Range": value})
        problem(answer, 416, "range-not-satisfiable")
        assert answer.headers["Content-Range"] == f"bytes */{size}"
    for value in ("bytes=9-3", "bytes=0-1,4-5", "rounds=1-2", "bytes=-"):
        assert north.get(path, headers={"Range": value}).status_code == 200
    assert north.get(path, headers={"Range": "bytes=0-9", "If-Range": '"old"'}).content == data
    assert north.get(path, headers={"Range": "bytes=0-9", "If-Range": whole.headers["ETag"]}).status_code == 206


def test_bits_and_secrets_are_nowhere_in_the_clear(service: Service, north: Caller, run: str) -> None:
    """Neither bits, salt, seed nor their digests (of the bits) appear in files, events, report, ledger or run."""
    answer = north.get(f"/v1/runs/{run}/bits")
    bits, salt = answer.content, bytes.fromhex(answer.headers["Bits-Salt"])
    digest = hashlib.sha256(bits)
    seed = north.get(f"/v1/runs/{run}/seed").content
    needles = [bits[:32], bits[-32:], salt, salt.hex().encode(), digest.digest(), digest.hexdigest().encode(),
               base64.b64encode(digest.digest()), seed[:32]]
    for path in service.settings.data.rglob("*"):
        if path.is_file():
            text = path.read_bytes()
            assert not any(needle in text for needle in needles), path


def test_one_of_twenty_collectors_wins(service: Service, north: Caller) -> None:
    """Twenty confirmations at once: one 200, nineteen 409, one ledger entry, and everything is gone for everybody."""
    run = north.sealed_run()
    service.work()
    bits = north.get(f"/v1/runs/{run}/bits")
    right = "sha256:" + hashlib.sha256(bits.content).hexdigest()
    problem(north.post(f"/v1/runs/{run}/collection", {"digest": "sha256:" + "0" * 64}), 409, "digest-mismatch")
    problem(north.post(f"/v1/runs/{run}/collection", {"digest": right.upper()}), 422, "bad-request")
    answers = []
    barrier = threading.Barrier(20)

    def confirm() -> None:
        caller = Caller(service.url, north.token)
        barrier.wait()
        answers.append(caller.post(f"/v1/runs/{run}/collection", {"digest": right}))

    threads = [threading.Thread(target=confirm) for _ in range(20)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    won = [answer for answer in answers if answer.status_code == 200]
    assert len(won) == 1
    for answer in answers:
        if answer is not won[0]:
            problem(answer, 409, "already-collected")
    entries = [one["entry"] for one in north.get("/v1/ledger/entries").json()["entries"]]
    about = [entry["kind"] for entry in entries if entry["subject"] == run]
    assert about == ["seal", "certificate", "seed", "result", "collection", "erasure"]
    entry = north.get(f"/v1/ledger/entries?start={won[0].json()['ledger_index']}").json()["entries"][0]["entry"]
    salt = bytes.fromhex(bits.headers["Bits-Salt"])
    assert entry["body"] == {"bits_commitment": canonical.commitment(salt, bits.content)}
    assert_erased(service, north, run)
    verdict = verify_bundle(north.get(f"/v1/runs/{run}/bundle").content, bits=bits.content, bits_salt=salt,
                            say=lambda _: None)
    assert verdict.ok


def assert_erased(service: Service, caller: Caller, run: str) -> None:
    state = caller.get(f"/v1/runs/{run}").json()
    assert state["state"] == "erased" and state["collected"] and state["erased"]
    for what in ("bits", "seed"):
        problem(caller.get(f"/v1/runs/{run}/{what}"), 410, "bits-collected")
    for what in ("certificate", "report", "bundle"):
        assert caller.get(f"/v1/runs/{run}/{what}").status_code == 200
    folder = service.parts.blobs.folder(run)
    assert sorted(path.name for path in folder.iterdir()) == ["bundle.zip", "report.json"]


def test_an_interrupted_erasure_is_finished(service: Service, north: Caller) -> None:
    """A process that ended between the confirmation and the erasing of the key: the next start goes on from there."""
    run = north.sealed_run()
    service.work()
    with service.parts.store.write() as transaction:
        row = transaction.get_run(run)
        assert states.move(transaction, row, "collected", {"collected_time": row.finished_time})
        service.parts.ledger.append(transaction, "collection", run, {"bits_commitment": row.bits_commitment},
                                    row.finished_time)
    problem(north.get(f"/v1/runs/{run}/bits"), 410, "bits-collected")
    assert service.parts.keys.exists(run)
    assert finish_erasures(service.parts) == 1
    assert_erased(service, north, run)
    assert finish_erasures(service.parts) == 0


def test_many_may_finish_an_erasure(service: Service, north: Caller) -> None:
    """The request that collected and idle workers may erase at the same time: one ledger entry, nothing left."""
    run = north.sealed_run(files=split_npz(4_000))
    service.work()
    with service.parts.store.write() as transaction:
        row = transaction.get_run(run)
        states.move(transaction, row, "collected", {"collected_time": row.finished_time})
        service.parts.ledger.append(transaction, "collection", run, {"bits_commitment": row.bits_commitment},
                                    row.finished_time)
    with ThreadPoolExecutor(6) as threads:
        assert [*threads.map(lambda _: erase(service.parts, run), range(6))] == [None] * 6
    assert_erased(service, north, run)
    entries = [one["entry"] for one in north.get("/v1/ledger/entries").json()["entries"]]
    assert [entry["kind"] for entry in entries if entry["subject"] == run][-2:] == ["collection", "erasure"]


def test_a_refused_run_has_a_report_and_no_bits(service: Service, north: Caller) -> None:
    """Rounds that earn too little end in a refusal with its reason, which is logged and reported like a success."""
    run = north.sealed_run(files=[npz(visibility=0.72)])
    service.work()
    state = north.get(f"/v1/runs/{run}").json()
    assert state["state"] == "refused" and state["message"] and state["certified_length"] == 0
    certificate = north.get(f"/v1/runs/{run}/certificate").json()
    assert certificate["outcome"] == "refused" and certificate["reason"] == state["message"]
    assert verify_bundle(north.get(f"/v1/runs/{run}/bundle").content, say=lambda _: None).outcome == "refused"
    problem(north.get(f"/v1/runs/{run}/bits"), 409, "no-bits")
    problem(north.get(f"/v1/runs/{run}/seed"), 409, "no-seed")
    problem(north.post(f"/v1/runs/{run}/collection", {"digest": "sha256:" + "0" * 64}), 409, "no-bits")
    kinds = [one["entry"]["kind"] for one in north.get("/v1/ledger/entries").json()["entries"]
             if one["entry"]["subject"] == run]
    assert kinds == ["seal", "refusal", "result"]


def test_the_report_of_a_public_run_lists_no_files(service: Service, north: Caller) -> None:
    """What a public report reveals was paid for; it holds no digests of single segments and still verifies."""
    run = north.sealed_run(document(disclosure="public", score=0.85), files=split_npz(7_000))
    service.work()
    assert north.get(f"/v1/runs/{run}/report").json()["records"]["files"] is None
    assert verify_bundle(north.get(f"/v1/runs/{run}/bundle").content, say=lambda _: None).ok
