"""Ledger, planning, operation and the description of the interface."""

from __future__ import annotations

import base64

import pytest

from extractor.documents import tally_counts
from extractor.seal import checkpoint, merkle, note
from extractor.seal.canonical import canonical_bytes
from extractor.tally import tally_batches
from service.errors import StorageFailed
from tests.service.harness import Caller, Service, document, problem, rounds


def opened(caller: Caller) -> checkpoint.Checkpoint:
    verifier = note.Verifier.from_text(caller.get("/v1/ledger/key").text.strip())
    return checkpoint.parse(note.open(caller.get("/v1/ledger/checkpoint").text, [verifier]))


def test_the_ledger_proves_itself(service: Service) -> None:
    """Entries, inclusion and consistency proofs from the API lead to the signed checkpoints, for an auditor alone."""
    writer, auditor = service.caller(), service.caller("auditor", ["audit"])
    writer.declare()
    old = opened(auditor)
    for k in range(4):
        writer.declare(document(purpose=f"number {k}"))
    new = opened(auditor)
    page = auditor.get("/v1/ledger/entries").json()
    assert page["size"] == new.size == old.size + 4 and len(page["entries"]) == new.size
    for one in page["entries"]:
        leaf = merkle.leaf_hash(canonical_bytes(one["entry"]))
        assert base64.b64encode(leaf).decode() == one["leaf_hash"]
        answer = auditor.get(f"/v1/ledger/proof?index={one['index']}&size={new.size}").json()
        merkle.check_inclusion([base64.b64decode(text) for text in answer["hashes"]], leaf, one["index"], new.size,
                               new.root)
    answer = auditor.get(f"/v1/ledger/proof?old={old.size}&size={new.size}").json()
    merkle.check_consistency([base64.b64decode(text) for text in answer["hashes"]], old.size, old.root, new.size,
                             new.root)
    assert len(auditor.get("/v1/ledger/entries?start=1&end=3").json()["entries"]) == 2
    for query in ("entries?start=99999", "entries?start=3&end=2", "proof?index=99999", "proof?old=0"):
        problem(auditor.get(f"/v1/ledger/{query}"), 422, "out-of-range")
    for query in ("proof", "proof?index=0&old=1"):
        problem(auditor.get(f"/v1/ledger/{query}"), 422, "bad-usage")
    problem(auditor.get("/v1/ledger/entries?start=-1"), 422, "bad-request")


def test_an_empty_ledger_answers(start) -> None:
    """Before the first entry there is a checkpoint of size 0 and an empty list."""
    caller = start().caller()
    assert opened(caller).size == 0
    assert caller.get("/v1/ledger/entries").json() == {"size": 0, "start": 0, "entries": []}


def test_planning(north: Caller) -> None:
    """Rounds give lengths per method, a length gives rounds, a calibration gives the score."""
    answer = north.post("/v1/plan", {"rounds": 10**8, "score": 0.8, "soundness": 1e-10}).json()
    assert {plan["method"] for plan in answer["plans"]} == {"factor-table", "factor-closed", "eat-2018", "eat-2019"}
    assert all(plan["certified_length"] > 0 and plan["seed_bits"] > 0 for plan in answer["plans"])
    answer = north.post("/v1/plan", {"length": 1000, "score": 0.85, "soundness": 1e-3,
                                     "method": "factor-closed"}).json()
    assert 1000 < answer["plans"][0]["rounds"] < 20_000 and answer["plans"][0]["certified_length"] >= 1000
    counts = tally_counts(tally_batches(rounds()))
    answer = north.post("/v1/plan", {"rounds": 10**6, "calibration": counts, "soundness": 1e-3,
                                     "method": "factor-closed"}).json()
    assert abs(answer["score"] - 0.853) < 0.01


def test_planning_a_modelled_rig(north: Caller) -> None:
    """A rig model is an expectation like a score; the plan of factor-table carries its order, rate, validity bound
    and table."""
    answer = north.post("/v1/plan", {"rounds": 10**6, "rig": {"visibility": 0.93}, "soundness": 1e-6, "order": 1.01,
                                     "method": "factor-table"}).json()
    (plan,) = answer["plans"]
    assert plan["order"] == 1.01 and 1.04 < plan["rate"] < 1.06 and plan["validity_bound"] <= 1
    assert plan["certified_length"] > 10**6 and len(plan["table"]["test"]) == 16
    problem(north.post("/v1/plan", {"rounds": 10**6, "rig": {}, "score": 0.8, "soundness": 1e-6}), 422, "bad-usage")


