"""The commands against a real service in a process of its own."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import requests

from service.cli import main
from service.client import Client, ServiceProblem

ROUNDS, LENGTH = 100_000, 10_000


class Lab:
    """A service, a token and a folder with rounds."""

    def __init__(self, folder: Path, url: str, token: str) -> None:
        self.folder, self.url, self.token = folder, url, token
        self.client = Client(url, token)
        self.taken, self.files = 0, []

    def take_rounds(self) -> None:
        """New rounds in three files: a service takes no rounds twice."""
        self.taken += 1
        folder = self.folder / f"good-{self.taken}"
        assert main(["simulate", "--rounds", str(ROUNDS), "--visibility", "0.98", "--seed", str(self.taken), "--segments", "3",
                     "--out", str(folder)]) == 0
        self.files = sorted(folder.glob("rounds-*.npz"))

    def declaration(self, name: str, *more: object) -> Path:
        path = self.folder / f"{name}.json"
        command(
            "declare",
            "--rig",
            "north table",
            "--rounds",
            ROUNDS,
            "--score",
            0.84,
            "--method",
            "factor-closed",
            "--soundness",
            1e-6,
            "--length",
            LENGTH,
            "--out",
            path,
            *more,
        )
        return path


def command(*words: object) -> dict:
    """A command in a process of its own, expecting success; its JSON result."""
    done = subprocess.run(
        [sys.executable, "-m", "service.cli", *map(str, words), "--json"], capture_output=True, text=True, timeout=120
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


@pytest.fixture(scope="module")
def lab(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Lab]:
    folder = tmp_path_factory.mktemp("service")
    with open(folder / "log", "wb") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "service.cli", "serve", "--data", folder / "data", "--port", "0", "--json"],
            stdout=subprocess.PIPE,
            stderr=log,
            text=True,
        )
    try:
        line = process.stdout.readline()
        assert line, (folder / "log").read_text()
        token = command("token", "create", "anna", "--data", folder / "data")["token"]
        command("simulate", "--rounds", ROUNDS, "--local", "--seed", 8, "--out", folder / "local")
        yield Lab(folder, json.loads(line)["url"], token)
    finally:
        process.terminate()
        assert process.wait(60) == 0, (folder / "log").read_text()


@pytest.fixture
def run(lab: Lab, capsys: pytest.CaptureFixture, monkeypatch: pytest.MonkeyPatch):
    """Runs a client command in this process: exit code, standard output, standard error."""
    monkeypatch.setenv("BELLASSAY_URL", lab.url)
    monkeypatch.setenv("BELLASSAY_TOKEN", lab.token)
    lab.take_rounds()
    capsys.readouterr()

    def call(*words: object) -> tuple[int, str, str]:
        code = main([str(word) for word in words])
        captured = capsys.readouterr()
        return code, captured.out, captured.err

    return call


def test_a_run_goes_from_files_to_verified_bits(lab: Lab, run, tmp_path: Path) -> None:
    """declare, submit and watch, collect, verify: what the README shows, each step with exit code 0."""
    declaration = lab.declaration("whole", "--post", "--url", lab.url, "--token", lab.token)
    code, out, err = run("submit", *lab.files, "--declaration", declaration, "--watch", "--json")
    state = json.loads(out)
    assert code == 0 and state["state"] == "certified" and state["certified_length"] == LENGTH, err
    assert "sealed: 3 segments, 100 000 rounds" in err and "declaration recorded: " in err
    assert f"next: bellassay collect {state['id']} --out DIR" in err

    code, out, err = run("collect", state["id"], "--out", tmp_path, "--keep", "--json")
    kept = (tmp_path / "bits.bin").read_bytes()
    assert code == 0 and json.loads(out)["state"] == "certified" and len(kept) == LENGTH // 8, err
    code, out, _ = run("collect", state["id"], "--out", tmp_path, "--json")
    assert code == 0 and json.loads(out)["state"] == "collected" and (tmp_path / "bits.bin").read_bytes() == kept
    assert {path.name for path in tmp_path.iterdir()} == {
        "bits.bin",
        "bits-salt.hex",
        "seed.bin",
        "certificate.json",
        "report.json",
        "bundle.zip",
    }

    everything = [
        "--rounds",
        *lab.files,
        "--seed",
        tmp_path / "seed.bin",
        "--bits",
        tmp_path / "bits.bin",
        "--bits-salt",
        tmp_path / "bits-salt.hex",
        "--key",
        lab.client.ledger_key(),
    ]
    code, out, err = run("verify", tmp_path / "bundle.zip", *everything)
    assert code == 0 and len(out.splitlines()) > 5 and "none not made" in out, err
    code, out, _ = run("verify", tmp_path / "bundle.zip", *everything, "--json")
    assert code == 0 and json.loads(out)["verified"] and json.loads(out)["checks"]

    with pytest.raises(ServiceProblem) as caught:
        lab.client.bits(state["id"], 0, 0)
    assert caught.value.code == "bits-collected"
    code, out, _ = run("watch", state["id"], "--json")
    assert code == 0 and json.loads(out)["state"] in ("collected", "erased")  # not what the last event told
    code, _, err = run("collect", state["id"], "--out", tmp_path / "late")
    assert not (tmp_path / "late/bits.bin").exists() and "collected before" in err


def test_a_changed_bundle_or_bits_fail_the_verification(lab: Lab, run, tmp_path: Path) -> None:
    """Exit code 1 and a sentence for changed bits and for a changed bundle."""
    code, out, err = run("submit", *lab.files, "--declaration", lab.declaration("changed"), "--watch", "--json")
    assert code == 0, err
    run("collect", json.loads(out)["id"], "--out", tmp_path)
    bits = bytearray((tmp_path / "bits.bin").read_bytes())
    bits[17] ^= 4
    (tmp_path / "wrong.bin").write_bytes(bits)
    code, _, err = run(
        "verify", tmp_path / "bundle.zip", "--bits", tmp_path / "wrong.bin", "--bits-salt", tmp_path / "bits-salt.hex"
    )
    assert code == 1 and "bits" in err and "Traceback" not in err
    code, out, _ = run("verify", tmp_path / "bundle.zip")
    assert code == 0 and f"{out.count('not checked: ')} not made:" in out and "  - whose key signed\n" in out
    code, _, err = run("verify", tmp_path / "bundle.zip", "--key", "nonsense")
    assert code == 2 and "--key: the value is not an Ed25519 verifier key" in err
    code, _, err = run("verify", tmp_path / "bundle.zip", "--bits-salt", "nonsense")
    assert code == 2 and "--bits-salt: is neither" in err
    bundle = bytearray((tmp_path / "bundle.zip").read_bytes())
    bundle[len(bundle) // 2] ^= 1
    (tmp_path / "wrong.zip").write_bytes(bundle)
    code, _, err = run("verify", tmp_path / "wrong.zip")
    assert code == 1 and "Traceback" not in err


def test_an_interrupted_submission_goes_on(lab: Lab, run, tmp_path: Path) -> None:
    """Segments that arrived are not sent again, the run is found again by the file next to the declaration."""
    declaration = lab.declaration("resumed")
    recorded = lab.client.declare(json.loads(declaration.read_text()))
    broken = lab.folder / "resumed-missing.npz"
    code, _, err = run("submit", *lab.files[:2], broken, "--declaration", declaration)
    assert code == 2 and "resumed-missing.npz" in err and not Path(f"{declaration}.run").exists()

    state = lab.client.open_run(recorded["id"])
    lab.client.put_segment(state["id"], 1, lab.files[0])
    lab.client.put_segment(state["id"], 3, lab.files[2])
    code, out, err = run("submit", *lab.files, "--declaration", declaration, "--run", state["id"], "--watch", "--json")
    assert code == 0 and json.loads(out)["state"] == "certified" and "2 of 3 segments had arrived before" in err, err
    again = ("--declaration", declaration, "--run", state["id"], "--json")
    code, out, err = run("submit", *lab.files, *again)
    assert code == 0 and "no rounds are sent" in err
    code, out, err = run("submit", *lab.files[:2], *again)
    assert code == 2 and "3 segments, but 2 files were given" in err
    code, out, err = run("submit", *lab.files[:2], lab.folder / "local/rounds-0001.npz", *again)
    assert code == 2 and "local/rounds-0001.npz" in err and "segment 3" in err


def test_submitting_again_goes_on_with_the_same_run(lab: Lab, run) -> None:
    """The second call of the same command opens no second run."""
    declaration = lab.declaration("again")
    ids = [json.loads(run("submit", *lab.files, "--declaration", declaration, "--json")[1])["id"] for _ in range(2)]
    assert ids[0] == ids[1] and Path(f"{declaration}.run").exists()


def test_an_edited_declaration_opens_no_second_run(lab: Lab, run) -> None:
    """The same declaration laid out otherwise is the same; a changed one is refused with its run and its time."""
    declaration = lab.declaration("edited", "--purpose", "a purpose no other declaration has")
    code, out, err = run("submit", lab.files[0], "--declaration", declaration, "--json")
    assert code == 0 and "recorded only now" in err and "next: bellassay watch" in err, err
    number = json.loads(out)["id"]
    document = json.loads(declaration.read_text())
    declaration.write_text(json.dumps(document))
    code, out, err = run("submit", lab.files[0], "--declaration", declaration, "--json")
    assert code == 0 and json.loads(out)["id"] == number and "recorded only now" not in err
    declaration.write_text(json.dumps(document | {"purpose": "another"}))
    for more in ([], ["--run", number]):
        code, out, err = run("submit", lab.files[0], "--declaration", declaration, *more)
        assert code == 2 and number in err and "cannot be changed afterwards" in err


def test_other_files_cannot_replace_segments(lab: Lab, run) -> None:
    """A segment that arrived with another content stops the submission before anything is sealed."""
    declaration = lab.declaration("replaced")
    recorded = lab.client.declare(json.loads(declaration.read_text()))
    state = lab.client.open_run(recorded["id"])
    lab.client.put_segment(state["id"], 1, lab.files[1])
    code, _, err = run("submit", *lab.files, "--declaration", recorded["id"], "--run", state["id"])
    assert code == 2 and "rounds-0001.npz" in err and "another content" in err
    assert lab.client.run(state["id"])["state"] == "open"


def test_a_refused_run_has_exit_code_one_and_documents(lab: Lab, run, tmp_path: Path) -> None:
    """A local rig is refused; its documents can be collected and verified, and there are no bits."""
    code, out, err = run(
        "submit", lab.folder / "local/rounds-0001.npz", "--declaration", lab.declaration("refused"), "--watch", "--json"
    )
    state = json.loads(out)
    assert code == 1 and state["state"] == "refused" and state["available_bits"] < 0, err
    assert run("watch", state["id"])[0] == 1
    assert run("collect", state["id"], "--out", tmp_path)[0] == 1
    assert {path.name for path in tmp_path.iterdir()} == {"certificate.json", "report.json", "bundle.zip"}
    code, _, err = run("verify", tmp_path / "bundle.zip", "--rounds", lab.folder / "local/rounds-0001.npz")
    assert code == 0, err


def test_an_uploaded_seed_is_sent_when_its_length_is_known(lab: Lab, run, tmp_path: Path) -> None:
    """With seed source upload the run waits; a seed of the wrong length is refused, the right one gives the bits."""
    declaration = lab.declaration("seeded", "--seed-source", "upload")
    seed = tmp_path / "seed.bin"
    seed.write_bytes(os.urandom((2 * ROUNDS + LENGTH - 1) // 8) + b"\x15")
    short = tmp_path / "short.bin"
    short.write_bytes(bytes(10))
    code, out, err = run("submit", *lab.files, "--declaration", declaration, "--watch", "--json")
    number = json.loads(out)["id"]
    assert code == 0 and json.loads(out)["waiting_for"] == "seed", err
    assert f"next: bellassay submit --run {number} --seed FILE" in err
    code, _, err = run("collect", number, "--out", tmp_path / "early")
    assert code == 2 and "waits for its seed" in err and f"bellassay submit --run {number} --seed FILE" in err
    code, _, err = run("submit", *lab.files, "--declaration", declaration, "--seed", short)
    assert code == 2 and "short.bin" in err and "209 999 bits" in err
    code, out, err = run("submit", "--declaration", declaration, "--seed", seed, "--watch", "--json")
    assert code == 0 and json.loads(out)["state"] == "certified", err
    assert "had arrived before" in run("submit", "--run", number, "--seed", seed)[2]
    other = tmp_path / "other.bin"
    other.write_bytes(seed.read_bytes()[::-1])
    code, _, err = run("submit", "--run", number, "--seed", other)
    assert code == 2 and "other.bin" in err and "cannot be replaced" in err
    assert run("collect", number, "--out", tmp_path / "out")[0] == 0
    assert (tmp_path / "out/seed.bin").read_bytes() == seed.read_bytes()


def test_a_folder_with_another_run_is_not_overwritten(lab: Lab, run, tmp_path: Path) -> None:
    """The bits of a collected run exist only once: collecting another run into their folder is refused."""
    ids = []
    for name in ("first", "second"):
        lab.take_rounds()
        run("tally", *lab.files)         # takes what simulating printed out of the way
        code, out, err = run("submit", *lab.files, "--declaration", lab.declaration(name), "--watch", "--json")
        assert code == 0, err
        ids.append(json.loads(out)["id"])
    assert run("collect", ids[0], "--out", tmp_path)[0] == 0
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    code, _, err = run("collect", ids[1], "--out", tmp_path)
    assert (
        code == 2 and "another run" in err and before == {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    )
    assert lab.client.run(ids[1])["state"] == "certified"


def test_the_service_plans_like_the_command(lab: Lab, run) -> None:
    """POST /v1/plan and `bellassay plan` give the same numbers."""
    code, out, _ = run("plan", "--rounds", ROUNDS, "--score", 0.84, "--soundness", 1e-6, "--json")
    planned = lab.client.plan(rounds=ROUNDS, score=0.84, soundness=1e-6)
    here = {plan["method"]: plan["certified_length"] for plan in json.loads(out)["plans"]}
    assert here == {plan["method"]: plan["certified_length"] for plan in planned["plans"]} and code == 0


def test_the_certificate_is_the_same_with_and_without_a_service(lab: Lab, run, tmp_path: Path) -> None:
    """Same declaration, rounds and seed: the same bytes of certificate and bits from certify and from the service."""
    declaration = lab.declaration("same")
    state = json.loads(run("submit", *lab.files, "--declaration", declaration, "--watch", "--json")[1])
    assert run("collect", state["id"], "--out", tmp_path / "served")[0] == 0
    assert (
        run(
            "certify",
            *lab.files,
            "--declaration",
            declaration,
            "--seed",
            tmp_path / "served/seed.bin",
            "--out",
            tmp_path / "alone",
        )[0]
        == 0
    )
    for name in ("certificate.json", "bits.bin"):
        assert (tmp_path / "served" / name).read_bytes() == (tmp_path / "alone" / name).read_bytes()


def test_a_broken_file_is_refused_with_its_name_and_row(lab: Lab, run, tmp_path: Path) -> None:
    """The service's errors arrive with file, row and field."""
    path = tmp_path / "broken.csv"
    path.write_text("x,y,a,b\n0,0,1,1\n0,1,7,0\n")
    code, _, err = run("submit", path, "--declaration", lab.declaration("broken"))
    assert code == 2 and str(path) in err and err.count("row 2") == 1 and "Traceback" not in err


