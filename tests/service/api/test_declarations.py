"""Declarations and runs: recording, reading, repeating, listing."""

from __future__ import annotations

import threading

import pytest
import requests

from extractor.seal import canonical
from tests.service.harness import Caller, Service, document, problem


def test_a_declaration_is_recorded_in_the_ledger(service: Service, north: Caller) -> None:
    """201 with digest, time and ledger place; the entry there carries the same digest, and reading gives the same."""
    answer = north.post("/v1/declarations", document())
    assert answer.status_code == 201
    made = answer.json()
    assert made["digest"] == canonical.digest(document()) and made["declaration"] == document()
    assert answer.headers["Location"] == f"/v1/declarations/{made['id']}"
    assert north.get(f"/v1/declarations/{made['id']}").json() == made
    entry = north.get(f"/v1/ledger/entries?start={made['ledger_index']}").json()["entries"][0]["entry"]
    assert (entry["kind"], entry["subject"], entry["body"], entry["time"]) == (
        "declaration", made["id"], {"digest": made["digest"]}, made["time"])


@pytest.mark.parametrize("change, pointer, code", [
    ({"soundness": 2.0}, "/soundness", "bad-request"),
    ({"soundness": "1e-3"}, "/soundness", "bad-request"),
    ({"rounds": 0}, "/rounds", "bad-request"),
    ({"rounds": True}, "/rounds", "bad-request"),
    ({"extra": 1}, "/extra", "bad-request"),
    ({"rounds": 2**45}, "/rounds", "out-of-range"),
    ({"order": 2.5}, "/order", "out-of-range"),
    ({"convention": {"minus": [1, 2], "flip": False}}, "/convention/minus/1", "bad-request"),
    ({"table": None}, "/table", "bad-declaration"),
])
def test_a_wrong_field_is_named(north: Caller, change: dict, pointer: str, code: str) -> None:
    """422 with a JSON pointer to the field at fault, and nothing recorded."""
    size = north.get("/v1/ledger/entries").json()["size"]
    found = problem(north.post("/v1/declarations", document() | change), 422, code)
    assert any(error.get("pointer", "").startswith(pointer) for error in found["errors"]), found
    assert north.get("/v1/ledger/entries").json()["size"] == size


@pytest.mark.parametrize("body, status, code", [
    (b"{", 400, "bad-json"), (b'{"rig": 1, "rig": 2}', 400, "repeated-key"), (b'{"rounds": NaN}', 400, "bad-number"),
    (b"\xff", 400, "bad-json"), (b"[1]", 422, "bad-request"), (b"", 422, "bad-request"),
])
def test_malformed_json_is_refused(north: Caller, body: bytes, status: int, code: str) -> None:
    """JSON that readers could understand differently is refused before it means anything."""
    problem(north("POST", "/v1/declarations", data=body, headers={"Content-Type": "application/json"}), status, code)


def test_other_kinds_and_sizes_of_bodies_are_refused(north: Caller) -> None:
    """A body that is not announced as JSON is 415, one beyond the limit 413, whether its length is announced or not."""
    problem(north("POST", "/v1/declarations", data=b"{}", headers={"Content-Type": "text/plain"}), 415, "not-json")
    problem(north("POST", "/v1/declarations", data=b"{}"), 415, "not-json")
    large = b'{"purpose": "' + b"x" * 1_100_000 + b'"}'
    problem(north("POST", "/v1/declarations", data=large, headers={"Content-Type": "application/json"}), 413,
            "upload-too-large")
    pieces = (large[i:i + 65536] for i in range(0, len(large), 65536))
    problem(north("POST", "/v1/declarations", data=pieces, headers={"Content-Type": "application/json"}), 413,
            "upload-too-large")


def test_unknown_addresses_and_methods_are_problems(north: Caller) -> None:
    """404 and 405 are problem documents too."""
    problem(north.get("/v1/nothing"), 404, "not-found")
    problem(north("DELETE", "/v1/runs"), 405, "method-not-allowed")
    problem(north.get("/v1/runs?limit=0"), 422, "bad-request")
    problem(north.get("/v1/runs?state=unheard"), 422, "bad-request")


def test_an_idempotency_key_makes_one_run(service: Service, north: Caller) -> None:
    """The same request with the same key opens one run, also at the same time; another request is refused."""
    declaration = north.declare()["id"]
    answers: list[requests.Response] = []

    def ask(caller: Caller) -> None:
        answers.append(caller.post("/v1/runs", {"declaration": declaration}, headers={"Idempotency-Key": "first-run"}))

    threads = [threading.Thread(target=ask, args=(Caller(service.url, north.token),)) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    ask(north)
    assert {answer.status_code for answer in answers} == {201}
    assert len({answer.json()["id"] for answer in answers}) == 1
    other = north.declare()["id"]
    problem(north.post("/v1/runs", {"declaration": other}, headers={"Idempotency-Key": "first-run"}), 422,
            "idempotency-key-reused")
    assert service.caller("east").post("/v1/declarations", document(),
                                       headers={"Idempotency-Key": "first-run"}).status_code == 201
    # The keys made for the runs that lost the race are gone again.
    folders = [path for path in service.parts.blobs.runs.iterdir() if (path / "run.key").exists()]
    with service.parts.store.read() as reading:
        assert len(folders) == sum(reading.count_runs().values())


def test_declaring_with_a_key_records_once(north: Caller) -> None:
    """A repeated declaration with a key gives the same id and one ledger entry."""
    size = north.get("/v1/ledger/entries").json()["size"]
    first, second = (north.post("/v1/declarations", document(), headers={"Idempotency-Key": "d-key"}).json()
                     for _ in range(2))
    assert first == second
    assert north.get("/v1/ledger/entries").json()["size"] == size + 1


def test_lists_come_in_pages(service: Service) -> None:
    """Newest first; `next` and the Link header lead through all pages, each run once."""
    caller = service.caller("pager")
    declaration = caller.declare()["id"]
    made = [caller.post("/v1/runs", {"declaration": declaration}).json()["id"] for _ in range(5)]
    seen, address = [], "/v1/runs?limit=2&state=open"
    while address:
        answer = caller.get(address)
        page = answer.json()
        assert ('rel="next"' in answer.headers.get("Link", "")) == (page["next"] is not None)
        seen += [run["id"] for run in page["runs"]]
        address = page["next"]
    assert seen == made[::-1]
    assert caller.get("/v1/runs?state=certified").json()["runs"] == []
    assert len(caller.get("/v1/declarations").json()["declarations"]) == 1
