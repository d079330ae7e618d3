"""Real service processes for the fault and acceptance tests: started, killed, started again."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np

from extractor import pipeline
from extractor.bell import rigs
from extractor.documents import declaration_document
from extractor.records.planes import rebatch
from extractor.records.writers import write_npz
from service.client import Client

ROOT = Path(__file__).resolve().parents[2]


def environment(data: Path, **settings: Any) -> dict[str, str]:
    """The environment of a service process on `data`; nothing of the caller's BELLASSAY_* variables is kept."""
    env = {name: value for name, value in os.environ.items() if not name.startswith("BELLASSAY_")}
    chosen = {"data": data, "free_disk_bytes": 0, "poll_s": 0.05, "event_poll_s": 0.05, "partial_rounds": 2**20, "hash_threads": 1} | settings
    return env | {f"BELLASSAY_{name.upper()}": str(value) for name, value in chosen.items()} | {"PYTHONPATH": str(ROOT)}


class ServerProcess:
    """`bellassay serve` as a process; `url` and `client` once it listens."""

    def __init__(self, data: Path, *options: str, **settings: Any) -> None:
        self.data, self.env = data, environment(data, **settings)
        data.mkdir(parents=True, exist_ok=True)
        with open(data.parent / "server.log", "ab") as log:
            self.process = subprocess.Popen(
                [sys.executable, "-m", "service.cli", "serve", "--data", str(data), "--json", *(options or ("--port", "0"))],
                stdout=subprocess.PIPE, stderr=log, text=True, env=self.env, cwd=ROOT)
        line = self.process.stdout.readline()
        if not line:
            raise RuntimeError((data.parent / "server.log").read_text()[-3000:])
        self.url = json.loads(line)["url"]

    def client(self, token: str) -> Client:
        return Client(self.url, token)

    def token(self, owner: str = "north") -> str:
        return json.loads(command(self.env, "token", "create", owner, "--scope", "submit", "--scope", "collect", "--scope", "audit",
                                  "--data", str(self.data), "--json").stdout)["token"]

    def kill(self) -> None:
        self.process.kill()
        self.process.wait()
        self.process.stdout.close()

    def stop(self) -> int:
        self.process.terminate()
        code = self.process.wait(60)
        self.process.stdout.close()
        return code

    def __enter__(self) -> ServerProcess:
        return self

    def __exit__(self, *_: object) -> None:
        if self.process.poll() is None:
            self.stop()


def command(env: dict[str, str], *words: str, check: bool = True) -> subprocess.CompletedProcess:
    """`bellassay WORDS` in a process of its own."""
    return subprocess.run([sys.executable, "-m", "service.cli", *words], env=env, cwd=ROOT, check=check, capture_output=True, text=True)


def work_once(env: dict[str, str], place: str | None = None) -> int:
    """A worker process until nothing waits, killing itself at `place` if given; its exit code."""
    words = ["-m", "tests.faults.dying_worker", place or "nowhere:never"]
    return subprocess.run([sys.executable, *words], env=env, cwd=ROOT, capture_output=True).returncode


def round_files(folder: Path, sizes: tuple[int, ...], seed: int = 5) -> list[Path]:
    """Rounds of an honest rig in files of these sizes."""
    folder.mkdir(parents=True, exist_ok=True)
    files, batches, begin = [], list(rigs.simulate(rigs.Rig(visibility=0.97), sum(sizes), seed)), 0
    for number, size in enumerate(sizes, 1):
        cut = rebatch(_slice(batches, begin, size))
        files.append(folder / f"rounds-{number}.npz")
        write_npz(files[-1], cut)
        begin += size
    return files


def _slice(batches, begin: int, size: int):
    """Rounds begin … begin + size of some batches, one small batch at a time."""
    from extractor.model import RoundBatch

    bits = {name: np.concatenate([np.unpackbits(b.planes[name], bitorder="little", count=b.rounds) for b in batches])[begin:begin + size]
            for name in batches[0].planes}
    yield RoundBatch(size, {name: np.packbits(plane, bitorder="little") for name, plane in bits.items()})


def declaration(rounds: int, bits: int, **changes: Any) -> dict[str, Any]:
    """A declaration document for those rounds."""
    arguments = dict(rig="Wren bench", rounds=rounds, method="factor-closed", soundness=1e-9, score=0.83, output_bits=bits, seed_source="upload")
    return declaration_document(pipeline.declare(**(arguments | changes)))


def seed_bytes(bits: int, label: int = 11) -> bytes:
    """Reproducible bits in the form of a seed file. For tests only."""
    data = bytearray(np.random.default_rng(label).bytes((bits + 7) // 8))
    if bits % 8:
        data[-1] &= (1 << bits % 8) - 1
    return bytes(data)
