"""Who may do what: tokens, scopes, and objects of other owners."""

from __future__ import annotations

import re

import pytest

from service.clock import now_s, now_text
from tests.service.harness import Caller, Service, make_token, npz, problem

BODIES = {
    "POST /v1/declarations": {}, "POST /v1/runs": {"declaration": "d0"}, 
    "POST /v1/plan": {"rounds": 1000, "score": 0.8, "soundness": 1e-3},
    "POST /v1/runs/{run}/seal": {"segments": 1, "rounds": 1},
    "POST /v1/runs/{run}/collection": {"digest": "sha256:" + "0" * 64},
}
SCOPES = {
    "POST /v1/declarations": ("submit",), "POST /v1/runs": ("submit",),
    "PUT /v1/runs/{run}/segments/{number}": ("submit",),
    "POST /v1/runs/{run}/seal": ("submit",), "PUT /v1/runs/{run}/seed": ("submit",),
    "GET /v1/runs/{run}/seed": ("audit", "collect"),
    "GET /v1/runs/{run}/certificate": ("audit", "collect"), "GET /v1/runs/{run}/report": ("audit", "collect"),
    "GET /v1/runs/{run}/bundle": ("audit", "collect"), "GET /v1/runs/{run}/bits": ("collect",),
    "POST /v1/runs/{run}/collection": ("collect",), "GET /metrics": ("audit",),
}
OPEN = ("GET /livez", "GET /readyz")


def operations(service: Service) -> list[str]:
    return [f"{method.upper()} {path}" for path, methods in service.app.openapi()["paths"].items()
            for method in methods]


def call(caller: Caller, operation: str, run: str = "r0", declaration: str = "d0"):
    method, path = operation.split(" ")
    path = path.replace("{run}", run).replace("{number}", "1").replace("{declaration}", declaration)
    if method == "PUT":
        return caller.put(path, npz())
    return caller(method, path, **({"json": BODIES[operation]} if operation in BODIES else {}))


def test_every_route_but_health_needs_a_token(service: Service) -> None:
    """Without a token, and with a wrong one, every route answers 401 with a challenge; health is open."""
    for operation in operations(service):
        for caller, code in ((Caller(service.url, None), "token-missing"),
                             (Caller(service.url, "bellassay_0_1"), "token-invalid")):
            answer = call(caller, operation)
            if operation in OPEN:
                assert answer.status_code == 200
            else:
                problem(answer, 401, code)
                assert answer.headers["WWW-Authenticate"].startswith("Bearer")


def test_revoked_and_expired_tokens_are_refused(service: Service) -> None:
    """A token ends at its expiry and at once when revoked, and the answer does not say which."""
    old = make_token(service.parts, expires_s=now_s() - 1)
    problem(Caller(service.url, old).get("/v1/runs"), 401, "token-invalid")
    caller = service.caller()
    assert caller.get("/v1/runs").status_code == 200
    with service.parts.store.write() as transaction:
        transaction.revoke_token(caller.token.split("_")[1], now_text())
    problem(caller.get("/v1/runs"), 401, "token-invalid")


@pytest.mark.parametrize("scope", ["submit", "collect", "audit"])
def test_scopes_open_exactly_their_routes(service: Service, scope: str) -> None:
    """A token with one scope gets 403 where another one is needed and passes the door elsewhere."""
    caller = service.caller("scoped", [scope])
    for operation in operations(service):
        answer = call(caller, operation)
        if operation in SCOPES and scope not in SCOPES[operation]:
            problem(answer, 403, "scope-missing")
        else:
            assert answer.status_code != 403, operation


def test_objects_of_others_do_not_exist(service: Service, north: Caller) -> None:
    """Every route about a run or declaration answers another owner like for an id that was never given: 404."""
    declaration = north.declare()["id"]
    run = north.post("/v1/runs", {"declaration": declaration}).json()["id"]
    stranger = service.caller("south")
    tried = 0
    for operation in operations(service):
        if re.search(r"{(run|declaration)}", operation):
            answers = [call(stranger, operation, run, declaration),
                       call(stranger, operation, "r" + "0" * 16, "d" + "0" * 16)]
            bodies = [problem(answer, 404, "not-found") for answer in answers]
            assert bodies[0] == bodies[1]
            tried += 1
    assert tried >= 11
    problem(stranger.post("/v1/runs", {"declaration": declaration}), 404, "not-found")
    assert run not in stranger.get("/v1/runs").text
    assert run not in stranger.get("/v1/runs?everybody=true").text


def test_an_admin_sees_everything(service: Service, north: Caller) -> None:
    """The scope admin opens the runs of every owner."""
    run = north.open_run()
    admin = service.caller("operator", ["admin"])
    assert admin.get(f"/v1/runs/{run}").json()["id"] == run
    assert run in admin.get("/v1/runs?everybody=true").text
    assert run not in admin.get("/v1/runs").text
    assert "bellassay_runs" in admin.get("/metrics").text


def test_use_of_a_token_is_noted(service: Service) -> None:
    """The owner can see when a token was last used."""
    caller = service.caller("noted")
    caller.get("/v1/runs")
    with service.parts.store.read() as reading:
        assert reading.get_token(caller.token.split("_")[1]).last_used is not None
