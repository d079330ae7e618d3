"""What is said while a command works: bars on a terminal, sparse lines elsewhere."""

from __future__ import annotations

import os
import subprocess
import sys
from contextlib import suppress
from pathlib import Path

import pytest

from service.commands.common import Progress, duration, grouped, rows


def test_without_a_terminal_a_line_comes_every_ten_seconds(capsys: pytest.CaptureFixture) -> None:
    """Logs get few lines: none before ten seconds, then share and rate."""
    now = [0.0]
    with Progress("hashing", 1000, "rounds", clock=lambda: now[0]) as progress:
        for second in range(1, 26):
            now[0] = float(second)
            progress.move_to(40 * second)
    assert capsys.readouterr().err.splitlines() == ["hashing: 40 %, 40 rounds/s", "hashing: 80 %, 40 rounds/s"]


def test_on_a_terminal_there_is_a_bar(tmp_path: Path) -> None:
    """A terminal shows the label, the share done and the rate; standard output stays clean for --json."""
    leader, follower = os.openpty()
    words = ["simulate", "--rounds", "3e6", "--seed", "1", "--out", tmp_path, "--json"]
    done = subprocess.run([sys.executable, "-m", "service.cli", *words], stdout=subprocess.PIPE, stderr=follower)
    os.close(follower)
    shown = ""
    with suppress(OSError):  # the end of a terminal whose other side is closed
        while piece := os.read(leader, 1 << 16):
            shown += piece.decode()
    os.close(leader)
    assert done.returncode == 0 and done.stdout.startswith(b"{")
    assert "simulating" in shown and "100%" in shown and "rounds/s" in shown


@pytest.mark.parametrize(
    "seconds, text", [(0.04, "0.0 s"), (59.94, "59.9 s"), (125, "2 min 5 s"), (7_260, "2 h 1 min")]
)
def test_durations_are_written_as_people_say_them(seconds: float, text: str) -> None:
    """Seconds, minutes or hours, whatever fits."""
    assert duration(seconds) == text


def test_rows_stay_within_eighty_columns() -> None:
    """Long values wrap under their column; a digest, which cannot wrap, gets a line of its own."""
    digest = "sha256:" + "0" * 64
    lines = rows([("a long name indeed", "word " * 40), ("digest", digest), ("n", grouped(1234567))])
    assert max(map(len, lines)) <= 80 and lines[-1].endswith("1 234 567") and f"  {digest}" in lines