@pytest.mark.parametrize("change, code", [
    ({"score": 0.7}, "score-out-of-range"), ({"rounds": None}, "bad-usage"), ({"length": 5}, "bad-usage"),
    ({"score": None}, "bad-usage"),
    ({"soundness": 0}, "bad-request"), ({"method": "hope"}, "bad-request"),
    ({"settings": {"distribution": [0.5, 0.5, 0.5, 0.5]}}, "bad-settings")])
def test_planning_refuses_nonsense(north: Caller, change: dict, code: str) -> None:
    """What cannot be planned is 422 and says why."""
    problem(north.post("/v1/plan", {"rounds": 10**6, "score": 0.8, "soundness": 1e-3} | change), 422, code)


def test_operation(service: Service) -> None:
    """Health answers anybody; metrics are OpenMetrics text for auditors."""
    assert Caller(service.url, None).get("/livez").json() == {"status": "alive"}
    assert Caller(service.url, None).get("/readyz").json() == {"status": "ready"}
    text = service.caller("auditor", ["audit"]).get("/metrics").text
    assert text.endswith("# EOF\n") and 'bellassay_runs{state="open"}' in text and "bellassay_answers_total" in text


def test_a_failed_disk_closes_the_service(start) -> None:
    """After a failed fsync nothing is promised any more: 503 for everything, the process is told to stop."""
    service = start()
    caller = service.caller()
    run = caller.open_run()
    called = []
    service.app.state.on_failure = lambda: called.append(True)

    def failing(*_: object) -> None:
        raise StorageFailed("fsync of the disk failed", code="fsync-failed")

    service.parts.store.check = failing             # what the database does when its disk fails
    problem(caller.get("/readyz"), 503, "fsync-failed")
    problem(caller.get(f"/v1/runs/{run}"), 503, "storage-failed")
    problem(caller.get("/livez"), 503, "storage-failed")
    assert called == [True]


def test_the_description_is_complete(service: Service) -> None:
    """Every operation has an id, a summary, described answers and problem documents; bodies have examples."""
    openapi = Caller(service.url, None).get("/openapi.json").json()
    ids = set()
    for path, operations in openapi["paths"].items():
        for method, operation in operations.items():
            ids.add(operation["operationId"])
            assert operation["summary"], path
            success = [answer for status, answer in operation["responses"].items() if status.startswith("2")]
            assert success and all(answer.get("content") or answer["description"] for answer in success), path
            for status, answer in operation["responses"].items():
                if status.startswith(("4", "5", "default")):
                    assert answer["content"] == {
                        "application/problem+json": {"schema": {"$ref": "#/components/schemas/Problem"}}}
            assert path in ("/livez", "/readyz") or operation["security"] and "401" in operation["responses"], path
            if method == "put":
                assert "application/octet-stream" in operation["requestBody"]["content"]
    assert len(ids) == sum(map(len, openapi["paths"].values()))
    for name in ("DeclarationDocument", "NewRun", "SealRequest", "CollectionRequest", "PlanRequest", "Run", "Problem"):
        assert openapi["components"]["schemas"][name]["examples"], name
    references = {part for part in str(openapi).split("'") if part.startswith("#/components/schemas/")}
    assert {one.rpartition("/")[2] for one in references} <= set(openapi["components"]["schemas"])


def test_the_documentation_page_stands_alone(service: Service) -> None:
    """/docs lists every operation and loads nothing from anywhere."""
    page = Caller(service.url, None).get("/docs")
    openapi = service.app.openapi()
    assert all(f'id="{one["operationId"]}"' in page.text for path in openapi["paths"].values() for one in path.values())
    assert "<script" not in page.text and "http://" not in page.text and "https://" not in page.text
    assert "default-src 'none'" in page.headers["Content-Security-Policy"]


def test_example_declaration_is_one(north: Caller) -> None:
    """The example in the description can be recorded as it is."""
    example = north.get("/openapi.json").json()["components"]["schemas"]["DeclarationDocument"]["examples"][0]
    answer = north.post("/v1/declarations", example)
    assert answer.status_code == 201, answer.text
    assert document()["format"] == example["format"]
