"""The demo, as a newcomer runs it after installation."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]


def test_the_demo_ends_with_verified_bits(tmp_path: Path) -> None:
    """In a folder with a space in its name that holds an earlier job: declared, certified, collected, verified."""
    data = tmp_path / "a b"
    (data / "job-1").mkdir(parents=True)
    done = subprocess.run(
        [sys.executable, ROOT / "deploy/demo.py", "--rounds", "3000000", "--segments", "2", "--data", data],
        cwd=tmp_path,
        env={"PATH": "/usr/bin:/bin", "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=300,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "the key in the bundle is the trusted one" in done.stdout and "certified length" in done.stdout
    assert "not checked" not in done.stdout
    collected = data / "job-2/collected"
    certificate = json.loads((collected / "certificate.json").read_text())
    size = (collected / "bits.bin").stat().st_size
    assert certificate["outcome"] == "certified" and size == (certificate["certified_length"] + 7) // 8
