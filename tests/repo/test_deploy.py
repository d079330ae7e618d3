"""The scripts a newcomer runs first: they must be runnable, strict, and say what is missing."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
SCRIPTS = ("deploy/demo", "deploy/check", ".ci/run")


@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_are_executable_and_strict(name: str) -> None:
    """Executable, right in syntax, and stopping at the first error."""
    path = ROOT / name
    assert os.access(path, os.X_OK)
    assert "set -euo pipefail" in path.read_text()
    assert subprocess.run(["bash", "-n", path]).returncode == 0


def with_commands(folder: Path, **scripts: str) -> subprocess.CompletedProcess:
    """Run make_environment where only these commands exist: name -> sh text."""
    folder.mkdir()
    for name in ("bash", "sh", "env", "cat"):
        (folder / name).symlink_to(shutil.which(name))
    for name, text in scripts.items():
        (folder / name).write_text(f"#!/bin/sh\n{text}\n")
        (folder / name).chmod(0o755)
    return subprocess.run(
        [
            "bash",
            "-euo",
            "pipefail",
            "-c",
            '. "$0"; make_environment "$1"; echo "$python"',
            ROOT / "deploy/environment.sh",
            folder / "project",
        ],
        env={"PATH": str(folder)},
        capture_output=True,
        text=True,
    )


def test_a_missing_or_old_python_is_told_with_the_command_that_helps(tmp_path: Path) -> None:
    """Without root rights the user gets the line to type; nothing is installed behind their back."""
    for k, scripts in enumerate([{}, {"python3": "exit 1"}]):
        done = with_commands(tmp_path / str(k), id="echo 1000", **scripts)
        assert done.returncode == 2 and "Python 3.11" in done.stderr and "sudo apt install python3" in done.stderr


def test_a_missing_venv_module_is_told_with_the_command_that_helps(tmp_path: Path) -> None:
    """Debian ships Python without venv: the script says which package it is."""
    python = 'case "$2" in *ensurepip*) exit 1;; esac; exit 0'
    done = with_commands(tmp_path / "bin", id="echo 1000", python3=python)
    assert done.returncode == 2 and "sudo apt install python3-venv" in done.stderr


def test_root_gets_the_missing_package_installed(tmp_path: Path) -> None:
    """As root the package is fetched by apt-get, and the environment is then made."""
    here = tmp_path / "bin"
    python = f'case "$2" in *ensurepip*) test -e {here}/installed;; venv) echo made >&2;; *) exit 0;; esac'
    done = with_commands(here, id="echo 0", python3=python, **{"apt-get": f': > {here}/installed; echo "$@" >&2'})
    assert done.returncode == 0, done.stderr
    assert "install -y -q --no-install-recommends python3-venv" in done.stderr and "made" in done.stderr


def test_an_environment_that_works_is_kept(tmp_path: Path) -> None:
    """Running a script again does not make the environment anew."""
    here = tmp_path / "bin"
    inside = here / "project/.venv/bin"
    inside.mkdir(parents=True)
    (inside / "python").write_text("#!/bin/sh\nexit 0\n")
    (inside / "python").chmod(0o755)
    done = subprocess.run(
        [
            "bash",
            "-euo",
            "pipefail",
            "-c",
            '. "$0"; make_environment "$1"; echo "$python"',
            ROOT / "deploy/environment.sh",
            here / "project",
        ],
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0 and done.stdout.strip() == str(inside / "python") and "making" not in done.stderr


def project_with_environment(folder: Path) -> Path:
    """A copy of deploy/ beside a .venv whose Python notes every use of pip."""
    shutil.copytree(ROOT / "deploy", folder / "deploy")
    python = folder / ".venv/bin/python"
    python.parent.mkdir(parents=True)
    noting = f'#!/bin/sh\ncase "$*" in *pip*) echo "$*" >> {folder}/pip;; *demo.py*) echo usage of the demo;; esac\n'
    python.write_text(noting)
    python.chmod(0o755)
    return folder


@pytest.mark.parametrize("script", ["check", "demo"])
def test_asking_for_help_installs_nothing(script: str, tmp_path: Path) -> None:
    """--help is answered at once; only the real thing installs."""
    project = project_with_environment(tmp_path)
    done = subprocess.run([project / "deploy" / script, "--help"], capture_output=True, text=True)
    assert done.returncode == 0 and "usage" in done.stdout and not (project / "pip").exists()
    subprocess.run([project / "deploy" / script], capture_output=True, text=True)
    assert "install" in (project / "pip").read_text()


def test_the_demo_explains_itself() -> None:
    """The demo's options are listed by --help."""
    done = subprocess.run([sys.executable, ROOT / "deploy/demo.py", "--help"], capture_output=True, text=True)
    assert done.returncode == 0 and all(
        option in done.stdout for option in ("--rounds", "--segments", "--data", "--keep")
    )
