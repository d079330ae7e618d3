"""What the commands say: how a tally was read, what is missing, what is odd; and the program itself."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from service.cli import main


def run(capsys: pytest.CaptureFixture, *words: object) -> tuple[int, str, str]:
    """Run a command in this process: exit code, standard output, standard error."""
    try:
        code = main([str(word) for word in words])
    except SystemExit as end:  # argparse leaves this way
        code = end.code
    captured = capsys.readouterr()
    return code, captured.out, captured.err


@pytest.fixture
def calibration(tmp_path: Path, capsys) -> Path:
    """Counts of rounds with no-clicks, read with 10 as the setting pair that has the minus sign."""
    words = ["--rounds", 40_000, "--visibility", 0.95, "--minus", "10", "--seed", 5, "--format", "npy"]
    out = run(capsys, "simulate", *words, "--out", tmp_path)
    assert out[0] == 0
    rounds = np.load(tmp_path / "rounds-0001.npy")
    rounds = np.array(rounds)[:, :4] if rounds.dtype.names is None else rounds
    rounds[:7, 2] = 2
    np.save(tmp_path / "gaps.npy", rounds)
    options = ["--minus", "10", "--no-click-a", 1, "--bias", 0.01]
    code, text, err = run(capsys, "tally", tmp_path / "gaps.npy", *options)
    assert code == 0 and "7 on side a, 0 on side b" in text, err
    code, text, _ = run(capsys, "tally", tmp_path / "gaps.npy", *options, "--json")
    assert code == 0
    (tmp_path / "counts.json").write_text(text)
    return tmp_path / "counts.json"


def test_a_tally_says_how_it_was_read(calibration: Path) -> None:
    """Every option that changes a count or a score stands in the file, defaults included, and so do the no-clicks."""
    document = json.loads(calibration.read_text())
    assert document["no_clicks"] == [7, 0]
    assert document["reading"] == {
        "test_probability": 1.0,
        "distribution": [0.25] * 4,
        "generation": [0, 0],
        "bias": 0.01,
        "minus": [1, 0],
        "flip": False,
        "no_click_a": 1,
        "no_click_b": None,
    }


def test_a_declaration_inherits_how_its_calibration_was_read(calibration: Path, tmp_path: Path, capsys) -> None:
    """What is not given comes from the file, so that score and rules cannot fall apart."""
    words = ["--rounds", "1e6", "--method", "factor-closed", "--soundness", "1e-6", "--calibration", calibration]
    code, _, err = run(capsys, "declare", "--rig", "r", *words, "--out", tmp_path / "d.json", "--no-click-a", 1)
    assert code == 0, err
    document = json.loads((tmp_path / "d.json").read_text())
    assert document["convention"] == {"minus": [1, 0], "flip": False}
    assert document["no_click"] == {"a": 1, "b": None} and document["settings"]["bias"] == 0.01
    code, out, _ = run(capsys, "plan", *words, "--json")
    assert code == 0 and json.loads(out)["score"] == pytest.approx(document["expected_score"])


@pytest.mark.parametrize(
    "option", [["--minus", "11"], ["--flip"], ["--no-click-a", "0"], ["--no-click-b", "0"], ["--bias", "0"],
               ["--test-probability", "0.5"], ["--generation", "01"], ["--distribution", "0.1,0.2,0.3,0.4"]],
)  # fmt: skip
def test_an_option_that_contradicts_the_calibration_is_refused(
    option: list, calibration: Path, tmp_path: Path, capsys
) -> None:
    """A calibration read in one way says nothing about rounds read in another."""
    words = ["--rounds", "1e6", "--method", "factor-closed", "--soundness", "1e-6", "--calibration", calibration]
    for command in (["plan"], ["declare", "--rig", "r", "--out", tmp_path / "d.json"]):
        code, _, err = run(capsys, *command, *words, *option)
        assert code == 2 and option[0] in err and "counts.json" in err and not (tmp_path / "d.json").exists()


@pytest.mark.parametrize("change", [{"bias": "much"}, {"minus": [2, 0]}, {"flip": 1}, {"no_click_a": 2}, {"extra": 0}])
def test_a_broken_reading_is_refused_in_words(change: dict, calibration: Path, capsys) -> None:
    """A value that is none, or a name nobody knows, stops the command with the place."""
    document = json.loads(calibration.read_text())
    document["reading"] |= change
    calibration.write_text(json.dumps(document))
    code, _, err = run(capsys, "plan", "--rounds", "1e6", "--soundness", "1e-6", "--calibration", calibration)
    assert code == 2 and "counts.json" in err and "/reading" in err and "Traceback" not in err


@pytest.mark.parametrize("words", [["list"], ["revoke", "0" * 16]])
def test_tokens_are_looked_for_in_service_data_only(words: list[str], tmp_path: Path, capsys) -> None:
    """A folder without a service is told as such and stays as it is; create says where the token is valid."""
    code, _, err = run(capsys, "token", *words, "--data", tmp_path / "nothing")
    assert code == 2 and "no service data in" in err and f"bellassay serve --data {tmp_path / 'nothing'}" in err
    assert not (tmp_path / "nothing").exists()
    code, _, err = run(capsys, "token", "create", "anna", "--data", tmp_path / "made")
    assert code == 0 and str(tmp_path / "made") in err


@pytest.mark.parametrize("source", ["system", "upload"])
def test_certify_says_what_is_odd_about_the_rounds(source: str, tmp_path: Path, capsys) -> None:
    """Flags stand under the certificate and in the JSON; a seed from elsewhere than declared is remarked on."""
    words = ["--rounds", 20_000, "--fault", "setting-bias=0.1", "--seed", 3, "--out", tmp_path]
    assert run(capsys, "simulate", *words)[0] == 0
    words = ["--rig", "r", "--rounds", 20_000, "--score", 0.84, "--method", "factor-closed", "--soundness", 1e-3]
    code, _, err = run(capsys, "declare", *words, "--seed-source", source, "--out", tmp_path / "d.json")
    assert code == 0, err
    command = ["certify", tmp_path / "rounds-0001.npz", "--declaration", tmp_path / "d.json"]
    if source == "system":
        (tmp_path / "seed.bin").write_bytes(b"")
        code, out, err = run(capsys, *command, "--seed", tmp_path / "seed.bin", "--out", tmp_path / "one")
        assert "mind: the declaration says that the seed is drawn from the operating system" in err
    else:
        code, out, err = run(capsys, *command, "--out", tmp_path / "one")
        assert "mind: the declaration says that you bring the seed" in err
        assert "diagnostics (they certify nothing)\n  - " in out
        code, out, err = run(capsys, *command, "--out", tmp_path / "two", "--json")
        assert any(item["flag"] for item in json.loads(out)["diagnostics"])


def test_the_bare_program_helps_and_says_its_version(capsys) -> None:
    """Without a command: the help and exit code 2."""
    code, out, err = run(capsys)
    assert code == 2 and "COMMAND" in err and "exit codes" in err and not out
    code, out, _ = run(capsys, "--version")
    assert code == 0 and out.startswith("bellassay ")


@pytest.mark.parametrize(
    "text, words",
    [
        ("1e30", "'1e30' is larger than 9007199254740991"),
        ("1,000,000", "'1,000,000': write 1000000 or 1e6"),
        ("12 500 000", "'12 500 000': write 12500000 or 1.25e7"),
        ("1.5", "'1.5' is not a whole number"),
        ("nan", "'nan' is not a whole number"),
        ("inf", "'inf' is larger than"),
        ("many", "'many' is not a whole number"),
    ],
)
def test_numbers_in_another_spelling_are_refused_with_the_right_one(text: str, words: str, capsys) -> None:
    """A number that cannot be taken is answered with what to write."""
    code, out, err = run(capsys, "plan", "--rounds", text, "--score", "0.8", "--soundness", "1e-9", "--json")
    error = json.loads(out)["error"]
    assert code == 2 and words in err and words in error["detail"] and error["code"] == "bad-usage"


def test_a_comma_in_a_number_is_refused_with_the_point(capsys) -> None:
    """0,8 is understood, but not guessed."""
    code, _, err = run(capsys, "plan", "--rounds", "1e6", "--score", "0,8", "--soundness", "1e-9")
    assert code == 2 and "'0,8': write 0.8" in err


@pytest.mark.parametrize(
    "words, code",
    [
        (["tally", "nowhere.npz"], "no-file"),
        (["plan", "--score", "0.8", "--soundness", "1e-9"], "bad-usage"),
        (["watch", "r1", "--url", "http://127.0.0.1:9", "--token", "t"], "unreachable"),
    ],
)
def test_trouble_is_an_object_for_programs(words: list[str], code: str, monkeypatch, capsys) -> None:
    """With --json, exit code 2 comes with one object on standard output, and the sentence stays on standard error."""
    monkeypatch.setattr("service.transport.FIRST_PAUSE_S", 0.001)
    status, out, err = run(capsys, *words, "--json")
    error = json.loads(out)["error"]
    assert status == 2 and error["code"] == code and error["detail"] in err


def test_a_variable_that_names_no_setting_is_told(tmp_path: Path, monkeypatch, capsys) -> None:
    """A slip of the pen in an environment file would otherwise go unnoticed."""
    monkeypatch.setenv("BELLASSAY_SEGMENT_BITES", "1")
    monkeypatch.setenv("BELLASSAY_PYTHON", "python3")
    _, _, err = run(capsys, "token", "create", "anna", "--data", tmp_path)
    assert "BELLASSAY_SEGMENT_BITES names no setting" in err and "BELLASSAY_PYTHON" not in err
