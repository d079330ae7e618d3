"""The commands that need no service, run as a user runs them: options in, files and exit codes out."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from extractor.documents import certificate_from, tally_from
from extractor.model import RoundRules
from extractor.pipeline import batches_of, read_run
from service.cli import main
from service.commands.rounds import opened

ROUNDS = 200_000


@pytest.fixture(scope="module")
def lab(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the rounds of a good rig in three files, of a local one, a calibration and a declaration."""
    folder = tmp_path_factory.mktemp("lab")
    quiet(
        folder,
        "simulate",
        "--rounds",
        ROUNDS,
        "--visibility",
        0.98,
        "--seed",
        7,
        "--segments",
        3,
        "--out",
        folder / "good",
    )
    quiet(folder, "simulate", "--rounds", ROUNDS, "--local", "--seed", 8, "--out", folder / "local")
    quiet(folder, "simulate", "--rounds", ROUNDS, "--visibility", 0.98, "--seed", 9, "--out", folder / "earlier")
    counts = quiet(folder, "tally", folder / "earlier/rounds-0001.npz")
    (folder / "calibration.json").write_text(json.dumps(counts))
    quiet(
        folder,
        "declare",
        "--rig",
        "north table",
        "--rounds",
        ROUNDS,
        "--calibration",
        folder / "calibration.json",
        "--method",
        "factor-closed",
        "--soundness",
        1e-6,
        "--length",
        20_000,
        "--out",
        folder / "run.json",
    )
    return folder


