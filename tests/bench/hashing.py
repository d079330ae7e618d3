"""How fast the hash is, and how much memory it takes.

    python -m tests.bench.hashing [--json] [--size n,m ...] [--threads k ...] [--backend name] [--repeat r]
                                  [--reference-bits n]

Every case runs in a process of its own, so that its peak memory is its own; raw bits and seed come from files (the
seed is read by window, the raw bits in pieces of one MiB). Rates are raw input bits per second of wall time, end to
end (planning, seed reading and tables included), and per second of processor time, which a busy machine disturbs less.

Beside them stands a plain reference: the same blocks with one monolithic scipy.fft transform of 2^22 points per
block and seed window, at m = 10^6, single-threaded. It depends on the memory allocator by up to a factor of two,
so it runs under glibc's default setting and under one that reuses memory (named in the figures); take the better
one. Figures of the backend are measured under the setting this program was started with.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import scipy
import scipy.fft

from extractor.hashing.toeplitz import SeedFile, ToeplitzStream

SIZES = ((10**6, 5 * 10**5), (10**7, 10**6), (2 * 10**8, 10**6), (10**8, 1024), (2 * 10**7, 10**7))
PIECE_BYTES = 1 << 20
REUSE = {"MALLOC_MMAP_THRESHOLD_": str(1 << 30), "MALLOC_TRIM_THRESHOLD_": str(1 << 31),
         "MALLOC_TOP_PAD_": str(1 << 28)}
REFERENCE_OUTPUT_BITS, REFERENCE_POINTS = 10**6, 1 << 22


def _write_random(path: Path, bits: int, label: int) -> None:
    """A file of `bits` random bits, tail zero, written in pieces."""
    rng, left = np.random.default_rng(label), (bits + 7) // 8
    with path.open("wb") as file:
        while left:
            piece = rng.integers(0, 256, min(left, PIECE_BYTES), dtype=np.uint8)
            left -= len(piece)
            if not left and bits % 8:
                piece[-1] &= (1 << bits % 8) - 1
            file.write(piece)


def measure(raw_bits: int, output_bits: int, backend: str | None, threads: int, folder: Path) -> dict:
    """One hash of raw and seed files in `folder`: seconds, rates, memory; run it in a process of its own."""
    resident = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    with (folder / "raw").open("rb") as raw, (folder / "seed").open("rb") as seed_file:
        wall, cpu = time.perf_counter(), time.process_time()
        seed = SeedFile(seed_file, raw_bits + output_bits - 1)
        stream = ToeplitzStream(raw_bits, output_bits, seed, backend=backend, threads=threads)
        while piece := raw.read(PIECE_BYTES):
            stream.push(np.frombuffer(piece, dtype=np.uint8), min(8 * len(piece), raw_bits - stream.position))
        stream.partial()
        wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - resident
    return {"backend": stream.backend_name, "seconds": round(wall, 3), "mbit_per_s": round(raw_bits / wall / 1e6, 1),
            "mbit_per_cpu_s": round(raw_bits / cpu / 1e6, 1), "added_memory_mib": round(peak / 1024)}


def reference(raw_bits: int) -> dict:
    """The plain blockwise hash without our splitting of transforms; random bits, result thrown away."""
    block = REFERENCE_POINTS - REFERENCE_OUTPUT_BITS + 1
    blocks = max(1, raw_bits // block)
    rng = np.random.default_rng(1)
    raw = rng.integers(0, 2, block, dtype=np.uint8)
    window = rng.integers(0, 2, REFERENCE_POINTS, dtype=np.uint8)
    wall, cpu = time.perf_counter(), time.process_time()
    total = 0
    for _ in range(blocks):
        total = total + (scipy.fft.rfft(raw.astype(np.float64), REFERENCE_POINTS)
                         * scipy.fft.rfft(window.astype(np.float64)))
    np.rint(scipy.fft.irfft(total, REFERENCE_POINTS)).astype(np.int64) & 1
    wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    return {"mbit_per_s": round(blocks * block / wall / 1e6, 1), "mbit_per_cpu_s": round(blocks * block / cpu / 1e6, 1)}


def _child(arguments: list[str], environment: dict[str, str] | None = None) -> dict:
    done = subprocess.run([sys.executable, "-m", "tests.bench.hashing", *arguments], check=True, capture_output=True,
                          text=True, env={**os.environ, **(environment or {})})
    return json.loads(done.stdout)


def _machine() -> dict:
    model = next((line.split(":", 1)[1].strip() for line in Path("/proc/cpuinfo").read_text().splitlines()
                  if line.startswith("model name")), platform.processor()) if os.path.exists("/proc/cpuinfo") else ""
    return {"processor": model, "cores": os.cpu_count(), "load_before": round(os.getloadavg()[0], 2),
            "python": platform.python_version(), "numpy": np.__version__, "scipy": scipy.__version__}


def _size(text: str) -> tuple[int, int]:
    raw_bits, output_bits = (int(float(part)) for part in text.split(","))
    return raw_bits, output_bits


def main() -> None:
    parser = argparse.ArgumentParser(description="Measure the Toeplitz hash.")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--size", type=_size, nargs="+", default=SIZES, metavar="n,m", help="raw and output bits")
    parser.add_argument("--threads", type=int, nargs="+", default=[1, 2])
    parser.add_argument("--backend", default=None, help="default: the best present")
    parser.add_argument("--repeat", type=int, default=1, help="runs per case; the fastest is shown")
    parser.add_argument("--reference-bits", type=int, default=3 * 10**7,
                        help="raw bits of the reference; 0 leaves it out")
    parser.add_argument("--one", nargs=3, metavar=("size", "threads", "folder"), help=argparse.SUPPRESS)
    parser.add_argument("--one-reference", action="store_true", help=argparse.SUPPRESS)
    args = parser.parse_args()
    if args.one:
        print(json.dumps(measure(*_size(args.one[0]), args.backend, int(args.one[1]), Path(args.one[2]))))
        return
    if args.one_reference:
        print(json.dumps(reference(args.reference_bits)))
        return
    machine, figures = _machine(), {}
    for raw_bits, output_bits in args.size:
        with tempfile.TemporaryDirectory() as name:
            _write_random(Path(name) / "raw", raw_bits, 1)
            _write_random(Path(name) / "seed", raw_bits + output_bits - 1, 2)
            for threads in args.threads:
                one = ["--one", f"{raw_bits},{output_bits}", str(threads), name]
                runs = [_child(one + (["--backend", args.backend] if args.backend else [])) for _ in range(args.repeat)]
                figures[f"n={raw_bits} m={output_bits} threads={threads}"] = min(runs, key=lambda run: run["seconds"])
    if args.reference_bits:
        plain = ["--one-reference", "--reference-bits", str(args.reference_bits)]
        figures["reference m=1000000, default allocator"] = _child(plain)
        figures[f"reference m=1000000, {' '.join(f'{k}={v}' for k, v in REUSE.items())}"] = _child(plain, REUSE)
    if args.json:
        print(json.dumps({"figures": figures, "machine": machine}, indent=1))
        return
    print(", ".join(f"{key} {value}" for key, value in machine.items()))
    for case, figure in figures.items():
        print(f"{case}: {', '.join(f'{key} {value}' for key, value in figure.items())}")


if __name__ == "__main__":
    main()