def test_the_interface_explains_every_request(lab: Lab) -> None:
    """Each request has a summary and a description, and each of its parameters says what it is."""
    document = requests.get(f"{lab.url}/openapi.json", timeout=10).json()
    for path, operations in document["paths"].items():
        for operation in operations.values():
            assert operation["summary"] and operation["description"], path
            assert all(parameter.get("description") for parameter in operation.get("parameters", ())), path


def test_tokens_are_listed_and_revoked(lab: Lab, run) -> None:
    """A revoked token opens nothing, an unknown id is told, and no secret is listed."""
    data = ["--data", lab.folder / "data"]
    made = json.loads(
        run("token", "create", "guest", "--scope", "audit", "--days", "2", "--label", "for a day", *data, "--json")[1]
    )
    client = Client(lab.url, made["token"])
    with pytest.raises(ServiceProblem) as caught:
        client.declare({})
    assert caught.value.status == 403
    code, out, _ = run("token", "list", *data)
    assert (
        code == 0
        and made["id"] in out
        and made["token"].split("_")[2] not in out
        and max(map(len, out.splitlines())) <= 80
    )
    assert run("token", "revoke", made["id"], *data)[0] == 0
    with pytest.raises(ServiceProblem) as caught:
        client.run("r1")
    assert caught.value.status == 401
    assert run("token", "revoke", "0" * 16, *data)[0] == 2
    assert made["data"] == str(lab.folder / "data")


def test_an_unknown_run_and_a_wrong_token_are_told(lab: Lab, run) -> None:
    """Exit code 2 with a sentence for a run that is not there and for a token that is none."""
    code, _, err = run("watch", "r0000")
    assert code == 2 and "run" in err and "Traceback" not in err
    code, _, err = run("watch", "r0000", "--token", "bellassay_nonsense")
    assert code == 2 and "token" in err.lower()