def quiet(folder: Path, *words: object) -> dict:
    """Run a command in a process of its own, expecting success; its JSON result."""
    done = subprocess.run(
        [sys.executable, "-m", "service.cli", *map(str, words), "--json"], capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


def run(capsys: pytest.CaptureFixture, *words: object) -> tuple[int, str, str]:
    """Run a command in this process: exit code, standard output, standard error."""
    try:
        code = main([str(word) for word in words])
    except SystemExit as end:  # argparse leaves this way
        code = end.code
    captured = capsys.readouterr()
    return code, captured.out, captured.err


def good_files(lab: Path) -> list[Path]:
    return sorted((lab / "good").glob("rounds-*.npz"))


# ---- simulate


def test_the_same_seed_gives_the_same_rounds_however_they_are_split(lab: Path, tmp_path: Path, capsys) -> None:
    """Segments and format change the files, never the rounds."""
    for k, options in enumerate([["--segments", 7, "--format", "npy"], ["--format", "csv"]]):
        code, _, _ = run(
            capsys,
            "simulate",
            "--rounds",
            ROUNDS,
            "--visibility",
            0.98,
            "--seed",
            7,
            "--out",
            tmp_path / str(k),
            *options,
        )
        assert code == 0
    expected = read_run(batches_of(opened(good_files(lab)), RoundRules()))
    for k in range(2):
        files = sorted(path for path in (tmp_path / str(k)).glob("rounds-*"))
        assert read_run(batches_of(opened(files), RoundRules())) == expected


@pytest.mark.parametrize("segments, rounds", [(1, 1), (1, 9), (2, 17), (5, 100), (3, 3_000_001)])
def test_segments_hold_all_rounds_in_nearly_equal_parts(segments: int, rounds: int, tmp_path: Path, capsys) -> None:
    """No round is lost at a seam, whatever the sizes."""
    code, out, _ = run(
        capsys, "simulate", "--rounds", rounds, "--segments", segments, "--seed", 1, "--out", tmp_path, "--json"
    )
    sizes = [item["rounds"] for item in json.loads(out)["files"]]
    assert code == 0 and sum(sizes) == rounds and len(sizes) == segments and max(sizes) - min(sizes) < 16


def test_simulate_says_how_the_rounds_were_made(lab: Path) -> None:
    """rig.json holds the rig, the seed, the files and the score of the rig."""
    document = json.loads((lab / "good/rig.json").read_text())
    assert document["rig"]["visibility"] == 0.98 and document["seed"] == 7 and len(document["files"]) == 3
    assert document["winning_probability"] == pytest.approx(0.5 + 0.98 * 2**0.5 / 4, abs=1e-9)


@pytest.mark.parametrize(
    "options, kind",
    [
        (["--local"], "local"),
        (["--memory", "stop-when-ahead"], "memory"),
        (["--fault", "stuck-a=1"], "quantum"),
        (["--local", "--fault", "setting-bias=0.02", "--fault", "lost-losses=0.1"], "local"),
        (["--fault", "lost-no-clicks=0.5", "--efficiency", "0.8,0.7", "--fault", "drift=-0.1"], "quantum"),
    ],
)
def test_every_kind_of_rig_can_be_simulated(options: list[str], kind: str, tmp_path: Path, capsys) -> None:
    """Local boxes, boxes with memory and every fault give readable rounds."""
    code, out, _ = run(capsys, "simulate", "--rounds", 5000, "--seed", 3, "--out", tmp_path, "--json", *options)
    assert code == 0 and json.loads(out)["kind"] == kind
    assert read_run(batches_of(opened([tmp_path / "rounds-0001.npz"]), RoundRules()))[0].rounds == 5000


@pytest.mark.parametrize(
    "options, word",
    [
        (["--rounds", "1.5"], "whole number"),
        (["--rounds", "0"], "at least 1"),
        (["--rounds", "9", "--segments", "4"], "--segments"),
        (["--visibility", "1.2"], "visibility"),
        (["--efficiency", "0.9,0.9,0.9"], "two with a comma"),
        (["--fault", "gremlins=1"], "gremlins"),
        (["--fault", "stuck-a=0.5"], "stuck"),
        (["--local", "--fault", "drift=1"], "quantum rig only"),
        (["--seed", "-1"], "negative"),
        (["--visibility", "nan"], "not a number"),
    ],
)
def test_nonsense_options_are_refused_in_words(options: list[str], word: str, tmp_path: Path, capsys) -> None:
    """Exit code 2 and a sentence that names what is wrong; nothing is written."""
    base = {"--rounds": "1000", "--seed": "1", "--out": str(tmp_path / "x")}
    words = [part for pair in base.items() if pair[0] not in options for part in pair]
    code, out, err = run(capsys, "simulate", *words, *options)
    assert code == 2 and word in err and not out and "Traceback" not in err
    assert not list(tmp_path.rglob("rounds-*"))


def test_simulate_does_not_overwrite_rounds(lab: Path, capsys) -> None:
    """Existing round files are never replaced."""
    code, _, err = run(capsys, "simulate", "--rounds", 100, "--seed", 1, "--out", lab / "good")
    assert code == 2 and "rounds-0001.npz" in err and "exists" in err


# ---- tally


def test_tally_counts_files_as_one_run(lab: Path, capsys) -> None:
    """The JSON result holds the cells, the score with its error, p-value and diagnostics."""
    code, out, _ = run(capsys, "tally", *good_files(lab), "--json")
    result = json.loads(out)
    assert code == 0 and tally_from(result).rounds == result["rounds"] == ROUNDS
    assert abs(result["score"] - (0.5 + 0.98 * 2**0.5 / 4)) < 5 * result["score_error"]
    assert result["p_value"] < 1e-100 and result["diagnostics"] and set(result["counts"][0]) == set("txyabn")


def test_tally_lines_fit_the_terminal(lab: Path, capsys) -> None:
    """The text for people has no line above 80 columns and says what local models reach."""
    code, out, _ = run(capsys, "tally", *good_files(lab))
    assert code == 0 and max(map(len, out.splitlines())) <= 80 and "local at most 2" in out


def test_tally_takes_its_rules_from_a_declaration_or_from_options_not_both(lab: Path, capsys) -> None:
    """A declaration fixes the convention; giving it twice is a usage error."""
    code, out, _ = run(capsys, "tally", *good_files(lab), "--declaration", lab / "run.json", "--json")
    assert code == 0 and json.loads(out)["score"] > 0.84
    code, _, err = run(capsys, "tally", *good_files(lab), "--declaration", lab / "run.json", "--minus", "00")
    assert code == 2 and "--minus" in err


def test_a_no_click_needs_a_declared_value(tmp_path: Path, capsys) -> None:
    """The value 2 is an error that names file, row and field, unless the option says what it counts as."""
    path = tmp_path / "rounds.npy"
    values = np.array([[0, 0, 1, 1], [0, 1, 2, 0], [1, 0, 0, 0], [1, 1, 0, 1]] * 20, dtype=np.uint8)
    np.save(path, values)
    code, _, err = run(capsys, "tally", path)
    assert code == 2 and "rounds.npy" in err and "row 2" in err and "field a" in err
    code, out, _ = run(capsys, "tally", path, "--no-click-a", "0", "--json")
    assert code == 0 and json.loads(out)["rounds"] == 80


@pytest.mark.parametrize(
    "content", [b"", b"hello", b"\x93NUMPY\x01\x00", b"PK\x03\x04", b"x,y,a,b\n0,0,0\n", b"x,y,a,b\n0,0,0,7\n"]
)
def test_broken_files_are_refused_without_a_traceback(content: bytes, tmp_path: Path, capsys) -> None:
    """Whatever a file holds, the answer is a sentence naming it."""
    path = tmp_path / "broken.dat"
    path.write_bytes(content)
    code, out, err = run(capsys, "tally", path, "--json")
    assert code == 2 and "broken.dat" in err and set(json.loads(out)) == {"error"} and "Traceback" not in err


def test_a_missing_file_is_named(tmp_path: Path, capsys) -> None:
    """A path that does not exist is told as such."""
    code, _, err = run(capsys, "tally", tmp_path / "nowhere.npz")
    assert code == 2 and "nowhere.npz" in err and "No such file" in err


# ---- plan and declare


def test_plan_compares_methods(capsys) -> None:
    """Without a method all are compared, and more score gives more bits."""
    lengths = []
    for score in ("0.80", "0.84"):
        code, out, _ = run(capsys, "plan", "--rounds", "1e7", "--score", score, "--soundness", "1e-9", "--json")
        plans = {plan["method"]: plan["certified_length"] for plan in json.loads(out)["plans"]}
        assert code == 0 and set(plans) == {"factor-table", "factor-closed", "eat-2018", "eat-2019"}
        lengths.append(plans["factor-closed"])
    assert 0 < lengths[0] < lengths[1]


def test_plan_of_a_modelled_rig_names_rate_order_and_table(capsys) -> None:
    """plan --method factor-table --json answers with rate, order, certified length, validity bound and table at the
    top."""
    code, out, _ = run(capsys, "plan", "--rig-visibility", "0.93", "--rounds", "1e6", "--soundness", "1e-6",
            "--order", "1.01",
                       "--method", "factor-table", "--round-rate", "1000", "--json")
    plan = json.loads(out)
    assert code == 0 and plan["order"] == 1.01 and plan["validity_bound"] <= 1 and len(plan["table"]["test"]) == 16
    assert 1.04 < plan["rate"] < 1.06 and plan["certified_length"] > 10**6
    assert plan["hours"] == pytest.approx(1e6 / 3.6e6) and plan["net_bits"] < 0
    code, _, err = run(capsys, "plan", "--rig-visibility", "0.93", "--score", "0.8", "--rounds", "1e6", "--soundness",
            "1e-6")
    assert code == 2 and "exactly one" in err


def test_plan_finds_the_rounds_a_length_needs(capsys) -> None:
    """The rounds found give the length, and a few fewer do not."""
    common = ["--score", "0.82", "--soundness", "1e-9", "--method", "factor-closed", "--json"]
    _, out, _ = run(capsys, "plan", "--length", "1e5", *common)
    rounds = json.loads(out)["rounds"]
    for factor, enough in ((1, True), (0.99, False)):
        _, out, _ = run(capsys, "plan", "--rounds", int(rounds * factor), *common)
        assert (json.loads(out)["reliable_length"] >= 100_000) == enough


@pytest.mark.parametrize(
    "options, word",
    [
        (["--score", "0.75"], "local bound"),
        (["--score", "0.9"], "Tsirelson"),
        (["--score", "0.8", "--length", "5"], "either"),
        (["--score", "0.8", "--method", "eat-2018", "--output-rule", "credit"], "eat-2018"),
        (["--score", "0.8", "--order", "3"], "order"),
    ],
)
def test_plans_that_cannot_be_are_refused_in_words(options: list[str], word: str, capsys) -> None:
    """Scores out of range and combinations no method covers are input errors."""
    code, _, err = run(capsys, "plan", "--rounds", "1e6", "--soundness", "1e-6", *options)
    assert code == 2 and word in err and "Traceback" not in err


def test_a_method_that_does_not_apply_is_listed_with_its_reason(capsys) -> None:
    """In a comparison the methods that cannot do it say why, and the others go on."""
    code, out, _ = run(
        capsys, "plan", "--rounds", "1e7", "--score", "0.8", "--soundness", "1e-9", "--output-rule", "credit", "--json"
    )
    result = json.loads(out)
    assert code == 0 and [plan["method"] for plan in result["plans"]] == ["factor-table", "factor-closed"]
    assert {item["method"] for item in result["not_applicable"]} == {"eat-2018", "eat-2019"}


def test_a_declaration_is_never_replaced(lab: Path, capsys) -> None:
    """An existing declaration file stays as it is."""
    before = (lab / "run.json").read_bytes()
    code, _, err = run(
        capsys,
        "declare",
        "--rig",
        "r",
        "--rounds",
        1000,
        "--score",
        0.8,
        "--method",
        "factor-closed",
        "--soundness",
        1e-3,
        "--out",
        lab / "run.json",
    )
    assert code == 2 and "exists" in err and (lab / "run.json").read_bytes() == before


def test_a_declaration_remembers_its_calibration(lab: Path) -> None:
    """The digest and size of the calibration tally are part of the declaration."""
    document = json.loads((lab / "run.json").read_text())
    assert document["calibration"]["rounds"] == ROUNDS and document["calibration"]["digest"].startswith("sha256:")
    assert document["output"] == {"rule": "fixed", "bits": 20_000}


# ---- certify


def test_certify_makes_certificate_bits_and_seed(lab: Path, tmp_path: Path, capsys) -> None:
    """The whole chain on files; the same seed gives the same bits, from any split of the rounds."""
    code, out, _ = run(
        capsys, "certify", *good_files(lab), "--declaration", lab / "run.json", "--out", tmp_path / "one", "--json"
    )
    result = json.loads(out)
    assert code == 0 and result["outcome"] == "certified" and result["seed_drawn"]
    certificate = certificate_from(json.loads((tmp_path / "one/certificate.json").read_bytes()))
    bits, seed = (tmp_path / "one/bits.bin").read_bytes(), (tmp_path / "one/seed.bin").read_bytes()
    assert (
        certificate.certified_length == 20_000 and len(bits) == 2500 and len(seed) == (certificate.seed_bits + 7) // 8
    )
    assert 8000 < sum(byte.bit_count() for byte in bits) < 12_000
    for name in ("bits.bin", "seed.bin"):
        assert (tmp_path / "one" / name).stat().st_mode & 0o777 == 0o600
    run(capsys, "simulate", "--rounds", ROUNDS, "--visibility", 0.98, "--seed", 7, "--out", tmp_path / "whole")
    code, _, _ = run(
        capsys,
        "certify",
        tmp_path / "whole/rounds-0001.npz",
        "--declaration",
        lab / "run.json",
        "--seed",
        tmp_path / "one/seed.bin",
        "--out",
        tmp_path / "two",
    )
    assert code == 0 and (tmp_path / "two/bits.bin").read_bytes() == bits
    assert (tmp_path / "two/certificate.json").read_bytes() == (tmp_path / "one/certificate.json").read_bytes()


def test_a_refusal_has_exit_code_one_and_no_bits(lab: Path, tmp_path: Path, capsys) -> None:
    """A local rig is refused with its numbers: a certificate that says so, no seed, no bits."""
    code, out, _ = run(
        capsys, "certify", lab / "local/rounds-0001.npz", "--declaration", lab / "run.json", "--out", tmp_path
    )
    assert code == 1 and "refused" in out
    assert all(len(line) <= 80 for line in out.splitlines() if str(tmp_path) not in line)
    assert [path.name for path in tmp_path.iterdir()] == ["certificate.json"]
    assert certificate_from(json.loads((tmp_path / "certificate.json").read_bytes())).outcome == "refused"


def test_bits_are_made_once(lab: Path, tmp_path: Path, capsys) -> None:
    """A folder that holds a result is refused, so that no second set of bits replaces the first."""
    (tmp_path / "bits.bin").write_bytes(b"precious")
    code, _, err = run(capsys, "certify", *good_files(lab), "--declaration", lab / "run.json", "--out", tmp_path)
    assert code == 2 and "once" in err and (tmp_path / "bits.bin").read_bytes() == b"precious"


@pytest.mark.parametrize("change", [lambda seed: seed[:-1], lambda seed: seed + b"\0", lambda seed: b""])
def test_a_seed_of_the_wrong_length_is_refused(change, lab: Path, tmp_path: Path, capsys) -> None:
    """Too short, too long or empty: the seed must have exactly the length the certificate asks for."""
    seed = tmp_path / "seed.bin"
    seed.write_bytes(change(bytes((2 * ROUNDS + 20_000 - 1 + 7) // 8)))
    code, _, err = run(
        capsys,
        "certify",
        *good_files(lab),
        "--declaration",
        lab / "run.json",
        "--seed",
        seed,
        "--out",
        tmp_path / "out",
    )
    assert code == 2 and "seed" in err and not (tmp_path / "out/bits.bin").exists()


def test_more_rounds_than_declared_are_refused(lab: Path, tmp_path: Path, capsys) -> None:
    """Nothing is dropped: surplus rounds are an input error."""
    code, _, err = run(
        capsys,
        "certify",
        *good_files(lab),
        lab / "local/rounds-0001.npz",
        "--declaration",
        lab / "run.json",
        "--out",
        tmp_path,
    )
    assert code == 2 and "declar" in err


@pytest.mark.parametrize(
    "text, word",
    [
        ("{", "JSON"),
        ('{"format": "x", "format": "y"}', "twice"),
        ("[]", "object"),
        ('{"format": NaN}', "NaN"),
        ("{}", "/format"),
    ],
)
def test_a_broken_declaration_is_refused_in_words(text: str, word: str, lab: Path, tmp_path: Path, capsys) -> None:
    """Not JSON, a key twice, no object, NaN, a field missing: each says what and in which file."""
    path = tmp_path / "broken.json"
    path.write_text(text)
    code, _, err = run(capsys, "certify", *good_files(lab), "--declaration", path, "--out", tmp_path / "out")
    assert code == 2 and word in err and "broken.json" in err and "Traceback" not in err


# ---- the program itself


def test_usage_errors_have_exit_code_two(capsys) -> None:
    """Unknown commands, missing options and shortened option names are usage errors."""
    for words in (["frobnicate"], [], ["tally"], ["plan", "--round", "5", "--score", "0.8", "--soundness", "0.1"]):
        assert run(capsys, *words)[0] == 2


def test_client_commands_need_a_token(monkeypatch, capsys) -> None:
    """Without a token the user is told where to get one."""
    monkeypatch.delenv("BELLASSAY_TOKEN", raising=False)
    code, _, err = run(capsys, "watch", "r1")
    assert code == 2 and "bellassay token create" in err


def test_a_service_that_is_not_there_is_told_in_a_sentence(monkeypatch, capsys) -> None:
    """Connection refused: the address and the advice, no traceback."""
    monkeypatch.setattr("service.transport.FIRST_PAUSE_S", 0.001)
    code, out, err = run(capsys, "watch", "r1", "--url", "http://127.0.0.1:9", "--token", "t")
    assert code == 2 and "http://127.0.0.1:9" in err and "bellassay serve" in err and "Traceback" not in err and not out
