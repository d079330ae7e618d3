"""Segments: streaming, digests, repeats, races, limits, and what is left on disk."""

from __future__ import annotations

import hashlib
import http.client
import threading
import time
from urllib.parse import urlsplit

import pytest
import requests

from extractor.records.planes import digest_of
from tests.service.harness import ROUNDS, Caller, Service, csv, digest_header, document, npz, problem, rounds, split_npz


def segments(caller: Caller, run: str) -> dict:
    return caller.get(f"/v1/runs/{run}/segments").json()


def left_behind(service: Service, run: str) -> list[str]:
    """Names in the run's folder, unfinished files included."""
    return sorted(path.name for path in service.parts.blobs.folder(run).rglob("*") if path.is_file())


def test_a_segment_is_counted_and_listed(north: Caller) -> None:
    """201 tells digests, rounds and tally of the file; the list shows the same."""
    run = north.open_run()
    answer = north.put(f"/v1/runs/{run}/segments/1?name=fog-1.npz", npz())
    made = answer.json()
    assert answer.status_code == 201
    assert made["digest"] == "sha256:" + hashlib.sha256(npz()).hexdigest() and made["bytes"] == len(npz())
    assert (made["format"], made["rounds"], made["file_name"]) == ("npz", ROUNDS, "fog-1.npz")
    assert made["planes_digest"] == digest_of(rounds())
    assert sum(cell["n"] for cell in made["tally"]) == ROUNDS
    assert segments(north, run) == {"segments": [made], "rounds": ROUNDS}
    state = north.get(f"/v1/runs/{run}").json()
    assert (state["segments_received"], state["rounds_received"], state["state"]) == (1, ROUNDS, "open")


def test_the_digest_header_is_required(service: Service, north: Caller) -> None:
    """No Content-Digest, an unreadable one, or one that does not agree: 400, and nothing stays."""
    run = north.open_run()
    path = f"/v1/runs/{run}/segments/1"
    problem(north("PUT", path, data=npz()), 400, "content-digest-missing")
    for digest in ("sha-512=:AAAA:", "sha-256=abc", "sha-256=::", "nonsense",
                   f"{digest_header(b'a')}, {digest_header(b'b')}"):
        problem(north.put(path, npz(), digest=digest), 400, "content-digest-malformed")
    problem(north.put(path, npz(), digest=digest_header(b"other")), 400, "digest-mismatch")
    assert segments(north, run)["segments"] == []
    assert left_behind(service, run) == ["run.key"]
    assert north.put(path, npz(), digest=f"md5=:AAAA:, {digest_header(npz())}").status_code == 201


def test_repeating_an_upload_is_harmless(north: Caller) -> None:
    """The same digest again is 200 with the stored answer; another body under the number is 409 and changes nothing."""
    run = north.open_run()
    path = f"/v1/runs/{run}/segments/1"
    first = north.put(path, npz())
    again = north.put(path, npz())
    assert (first.status_code, again.status_code) == (201, 200) and first.json() == again.json()
    problem(north.put(path, npz(seed=8)), 409, "segment-differs")
    assert segments(north, run)["segments"] == [first.json()]


def test_bad_rounds_name_file_row_and_field(north: Caller) -> None:
    """A file that is not what the declaration says is 422 with the place at fault, and nothing stays."""
    run = north.open_run()
    path = f"/v1/runs/{run}/segments/1"
    found = problem(north.put(path, b"x,y,a,b\n0,1,0,1\n0,1,3,1\n",
                              headers={"Content-Disposition": 'attachment; filename="night.csv"'}),
                    422, "not-a-bit")
    assert [(error["file"], error["row"], error["field"]) for error in found["errors"]] == [("night.csv", 2, "a")]
    problem(north.put(path, b""), 422, "empty-file")
    problem(north.put(path, npz()[:-30]), 422, problem_code(north, path, npz()[:-30]))
    problem(north.put(path, b"\x89HDF nothing of ours"), 422, problem_code(north, path, b"\x89HDF nothing of ours"))
    assert segments(north, run)["segments"] == []


def problem_code(caller: Caller, path: str, data: bytes) -> str:
    return caller.put(path, data).json()["code"]


def test_no_more_rounds_than_declared(north: Caller) -> None:
    """The upload that would go beyond the declared number is refused, naming both numbers."""
    run = north.open_run()
    parts = split_npz(8_000)
    assert north.put(f"/v1/runs/{run}/segments/1", parts[0]).status_code == 201
    assert north.put(f"/v1/runs/{run}/segments/2", parts[1]).status_code == 201
    found = problem(north.put(f"/v1/runs/{run}/segments/3", parts[0]), 409, "too-many-rounds")
    assert "20000" in found["detail"] and "16000" in found["detail"] and "8000" in found["detail"]
    assert north.put(f"/v1/runs/{run}/segments/3", parts[2]).status_code == 201
    assert segments(north, run)["rounds"] == ROUNDS


