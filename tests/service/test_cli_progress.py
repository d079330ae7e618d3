"""What is said while a command works: bars on a terminal, sparse lines elsewhere."""

from __future__ import annotations

import os
import subprocess
import sys
from contextlib import suppress
from pathlib import Path

import pytest

from service.commands.common import Progress, duration, grouped, rows, several, volume


@pytest.mark.parametrize(
    "per_second, seconds, shares", [(10, 100, range(5, 101, 5)), (50, 20, range(10, 101, 10)), (4000, 0.25, [])]
)
def test_without_a_terminal_a_line_comes_for_every_tenth(
    per_second: int, seconds: float, shares: range, capsys: pytest.CaptureFixture
) -> None:
    """Logs get a line at the latest after five seconds, one per tenth when it goes faster, none for what is quick."""
    now = [0.0]
    with Progress("hashing", 1000, "rounds", clock=lambda: now[0]) as progress:
        for step in range(1, int(4 * seconds) + 1):
            now[0] = step / 4
            progress.move_to(int(per_second * now[0]))
    expected = [f"hashing: {share} %, {per_second} rounds/s" for share in shares]
    assert capsys.readouterr().err.splitlines() == expected


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


def test_numbers_are_written_as_people_say_them() -> None:
    """One thing is no plural, and sizes have three digits that count."""
    assert [several(n, "segment") for n in (0, 1, 2000)] == ["0 segments", "1 segment", "2 000 segments"]
    assert [volume(n) for n in (7, 18_412, 123_456_789, 5e14)] == ["7 B", "18.4 kB", "123 MB", "500 TB"]


def test_rows_stay_within_eighty_columns() -> None:
    """Long values wrap under their column; a digest, which cannot wrap, gets a line of its own."""
    digest = "sha256:" + "0" * 64
    lines = rows([("a long name indeed", "word " * 40), ("digest", digest), ("n", grouped(1234567))])
    assert max(map(len, lines)) <= 80 and lines[-1].endswith("1 234 567") and f"  {digest}" in lines
