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
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from service.client import Client

ROOT = Path(__file__).resolve().parents[1]
RIG = '--rig "Lantern table, Saltmarsh Metrology"'
LIGHT = "--visibility 0.998 --efficiency 0.78"  # heralded pairs: every round holds one, about one click in five is missing
CALIBRATION_ROUNDS = 1_000_000
STOP_S = 60
BELLASSAY = (sys.executable, "-m", "service.cli")


class Stopped(Exception):
    """A step of the demo did not end as it should; the text says which."""


class Demo:
    """One demo in a new folder job-1, job-2, ... of `data`; the service's own data stay in `data`/service."""

    def __init__(self, data: Path, rounds: int, segments: int, keep: bool) -> None:
        self.rounds, self.segments, self.keep, self.begin = rounds, segments, keep, time.monotonic()
        data = data.resolve()
        data.mkdir(parents=True, exist_ok=True)
        number = 1 + max((int(path.name[4:]) for path in data.glob("job-*") if path.name[4:].isdigit()), default=0)
        self.job = data / f"job-{number}"
        self.job.mkdir()
        self.env = {name: value for name, value in os.environ.items() if not name.startswith("BELLASSAY_")}

    def command(self, line: str, *, json_result: bool = True) -> dict:
        """Show and run one command in the job's folder; its JSON result. Progress and remarks appear as they come."""
        say(f"\n$ bellassay {line}")
        words = [name for word in shlex.split(line) for name in self.matching(word)]
        done = subprocess.run(
            [*BELLASSAY, *words, *(["--json"] if json_result else [])],
            env=self.env, cwd=self.job, text=True, stdout=subprocess.PIPE if json_result else None,
        )  # fmt: skip
        if done.returncode:
            raise Stopped(f"bellassay {words[0]} ended with exit code {done.returncode}")
        return json.loads(done.stdout) if json_result else {}

    def matching(self, word: str) -> list[str]:
        """What a shell makes of a word with a star."""
        return sorted(str(path.relative_to(self.job)) for path in self.job.glob(word)) if "*" in word else [word]

    @contextmanager
    def service(self) -> Iterator[str]:
        """A service on a free port for as long as the block lasts; its address."""
        say("\n$ bellassay serve --data ../service --port 0 &")
        with open(self.job / "service.log", "wb") as log:
            process = subprocess.Popen(
                [*BELLASSAY, *"serve --data ../service --port 0 --json".split()],
                env=self.env, cwd=self.job, text=True, stdout=subprocess.PIPE, stderr=log,
            )  # fmt: skip
        try:
            line = process.stdout.readline()
            if not line:
                raise Stopped(f"the service did not start; its log:\n{(self.job / 'service.log').read_text()[-3000:]}")
            yield json.loads(line)["url"]
        finally:
            process.terminate()
            try:
                process.wait(STOP_S)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()

    def run(self) -> None:
        say(f"$ cd {shlex.quote(str(self.job))}")
        with self.service() as url:
            self.env["BELLASSAY_URL"] = url
            say(f"the service listens on {url}")
            token = self.command("token create demo --data ../service")["token"]
            self.env["BELLASSAY_TOKEN"] = token
            (self.job / "ledger.key").write_text(Client(url, token).ledger_key() + "\n")
            say("\nThe auditor is given the ledger's key now: ledger.key")

            say("\nFirst the calibration: earlier rounds, which never become part of the run.")
            self.command(f"simulate --rounds {CALIBRATION_ROUNDS} {LIGHT} --seed 1 --out earlier")
            counts = self.command("tally earlier/rounds-*.npz")
            (self.job / "calibration.json").write_text(json.dumps(counts))

            say("\nThe declaration is recorded before the first round of the run exists.")
            recorded = self.command(
                f"declare {RIG} --rounds {self.rounds} --calibration calibration.json --soundness 1e-10 "
                "--method factor-closed --output-rule credit --out declaration.json --post"
            )["recorded"]
            say(f"recorded at {recorded['time']} as {recorded['id']}")

            say("\nNow the rounds are taken.")
            seed = int.from_bytes(os.urandom(4), "big")
            taken = self.command(
                f"simulate --rounds {self.rounds} --segments {self.segments} {LIGHT} --seed {seed} --out rounds"
            )
            run = self.command(f"submit rounds/rounds-*.npz --declaration {recorded['id']} --watch")
            self.command(f"collect {run['id']} --out collected")
            say("\nThe auditor's part, without the service:")
            self.command(
                "verify collected/bundle.zip --key ledger.key --rounds rounds/rounds-*.npz --seed collected/seed.bin "
                "--bits collected/bits.bin --bits-salt collected/bits-salt.hex",
                json_result=False,
            )
            self.summary(run, taken)
            if self.keep:
                say(f"\nThe service goes on at {url} until you press Ctrl-C. The token:\n  {token}")
                with suppress(KeyboardInterrupt):
                    while True:
                        time.sleep(3600)

    def summary(self, run: dict, taken: dict) -> None:
        certificate = json.loads((self.job / "collected/certificate.json").read_text())
        credit = sum(term["bits"] for term in certificate["terms"] if term["name"] == "credit")
        score = run["score"]
        say("")
        for name, value in (
            ("rounds", f"{grouped(certificate['rounds'])}, simulated at {taken['rounds_per_second']:.3g} per second"),
            ("score", f"{score['winning_probability']:.7f} ± {score['winning_probability_error']:.7f}"),
            ("CHSH value S", f"{score['chsh']:.6f} ± {score['chsh_error']:.6f}"),
            ("credit", f"{grouped(credit)} bits"),
            ("penalty", f"{grouped(credit - certificate['available_bits'])} bits"),
            ("soundness error", f"{certificate['soundness']:g}"),
            ("certified length", f"{grouped(certificate['certified_length'])} bits"),
            ("stages", ", ".join(f"{stage} {seconds:.1f} s" for stage, seconds in run["stage_seconds"].items())),
            ("whole demo", f"{time.monotonic() - self.begin:.0f} s"),
            ("files", f"{self.job / 'collected'}:"),
            ("", ", ".join(sorted(path.name for path in (self.job / "collected").iterdir()))),
        ):
            say(f"{name:<18}{value}")


def grouped(number: float) -> str:
    return f"{number:,.0f}".replace(",", " ")


def say(text: str) -> None:
    print(text, flush=True)


def whole(text: str) -> int:
    try:
        value = float(text)
    except ValueError:
        value = 0.5
    if not (1 <= value < 2**53 and value == int(value)):
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
    args = parser.parse_args()
    try:
        Demo(args.data, args.rounds, args.segments, args.keep).run()
    except Stopped as trouble:
        say(f"\nThe demo stopped: {trouble}")
        return 1
    except KeyboardInterrupt:
        say("\ninterrupted")
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main())
