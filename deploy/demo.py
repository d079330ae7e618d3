"""The demo job: what a lab does with `bellassay`, command by command, against a service of its own.

Started by `deploy/demo`. Every command is shown as it could be typed. Rig and lab are invented.
"""

from __future__ import annotations

import argparse
import json
import os
import shlex
import subprocess
import sys
import time
from contextlib import contextmanager
from collections.abc import Iterator
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
RIG = "Lantern table, Saltmarsh Metrology"
# Pairs are heralded (every round holds one), so the score is far above the local bound.
OPTIONS = ("--visibility", "0.985", "--efficiency", "0.97,0.96")
CALIBRATION_ROUNDS = "1e6"
START_S = 60


class Stopped(Exception):
    """A step of the demo did not end as it should; the text says which."""


class Demo:
    def __init__(self, args: argparse.Namespace) -> None:
        self.args = args
        self.begin = time.monotonic()
        self.data = args.data.resolve()
        self.data.mkdir(parents=True, exist_ok=True)
        number = 1 + max((int(path.name[4:]) for path in self.data.glob("job-*") if path.name[4:].isdigit()), default=0)
        self.job = self.data / f"job-{number}"
        self.job.mkdir()
        self.env = dict(os.environ)
        for name in ("BELLASSAY_URL", "BELLASSAY_TOKEN"):
            self.env.pop(name, None)

    def command(self, *words: object, json_result: bool = True) -> dict:
        """Run one command; its JSON result. Progress goes to the terminal as it comes."""
        words = tuple(str(word) for word in words)
        say(f"\n$ bellassay {shlex.join(words)}")
        done = subprocess.run(
            [sys.executable, "-m", "service.cli", *words, *(["--json"] if json_result else [])],
            env=self.env,
            cwd=self.job,
            stdout=subprocess.PIPE if json_result else None,
            text=True,
        )
        if done.returncode:
            raise Stopped(f"bellassay {words[0]} ended with exit code {done.returncode}")
        return json.loads(done.stdout) if json_result else {}

    @contextmanager
    def service(self) -> Iterator[str]:
        """A service on a free port for as long as the block lasts; its address."""
        say(f"\n$ bellassay serve --data {shlex.quote(str(self.data / 'service'))} --port 0 &")
        with open(self.job / "service.log", "wb") as log:
            process = subprocess.Popen(
                [
                    sys.executable,
                    "-m",
                    "service.cli",
                    "serve",
                    "--data",
                    str(self.data / "service"),
                    "--port",
                    "0",
                    "--json",
                ],
                env=self.env,
                cwd=self.job,
                stdout=subprocess.PIPE,
                stderr=log,
                text=True,
            )
        try:
            line = process.stdout.readline()
            if not line:
                process.wait(START_S)
                raise Stopped(f"the service did not start; its log:\n{(self.job / 'service.log').read_text()[-3000:]}")
            yield json.loads(line)["url"]
        finally:
            process.terminate()
            try:
                process.wait(60)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()

    def run(self) -> None:
        rounds, segments = self.args.rounds, self.args.segments
        with self.service() as url:
            self.env["BELLASSAY_URL"] = url
            say(f"the service listens on {url}")
            token = self.command(
                "token",
                "create",
                "demo",
                "--scope",
                "submit",
                "--scope",
                "collect",
                "--scope",
                "audit",
                "--data",
                self.data / "service",
            )
            self.env["BELLASSAY_TOKEN"] = token["token"]

            say("\nFirst the calibration: earlier rounds, which never become part of the run.")
            self.command("simulate", "--rounds", CALIBRATION_ROUNDS, *OPTIONS, "--seed", 1, "--out", "calibration")
            counts = self.command("tally", "calibration/rounds-0001.npz")
            (self.job / "calibration.json").write_text(json.dumps(counts))

            say("\nThe declaration is recorded before the first round of the run exists.")
            declared = self.command(
                "declare",
                "--rig",
                RIG,
                "--purpose",
                "demo",
                "--rounds",
                rounds,
                "--calibration",
                "calibration.json",
                "--method",
                "factor-closed",
                "--output-rule",
                "credit",
                "--soundness",
                "1e-10",
                "--out",
                "declaration.json",
                "--post",
            )
            say(f"recorded at {declared['recorded']['time']} as {declared['recorded']['id']}")

            say("\nNow the rounds are taken.")
            simulated = self.command(
                "simulate",
                "--rounds",
                rounds,
                "--segments",
                segments,
                *OPTIONS,
                "--seed",
                int.from_bytes(os.urandom(4), "big"),
                "--out",
                "rounds",
            )
            files = [f"rounds/{item['file']}" for item in simulated["files"]]
            run = self.command("submit", *files, "--declaration", declared["recorded"]["id"], "--watch")
            if run["state"] != "certified":
                raise Stopped(f"the run ended as {run['state']}: {run['message']}")
            self.command("collect", run["id"], "--out", "collected")
            say("\nThe auditor's part, without the service:")
            self.command(
                "verify",
                "collected/bundle.zip",
                "--rounds",
                *files,
                "--seed",
                "collected/seed.bin",
                "--bits",
                "collected/bits.bin",
                "--bits-salt",
                "collected/bits-salt.hex",
                json_result=False,
            )
            self.summary(run, simulated)
            if self.args.keep:
                say(f"\nThe service goes on at {url} until you press Ctrl-C. Token:\n  {token['token']}")
                with suppress_interrupt():
                    while True:
                        time.sleep(3600)

    def summary(self, run: dict, simulated: dict) -> None:
        certificate = json.loads((self.job / "collected/certificate.json").read_text())
        credit = sum(term["bits"] for term in certificate["terms"] if term["bits"] > 0)
        penalty = -sum(term["bits"] for term in certificate["terms"] if term["bits"] < 0)
        stages = ", ".join(f"{stage} {seconds:.1f} s" for stage, seconds in run["stage_seconds"].items())
        lines = [
            ("rounds", f"{certificate['rounds']:,} ({simulated['rounds_per_second']:.3g} per second simulated)"),
            ("score", f"{run['score']['winning_probability']:.7f} (CHSH S = {run['score']['chsh']:.6f})"),
            ("credit", f"{credit:,.1f} bits"),
            ("penalty", f"{penalty:,.1f} bits for soundness error {certificate['soundness']:g}"),
            ("certified length", f"{certificate['certified_length']:,} bits"),
            ("stages", stages),
            ("whole demo", f"{time.monotonic() - self.begin:.0f} s"),
            ("bits", str(self.job / "collected" / "bits.bin")),
            ("audit documents", f"certificate.json, report.json, bundle.zip in {self.job / 'collected'}"),
            ("service's data", str(self.data / "service")),
        ]
        print()
        for name, value in lines:
            print(
                f"{name:<18}{value}".replace(",", " ")
                if name in ("rounds", "credit", "penalty", "certified length")
                else f"{name:<18}{value}"
            )
        sys.stdout.flush()


