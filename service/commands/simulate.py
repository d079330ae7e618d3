"""`simulate`: round files of an invented rig, for planning, rehearsal and tests."""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Iterator
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any

from extractor.errors import InputError
from extractor.model import PLANES, Convention, RoundBatch, Settings
from service.commands.common import (
    DONE,
    Progress,
    add_command,
    duration,
    emit,
    grouped,
    json_bytes,
    real,
    rows,
    setting_pair,
    several,
    whole,
    write_file,
)

RIG_FORMAT = "bellassay simulated rig 1"
FAULTS = {
    "setting-bias": "shift of P(x = 0) and P(y = 0), within -0.5 to 0.5",
    "stuck-a": "outcome 0 or 1 that side a always gives",
    "stuck-b": "outcome 0 or 1 that side b always gives",
    "lost-no-clicks": "share of rounds with a no-click that is missing, 0 to 1",
    "lost-losses": "share of lost test rounds that is missing, 0 to 1",
    "drift": "change of the visibility per million rounds",
}
MEMORY_POLICIES = ("bet-on-rarest", "switch-after-loss", "stop-when-ahead")


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "simulate",
        simulate,
        "write round files of an invented rig",
        """Draws the rounds of an invented rig and writes them as round files, with rig.json saying how they were made.
        The rig is an honest quantum one with the state and angles that give the largest score, unless --local (boxes
        without entanglement), --memory (such boxes that learn from earlier rounds) or a --fault is given. The same
        options and seed give the same rounds, however they are split. Simulated rounds certify nothing.""",
        """
        bellassay simulate --rounds 1e7 --visibility 0.98 --seed 7 --out lab/
        bellassay simulate --rounds 1e6 --local --fault setting-bias=0.02 \\
            --seed 7 --out cheat/
        """,
    )
    parser.add_argument("--rounds", type=whole, required=True, metavar="N", help="number of rounds")
    parser.add_argument(
        "--visibility", type=real, default=1.0, metavar="V", help="1 minus the share of white noise, 0 to 1 (default 1)"
    )
    parser.add_argument(
        "--efficiency",
        type=_one_or_two,
        default=(1.0, 1.0),
        metavar="H[,H]",
        help="detector efficiency, 0 to 1, for both sides or one each (default 1)",
    )
    parser.add_argument(
        "--pair-probability",
        type=real,
        default=1.0,
        metavar="M",
        help="chance that a round holds a pair, 0 to 1 (default 1)",
    )
    parser.add_argument(
        "--dark-counts",
        type=real,
        default=0.0,
        metavar="D",
        help="chance that a side which sees nothing clicks all the same, 0 to 1 (default 0)",
    )
    parser.add_argument(
        "--state-angle",
        type=real,
        metavar="RAD",
        help="state cos|00> + sin|11> in radians; 0.785398 is maximally entangled (default: the best)",
    )
    parser.add_argument(
        "--test-probability",
        type=real,
        default=1.0,
        metavar="G",
        help="probability of a test round, in (0, 1] (default 1)",
    )
    parser.add_argument(
        "--minus",
        type=setting_pair,
        default=(1, 1),
        metavar="XY",
        help="setting pair with the minus sign in S: 00, 01, 10 or 11 (default 11)",
    )
    parser.add_argument("--flip", action="store_true", help="b inverted, which turns the sign of S")
    kind = parser.add_mutually_exclusive_group()
    kind.add_argument(
        "--local", action="store_true", help="boxes without entanglement, at the local bound (score 0.75)"
    )
    kind.add_argument(
        "--memory",
        choices=MEMORY_POLICIES,
        metavar="POLICY",
        help=f"such boxes with memory: {', '.join(MEMORY_POLICIES)}",
    )
    parser.add_argument(
        "--fault",
        action="append",
        default=[],
        type=_fault,
        metavar="NAME=VALUE",
        help="may be repeated. " + "; ".join(f"{name}: {text}" for name, text in FAULTS.items()),
    )
    parser.add_argument(
        "--seed", type=whole, required=True, metavar="K", help="whole number >= 0 from which everything is drawn"
    )
    parser.add_argument("--segments", type=whole, default=1, metavar="S", help="number of files (default 1)")
    parser.add_argument(
        "--format",
        choices=("npz", "npy", "csv"),
        default="npz",
        help="npz: packed planes, 5/8 byte per round; npy: 5 bytes; csv: 10 bytes (default npz)",
    )
    parser.add_argument("--out", required=True, metavar="DIR", help="folder for the files; made if missing")


def _one_or_two(text: str) -> tuple[float, float]:
    parts = [real(part) for part in text.split(",")]
    if len(parts) > 2:
        raise argparse.ArgumentTypeError(f"{text!r} is neither one number nor two with a comma between")
    return parts[0], parts[-1]


def _fault(text: str) -> tuple[str, float]:
    name, equals, value = text.partition("=")
    if name not in FAULTS or not equals:
        raise argparse.ArgumentTypeError(f"{text!r} is not NAME=VALUE with a name among {', '.join(FAULTS)}")
    return name, real(value)