def test_the_total_is_exact_however_uploads_race(service: Service, north: Caller) -> None:
    """Of many segments sent at once, exactly as many are taken as the declaration has room for."""
    run = north.open_run()
    parts = split_npz(4_000)
    answers = at_once(service, north, [(f"/v1/runs/{run}/segments/{k}", parts[k % 5]) for k in range(1, 9)])
    taken = [answer for answer in answers if answer.status_code == 201]
    assert len(taken) == 5
    for answer in answers:
        if answer not in taken:
            problem(answer, 409, "too-many-rounds")
    assert segments(north, run)["rounds"] == ROUNDS


def test_concurrent_uploads_of_one_segment(service: Service, north: Caller) -> None:
    """Two bodies for one number: one is stored, its repeats get the same answer, the other body gets 409."""
    run = north.open_run()
    path = f"/v1/runs/{run}/segments/1"
    answers = at_once(service, north, [(path, npz(seed=7 + k % 2)) for k in range(8)])
    won = [answer for answer in answers if answer.status_code == 201]
    assert len(won) == 1
    for answer in answers:
        if answer.status_code in (200, 201):
            assert answer.json() == won[0].json()
        else:
            problem(answer, 409, "segment-differs")
    assert left_behind(service, run) == ["1.planes", "run.key"]
    # What lies on disk is what was answered.
    assert north.post(f"/v1/runs/{run}/seal", {"segments": 1, "rounds": ROUNDS}).status_code == 202
    service.work()
    assert service.state(run) == "certified"


def at_once(service: Service, caller: Caller, uploads: list[tuple[str, bytes]]) -> list[requests.Response]:
    answers: list[requests.Response] = []
    barrier = threading.Barrier(len(uploads))

    def send(path: str, data: bytes) -> None:
        mine = Caller(service.url, caller.token)
        barrier.wait()
        answers.append(mine.put(path, data))

    threads = [threading.Thread(target=send, args=upload) for upload in uploads]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    return answers


def test_limits_of_numbers_and_sizes(start) -> None:
    """Segment numbers outside 1..limit are 422, bodies beyond the limit 413, announced or not."""
    service = start(segments_per_run=10, segment_bytes=4096)
    caller = service.caller()
    run = caller.open_run()
    for number in (0, 11, -1):
        problem(caller.put(f"/v1/runs/{run}/segments/{number}", npz()), 422, "out-of-range")
    problem(caller.put(f"/v1/runs/{run}/segments/one", npz()), 422, "bad-request")
    path = f"/v1/runs/{run}/segments/1"
    problem(caller.put(path, npz()), 413, "upload-too-large")
    answer = caller("PUT", path, data=iter([npz()[:3000], npz()[3000:]]),
                    headers={"Content-Digest": digest_header(npz())})
    problem(answer, 413, "upload-too-large")
    assert left_behind(service, run) == ["run.key"]


def test_a_full_disk_is_507(start) -> None:
    """Where the upload would eat into the room that must stay free, it is refused with Retry-After."""
    service = start()
    caller = service.caller()
    run = caller.open_run()
    service.parts.blobs._floor = 2**62
    answer = caller.put(f"/v1/runs/{run}/segments/1", npz())
    problem(answer, 507, "disk-full")
    assert int(answer.headers["Retry-After"]) >= 1
    problem(caller.get("/readyz"), 507, "disk-full")
    service.parts.blobs._floor = 0
    assert caller.put(f"/v1/runs/{run}/segments/1", npz()).status_code == 201


def raw_upload(service: Service, caller: Caller, run: str, length: int) -> http.client.HTTPConnection:
    """An upload whose headers announce `length` bytes and whose body is still to be sent."""
    line = http.client.HTTPConnection(urlsplit(service.url).netloc, timeout=20)
    line.putrequest("PUT", f"/v1/runs/{run}/segments/1")
    for name, value in (("Authorization", f"Bearer {caller.token}"), ("Content-Digest", digest_header(npz())),
                        ("Content-Length", str(length))):
        line.putheader(name, value)
    line.endheaders()
    return line


def test_a_stalled_upload_is_given_up(start) -> None:
    """When no further piece comes in time, the answer is 408 and nothing stays."""
    service = start(upload_chunk_timeout_s=0.2)
    caller = service.caller()
    run = caller.open_run()
    line = raw_upload(service, caller, run, len(npz()))
    line.send(npz()[:1000])
    answer = line.getresponse()
    assert answer.status == 408 and b"upload-too-slow" in answer.read()
    assert left_behind(service, run) == ["run.key"]


