"""The whole main job against a real service process, stage by stage.

    python -m tests.bench.end_to_end [--json] [--rounds N] [--segments S] [--bits M] [--folder DIR]

Rates are rounds per second and, for the stages that read or write files, MB/s (10^6 bytes of packed planes, 5 bits a round with a
t plane, 4 without). Ratios: tally against a plain memory copy of the same planes; upload against writing the same files to
the same disk with SHA-256 and fsync. Memory is the peak resident size of server and worker together (VmHWM).
"""

from __future__ import annotations

import argparse
import hashlib
import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from extractor import pipeline, tally
from extractor.bell import rigs
from extractor.documents import declaration_document
from extractor.records import planes
from extractor.records.writers import write_npz
from extractor.seal.verify import verify_bundle
from service.client import Client
from tests.bench.machine import children, peak_mib, show


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--rounds", type=lambda text: int(float(text)), default=10**8, help="rounds of the run")
    parser.add_argument("--segments", type=int, default=10, help="round files of the run")
    parser.add_argument("--bits", type=lambda text: int(float(text)), default=10**6, help="declared output length in bits")
    parser.add_argument("--folder", type=Path, help="where to work (default: a temporary folder)")
    args = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=args.folder) as folder:
        show(measure(args, Path(folder)), args.json)


def measure(args: argparse.Namespace, folder: Path) -> dict[str, float]:
    figures: dict[str, float] = {}
    n, rig = args.rounds, rigs.Rig(visibility=0.95)
    declaration = pipeline.declare(rig="Wren bench", rounds=n, method="factor-closed", soundness=1e-9, score=rig.winning_probability,
                                   output_bits=args.bits)
    begin = time.perf_counter()
    files = _simulate(rig, n, args.segments, folder)
    _stage(figures, "simulate", n, time.perf_counter() - begin)
    size = sum(path.stat().st_size for path in files)

    begin = time.perf_counter()
    for path in files:
        _plain_write(path, folder / "copy")
    plain = time.perf_counter() - begin
    _in_memory(figures, files[0], declaration)

    with Service(folder / "data") as service:
        client = service.client
        recorded = client.declare(declaration_document(declaration))
        run = client.open_run(recorded["id"])["id"]
        begin = time.perf_counter()
        for k, path in enumerate(files, 1):
            client.put_segment(run, k, path)
        upload = time.perf_counter() - begin
        _stage(figures, "upload", n, upload, size)
        figures["ratio_upload_plain_write"] = plain / upload
        begin = time.perf_counter()
        client.seal(run, len(files), n)
        for state in client.watch(run):
            pass
        figures["seconds_seal_to_certified"] = time.perf_counter() - begin
        if state["state"] != "certified":
            raise SystemExit(f"the run ended as {state['state']}: {state['message']}")
        for stage, seconds in state["stage_seconds"].items():
            _stage(figures, stage, n, seconds)
        figures["rate_mbit_per_s_hash"] = 2 * n / state["stage_seconds"]["hash"] / 1e6
        figures["peak_mib_server"] = peak_mib(service.pid)
        workers = children(service.pid)
        figures["peak_mib_worker"] = sum(map(peak_mib, workers))
        figures["peak_mib_together"] = figures["peak_mib_server"] + figures["peak_mib_worker"]
        begin = time.perf_counter()
        client.bundle(run, folder / "bundle.zip")
        client.get_seed(run, folder / "seed.bin")
        digest, salt = client.get_bits(run, folder / "bits.bin")
        figures["seconds_download"] = time.perf_counter() - begin
        client.collect(run, digest)
    begin = time.perf_counter()
    opened = [(path.open("rb"), path.name) for path in files]
    with (folder / "seed.bin").open("rb") as seed:
        verify_bundle((folder / "bundle.zip").read_bytes(), rounds=opened, seed=seed, bits=(folder / "bits.bin").read_bytes(),
                      bits_salt=bytes.fromhex(salt), say=lambda sentence: None)
    figures["seconds_verify_with_rounds_and_seed"] = time.perf_counter() - begin
    return figures


class Service:
    """A service process of its own with a token, for the length of a with block."""

    def __init__(self, data: Path) -> None:
        env = {k: v for k, v in os.environ.items() if not k.startswith("BELLASSAY_")}
        self.process = subprocess.Popen([sys.executable, "-m", "service.cli", "serve", "--data", str(data), "--port", "0", "--json"],
                                        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, env=env)
        url = json.loads(self.process.stdout.readline())["url"]
        token = json.loads(subprocess.run(
            [sys.executable, "-m", "service.cli", "token", "create", "bench", "--scope", "submit", "--scope", "collect", "--scope", "audit",
             "--data", str(data), "--json"], check=True, stdout=subprocess.PIPE, text=True, env=env).stdout)["token"]
        self.client, self.pid = Client(url, token), self.process.pid

    def __enter__(self) -> Service:
        return self

    def __exit__(self, *_: object) -> None:
        self.process.terminate()
        self.process.wait(60)


def _simulate(rig: rigs.Rig, rounds: int, segments: int, folder: Path) -> list[Path]:
    blocks = list(range(0, rounds, planes.BLOCK_ROUNDS))
    cuts = [blocks[len(blocks) * k // segments] for k in range(segments)] + [rounds]
    files, batches = [], rigs.simulate(rig, rounds, 1)
    for k, (low, high) in enumerate(zip(cuts, cuts[1:]), 1):
        count = -(-(high - low) // planes.BLOCK_ROUNDS)
        files.append(folder / f"rounds-{k}.npz")
        write_npz(files[-1], (next(batches) for _ in range(count)))
    return files


def _plain_write(source: Path, target: Path) -> None:
    digest = hashlib.sha256()
    with source.open("rb") as read, target.open("wb") as write:
        while piece := read.read(1 << 20):
            digest.update(piece)
            write.write(piece)
        write.flush()
        os.fsync(write.fileno())


def _in_memory(figures: dict[str, float], path: Path, declaration) -> None:
    """Tally of one file's planes in memory against copying the same planes; median of 7."""
    with path.open("rb") as file:
        batches = list(pipeline.batches_of([(file, path.name)], declaration.rules))
    size = sum(plane.nbytes for batch in batches for plane in batch.planes.values())
    tallied = _median(lambda: [tally.tally_batch(batch) for batch in batches])
    target = [np.empty_like(plane) for batch in batches for plane in batch.planes.values()]
    sources = [plane for batch in batches for plane in batch.planes.values()]
    copied = _median(lambda: [np.copyto(t, s) for t, s in zip(target, sources)])
    figures["rounds_per_s_tally_in_memory"] = sum(b.rounds for b in batches) / tallied
    figures["mb_per_s_tally_in_memory"] = size / tallied / 1e6
    figures["ratio_tally_memory_copy"] = copied / tallied


def _median(call) -> float:
    times = []
    for _ in range(7):
        begin = time.perf_counter()
        call()
        times.append(time.perf_counter() - begin)
    return sorted(times)[3]


def _stage(figures: dict[str, float], name: str, rounds: int, seconds: float, size: int | None = None) -> None:
    figures[f"seconds_{name}"] = seconds
    figures[f"rounds_per_s_{name}"] = rounds / max(seconds, 1e-9)
    if size is not None:
        figures[f"mb_per_s_{name}"] = size / max(seconds, 1e-9) / 1e6


if __name__ == "__main__":
    main()