@contextmanager
def suppress_interrupt() -> Iterator[None]:
    try:
        yield
    except KeyboardInterrupt:
        say("\nstopping")


def say(text: str) -> None:
    print(text, flush=True)


def whole(text: str) -> int:
    value = float(text)
    if value != int(value) or value < 1:
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number >= 1")
    return int(value)


def main() -> int:
    parser = argparse.ArgumentParser(
        prog="deploy/demo",
        allow_abbrev=False,
        description="The whole job on an invented rig, against a service of its own.",
    )
    parser.add_argument("--rounds", type=whole, default=10**8, metavar="N", help="rounds of the run (default 1e8)")
    parser.add_argument("--segments", type=whole, default=4, metavar="S", help="files they are taken in (default 4)")
    parser.add_argument(
        "--data",
        type=Path,
        default=ROOT / "demo-data",
        metavar="DIR",
        help="folder for everything; each demo makes a new job folder there (default: demo-data of the project)",
    )
    parser.add_argument("--keep", action="store_true", help="leave the service running at the end, until Ctrl-C")
    try:
        Demo(parser.parse_args()).run()
    except Stopped as trouble:
        say(f"\nThe demo stopped: {trouble}")
        return 1
    except KeyboardInterrupt:
        say("\ninterrupted")
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main())