def build_rig(args: argparse.Namespace) -> Any:
    """The rig the options describe. Errors raised: InputError for options that do not go together."""
    from extractor.bell import rigs
    from extractor.bell.strategies import STRATEGIES, losing_at

    settings = Settings(test_probability=args.test_probability)
    convention = Convention(args.minus, args.flip)
    faults = dict(args.fault)
    bias = (faults.get("setting-bias", 0.0),) * 2
    if args.local or args.memory:
        allowed = {"setting-bias", "lost-losses"} if args.local else {"setting-bias"}
        if unfit := sorted(set(faults) - allowed):
            raise InputError(f"the fault {unfit[0]} is for a quantum rig only", code="bad-usage", field="--fault")
        if args.memory:
            return rigs.MemoryLocalRig(args.memory, settings, convention, setting_bias=bias)
        best = losing_at(convention)
        return rigs.LocalRig(
            tuple(float(strategy in best) for strategy in range(STRATEGIES)),
            settings,
            convention,
            bias,
            faults.get("lost-losses", 0.0),
        )
    rig = rigs.optimal_rig(
        args.efficiency,
        args.pair_probability,
        args.visibility,
        settings=settings,
        convention=convention,
        dark_counts=(args.dark_counts,) * 2,
    )
    if args.state_angle is not None:
        rig = replace(rig, state_angle=args.state_angle, angles="optimal")
    return replace(
        rig,
        setting_bias=bias,
        stuck=(_stuck(faults, "stuck-a"), _stuck(faults, "stuck-b")),
        dropped_no_clicks=faults.get("lost-no-clicks", 0.0),
        dropped_losses=faults.get("lost-losses", 0.0),
        visibility_drift=faults.get("drift", 0.0),
    )


def _stuck(faults: dict[str, float], name: str) -> int | None:
    value = faults.get(name)
    return int(value) if value in (0.0, 1.0) else value  # type: ignore[return-value]    # the rig refuses anything else


def simulate(args: argparse.Namespace) -> int:
    from extractor.bell import rigs
    from extractor.records import writers

    if args.seed < 0:
        raise InputError("must not be negative", code="out-of-range", field="--seed")
    if args.rounds < 1:
        raise InputError("must be at least 1", code="out-of-range", field="--rounds")
    if not 1 <= args.segments <= 9999 or args.segments > max(1, args.rounds // 8):
        raise InputError(
            f"{args.rounds} rounds can be split into 1 to {max(1, min(9999, args.rounds // 8))} files",
            code="out-of-range",
            field="--segments",
        )
    rig = build_rig(args)
    write: Callable[..., int] = getattr(writers, f"write_{args.format}")
    out = Path(args.out)
    out.mkdir(parents=True, exist_ok=True)
    with_t = args.test_probability < 1.0
    names = [f"rounds-{k:04d}.{args.format}" for k in range(1, args.segments + 1)]
    if present := [name for name in names if (out / name).exists()]:
        raise InputError(
            "exists already; choose another folder or remove it", code="file-exists", file=str(out / present[0])
        )
    files, started = [], time.monotonic()
    with Progress("simulating", args.rounds, "rounds") as progress:
        batches = _counted(rigs.simulate(rig, args.rounds, args.seed), progress.advance)
        for name, segment in zip(names, split(batches, args.rounds, args.segments)):
            part = out / (name + ".part")
            rounds = write(part, segment, with_t=with_t)
            part.replace(out / name)
            files.append({"file": name, "rounds": rounds})
    seconds = time.monotonic() - started
    memory = isinstance(rig, rigs.MemoryLocalRig)
    document = {
        "format": RIG_FORMAT,
        "kind": "memory" if memory else "local" if isinstance(rig, rigs.LocalRig) else "quantum",
        "rig": asdict(rig),
        "rounds": args.rounds,
        "seed": args.seed,
        "files": files,
        "winning_probability": None if memory else rig.winning_probability,
        "chsh": None if memory else rig.chsh,
    }
    write_file(out / "rig.json", json_bytes(document))
    rate = args.rounds / max(seconds, 1e-9)
    emit(
        args,
        document | {"out": str(out), "seconds": seconds, "rounds_per_second": rate},
        rows(
            [
                ("rounds", f"{grouped(args.rounds)} in {several(len(files), 'file')}"),
                ("files", out / files[0]["file"] if len(files) == 1 else f"{out / names[0]} to {names[-1]}"),
                ("how", out / "rig.json"),
                *([] if memory else [("score of the rig", f"{rig.winning_probability:.7f} (S = {rig.chsh:.6f})")]),
                ("took", f"{duration(seconds)}, {rate:.3g} rounds/s"),
            ]
        ),
    )
    return DONE


def _counted(batches: Iterator[RoundBatch], advance: Callable[[int], None]) -> Iterator[RoundBatch]:
    for batch in batches:
        advance(batch.rounds)  # before handing on: nobody comes back after the last one
        yield batch


def split(batches: Iterator[RoundBatch], rounds: int, segments: int) -> Iterator[Iterator[RoundBatch]]:
    """The rounds in `segments` parts of nearly equal size, each a multiple of 8 but the last, so whole bytes are cut.

    Each part must be read to its end before the next is asked for. Batches hold multiples of 8 rounds but the last one.
    """
    rest: RoundBatch | None = None
    position = 0

    def one(end: int) -> Iterator[RoundBatch]:
        nonlocal rest, position
        while position < end:
            batch = rest if rest is not None else next(batches)
            take = min(batch.rounds, end - position)
            rest = None
            if take < batch.rounds:
                rest = RoundBatch(batch.rounds - take, {name: batch.planes[name][take // 8 :] for name in PLANES})
                batch = RoundBatch(take, {name: batch.planes[name][: take // 8] for name in PLANES})
            position += take
            yield batch

    for k in range(1, segments + 1):
        yield one(rounds if k == segments else rounds * k // segments // 8 * 8)
