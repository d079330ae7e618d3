"""Server-sent events: every change once, in order, going on from Last-Event-ID, ending with the run."""

from __future__ import annotations

import threading

import pytest

from service.client import Client
from service.transport import parse_events
from tests.service.harness import ROUNDS, Caller, Service, npz, problem


def stream(caller: Caller, run: str, last: str | None = None) -> list[tuple[str | None, dict]]:
    headers = {"Last-Event-ID": last} if last else {}
    answer = caller.get(f"/v1/runs/{run}/events", headers=headers, stream=True)
    assert answer.status_code == 200 and answer.headers["Content-Type"].startswith("text/event-stream")
    return list(parse_events(answer.iter_content(None)))


def test_events_tell_every_step_and_end(service: Service, north: Caller) -> None:
    """A watcher sees each state and stage in order with ids 1, 2, ... and the stream ends at the final state."""
    run = north.sealed_run()
    threading.Timer(0.1, service.work).start()
    seen = stream(north, run)
    steps = [(state["state"], state["stage"]) for _, state in seen]
    distinct = [step for place, step in enumerate(steps) if step not in steps[:place]]
    stages = [("working", stage) for stage in ("tally", "certify", "seed", "hash", "publish")]
    assert distinct == [("open", None), ("sealed", None), *stages, ("certified", None)]
    assert seen[-1][1] == north.get(f"/v1/runs/{run}").json()


def test_a_watcher_goes_on_where_it_stopped(service: Service, north: Caller) -> None:
    """With Last-Event-ID only later events come; after the last one the stream tells the present state and ends."""
    run = north.sealed_run()
    service.work()
    everything = stream(north, run)
    assert [number for number, _ in everything] == [str(k) for k in range(1, len(everything) + 1)]
    for place in range(1, len(everything)):
        assert stream(north, run, str(place)) == everything[place:]
    assert [state for _, state in stream(north, run, str(len(everything)))] == [everything[-1][1]]
    problem(north.get(f"/v1/runs/{run}/events", headers={"Last-Event-ID": "x"}), 422, "bad-request")


def test_arrivals_are_told_without_an_id(service: Service, north: Caller) -> None:
    """What is no change of state (a segment that arrived) reaches a watcher too, but is not numbered."""
    run = north.open_run()
    answer = north.get(f"/v1/runs/{run}/events", stream=True)
    events = parse_events(answer.iter_content(None))
    assert next(events)[1]["segments_received"] == 0
    Caller(service.url, north.token).put(f"/v1/runs/{run}/segments/1", npz())
    number, state = next(events)
    assert state["rounds_received"] == ROUNDS and number == "1"         # a client keeps the id it had
    answer.close()


def test_silence_is_filled(start) -> None:
    """A quiet run sends comments, so that a broken line is noticed."""
    service = start(event_keepalive_s=1.0)
    caller = service.caller()
    run = caller.open_run()
    answer = caller.get(f"/v1/runs/{run}/events", stream=True)
    text = b""
    for piece in answer.iter_content(None):
        text += piece
        if b": still here" in text:
            break
    answer.close()


def test_streams_end_when_the_service_stops(start) -> None:
    """A watcher does not keep the service from stopping."""
    service = start()
    caller = service.caller()
    run = caller.open_run()
    answer = caller.get(f"/v1/runs/{run}/events", stream=True)
    assert next(answer.iter_content(None))
    service.close()
    assert not service._thread.is_alive()


@pytest.mark.parametrize("work_first", [True, False])
def test_the_client_watches(service: Service, north: Caller, work_first: bool) -> None:
    """The project's own client follows a run to its end."""
    run = north.sealed_run()
    if work_first:
        service.work()
    else:
        threading.Timer(0.05, service.work).start()
    states = [state["state"] for state in Client(service.url, north.token).watch(run)]
    assert states[-1] == "certified"