def test_a_cut_upload_leaves_nothing(service: Service, north: Caller) -> None:
    """A line that breaks in the middle leaves no file and no segment; sending again works."""
    run = north.open_run()
    line = raw_upload(service, north, run, len(npz()))
    line.send(npz()[:5000])
    line.close()
    deadline = time.monotonic() + 10
    while left_behind(service, run) != ["run.key"] or service.app.state.uploads.taken:
        assert time.monotonic() < deadline
        time.sleep(0.01)
    assert north.put(f"/v1/runs/{run}/segments/1", npz()).status_code == 201


def test_only_so_many_uploads_at_once(start) -> None:
    """Beyond the limit an upload is asked to come back; when a place is free again it is taken."""
    service = start(uploads_at_once=1)
    caller = service.caller()
    run, other = caller.open_run(), caller.open_run()
    line = raw_upload(service, caller, run, len(npz()))
    line.send(npz()[:5000])
    while not service.app.state.uploads.taken:
        time.sleep(0.005)
    answer = caller.put(f"/v1/runs/{other}/segments/1", npz())
    problem(answer, 503, "too-many-uploads")
    assert int(answer.headers["Retry-After"]) >= 1
    line.send(npz()[5000:])
    assert line.getresponse().status == 201
    assert caller.put(f"/v1/runs/{other}/segments/1", npz()).status_code == 201


def test_rounds_never_lie_in_the_clear(service: Service, north: Caller) -> None:
    """Neither the file nor its planes appear anywhere in the data folder, not even while being received."""
    run = north.open_run()
    data = npz(seed=21)
    line = raw_upload(service, north, run, len(data))
    line.send(data[:9000])
    needles = [data[3000:3064], rounds(seed=21)[0].planes["a"][:64].tobytes()]
    assert not found_on_disk(service, needles)
    line.close()
    assert north.put(f"/v1/runs/{run}/segments/1", data).status_code == 201
    assert not found_on_disk(service, needles)


def found_on_disk(service: Service, needles: list[bytes]) -> bool:
    texts = [path.read_bytes() for path in service.settings.data.rglob("*") if path.is_file()]
    return any(needle in text for needle in needles for text in texts)


@pytest.mark.parametrize("first, code", [(4_001, None), (4_002, "missing-round"), (4_000, "repeated-round")])
def test_round_numbers_run_on_from_segment_to_segment(north: Caller, first: int, code: str | None) -> None:
    """Where segments carry round numbers, a gap or an overlap between them stops the seal and names the segment."""
    run = north.open_run(document(rounds=8_000))
    assert north.put(f"/v1/runs/{run}/segments/1?name=one.csv", csv(4_000, 1, 1)).json()["last_round"] == 4_000
    assert north.put(f"/v1/runs/{run}/segments/2?name=two.csv", csv(4_000, 2, first)).json()["first_round"] == first
    answer = north.post(f"/v1/runs/{run}/seal", {"segments": 2, "rounds": 8_000})
    if code is None:
        assert answer.status_code == 202
    else:
        found = problem(answer, 409, code)
        assert "segment 2" in found["detail"] and found["errors"][0]["file"] == "two.csv"


def test_sealing_needs_what_arrived(north: Caller) -> None:
    """Missing segments are listed, other numbers refused; the right ones seal, repeats are harmless, others are not."""
    run = north.open_run()
    parts = split_npz(7_000)
    seal = f"/v1/runs/{run}/seal"
    found = problem(north.post(seal, {"segments": 2, "rounds": 1}), 409, "segments-missing")
    assert [error["field"] for error in found["errors"]] == ["1", "2"]
    for number in (1, 3):
        north.put(f"/v1/runs/{run}/segments/{number}", parts[number - 1])
    found = problem(north.post(seal, {"segments": 3, "rounds": 13_000}), 409, "segments-missing")
    assert [error["field"] for error in found["errors"]] == ["2"]
    problem(north.post(seal, {"segments": 1, "rounds": 7_000}), 409, "segments-differ")
    north.put(f"/v1/runs/{run}/segments/2", parts[1])
    assert "20000" in problem(north.post(seal, {"segments": 3, "rounds": 19_999}), 409, "rounds-differ")["detail"]
    problem(north.post(seal, {"segments": 0, "rounds": 0}), 422, "bad-request")
    first = north.post(seal, {"segments": 3, "rounds": ROUNDS})
    assert first.status_code == 202 and int(first.headers["Retry-After"]) >= 1
    assert first.headers["Location"] == f"/v1/runs/{run}"
    assert first.json()["state"] == "sealed" and first.json()["sealed"]["rounds"] == ROUNDS
    assert north.post(seal, {"segments": 3, "rounds": ROUNDS}).json() == first.json()
    problem(north.post(seal, {"segments": 3, "rounds": 1}), 409, "seal-differs")
    problem(north.put(f"/v1/runs/{run}/segments/4", parts[0]), 409, "run-sealed")
    problem(north.put(f"/v1/runs/{run}/segments/1", parts[1]), 409, "run-sealed")
    assert north.put(f"/v1/runs/{run}/segments/1", parts[0]).status_code == 200
