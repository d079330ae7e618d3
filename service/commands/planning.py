"""`plan` and `declare`: what a run may be expected to give, and fixing everything before the rounds exist."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from extractor.errors import InputError
from extractor.model import METHODS, Tally
from service.commands.common import (
    DONE,
    add_command,
    emit,
    grouped,
    json_bytes,
    note,
    read_json,
    real,
    rows,
    several,
    whole,
    write_file,
)
from service.commands.rounds import Reading, add_rig_options, reading_from, reading_of


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "plan",
        plan,
        "expected certified length, or the rounds a length needs",
        """Says how many bits a run may be expected to certify, from its number of rounds, the winning probability the
        rig is expected at (or an earlier tally) and the soundness error. Without --method all methods are compared;
        with --length the number of rounds that length needs is printed. Plan before the rounds exist: parameters
        chosen after looking at the data certify nothing.""",
        """
        bellassay plan --rounds 1e8 --score 0.8 --soundness 1e-10
        bellassay plan --length 1e6 --score 0.8 --soundness 1e-10 \\
            --method factor-closed
        """,
    )
    parser.add_argument("--rounds", type=whole, metavar="N", help="number of rounds of the run")
    parser.add_argument(
        "--length", type=whole, metavar="BITS", help="wanted certified length, in bits; prints the rounds it needs"
    )
    parser.add_argument("--round-rate", type=real, metavar="R",
            help="rounds per second; prints the hours the run takes")
    _add_choices(parser, method_required=False)
    add_rig_options(parser)

    parser = add_command(
        commands,
        "declare",
        declare,
        "fix everything before the rounds exist, as a declaration file",
        """Chooses the method's parameters (score table, order or threshold, length) from the expected winning
        probability or a calibration tally and writes them as a declaration file. The calibration must be earlier
        rounds, never part of the run. With --post the declaration is recorded at the service at once, which gives it
        its time and its place in the ledger; do that before the first round is taken.""",
        """
        bellassay declare --rig "north table" --rounds 1e8 --score 0.8 \\
            --method factor-closed --soundness 1e-10 --out run7.json --post
        """,
    )
    parser.add_argument("--rig", required=True, metavar="NAME", help="name of the apparatus, 1 to 200 characters")
    parser.add_argument("--purpose", default="", metavar="TEXT", help="what the bits are for, up to 200 characters")
    parser.add_argument("--rounds", type=whole, required=True, metavar="N", help="number of rounds of the run")
    parser.add_argument(
        "--length",
        type=whole,
        metavar="BITS",
        help="output length in bits: exact (fixed rule) or the most that is taken (credit rule)",
    )
    _add_choices(parser, method_required=True)
    add_rig_options(parser)
    parser.add_argument(
        "--seed-source",
        choices=("system", "upload"),
        default="system",
        help="seed drawn from the operating system after sealing, or uploaded by you (default system)",
    )
    parser.add_argument("--out", required=True, metavar="D.json", help="file to write; an existing one is not replaced")
    parser.add_argument("--post", action="store_true", help="record it at the service and print its id")
    from service.commands.remote import add_service_options

    add_service_options(parser)


def _add_choices(parser: argparse.ArgumentParser, *, method_required: bool) -> None:
    expectation = parser.add_argument_group("what to expect of the rig",
            "exactly one of: a score, a calibration, a modelled rig")
    expectation.add_argument(
        "--score", type=real, metavar="W", help="expected winning probability, between 0.75 and 0.853553"
    )
    expectation.add_argument(
        "--calibration",
        metavar="COUNTS.json",
        help="tally of earlier rounds, as written by: bellassay tally --json; how it was read is taken over",
    )
    expectation.add_argument("--rig-visibility", type=real, metavar="V",
            help="modelled rig: visibility, 0 to 1 (default 1)")
    expectation.add_argument(
        "--rig-efficiency", type=real, metavar="ETA", help="modelled rig: efficiency of both sides, 0 to 1 (default 1)"
    )
    expectation.add_argument(
        "--rig-pair-probability", type=real, metavar="P",
                help="modelled rig: probability of a pair per round (default 1)"
    )
    expectation.add_argument(
        "--rig-dark-counts", type=real, metavar="D",
                help="modelled rig: probability of a dark count per side (default 0)"
    )
    parser.add_argument(
        "--soundness", type=real, required=True, metavar="E", help="soundness error, in (0, 1), such as 1e-10"
    )
    parser.add_argument("--method", choices=METHODS, required=method_required, help="how the length is certified")
    parser.add_argument(
        "--order", type=real, metavar="A", help="order of the method, in (1, 2] (default: the best one found)"
    )
    parser.add_argument(
        "--output-rule",
        choices=("fixed", "credit"),
        default="fixed",
        help="fixed: exactly the declared length or a refusal; credit: as many bits as are earned (default fixed)",
    )
    parser.add_argument(
        "--disclosure",
        choices=("confidential", "public"),
        default="confidential",
        help="public: report and tally may become known, which is paid for in bits (default confidential)",
    )
    parser.add_argument(
        "--confidence",
        type=real,
        default=0.99,
        metavar="P",
        help="probability with which an honest rig is to reach a fixed length (default 0.99)",
    )


def read_calibration(path: str) -> tuple[Tally, Reading | None]:
    """The tally in a file written by `bellassay tally --json`, and how it was read if the file says so."""
    from extractor.documents import tally_from

    try:
        document = read_json(path)
        reading = None
        if isinstance(document, dict) and "reading" in document:
            reading = reading_from(document["reading"], path)
        return tally_from(document), reading
    except InputError as fault:
        raise InputError(
            fault.message, code=fault.code, file=fault.file or path, row=fault.row, field=fault.field
        ) from None


ALWAYS_WRONG = ("score-out-of-range", "out-of-range", "bad-number", "bad-settings")
RIG_OPTIONS = ("rig_visibility", "rig_efficiency", "rig_pair_probability", "rig_dark_counts")


def _expectation(args: argparse.Namespace) -> tuple[dict[str, Any], Reading]:
    """What the options say about the rig: one of score, calibration (Tally) and model (a rig at its best state and
    angles); and how the rounds are read."""
    modelled = any(getattr(args, name) is not None for name in RIG_OPTIONS)
    if (args.score is not None) + (args.calibration is not None) + modelled != 1:
        raise InputError("give exactly one of --score, --calibration and the --rig-… options", code="bad-usage")
    if args.calibration is not None:
        tally, calibrated = read_calibration(args.calibration)
        return {"calibration": tally}, reading_of(args, calibrated)
    reading = reading_of(args)
    if args.score is not None:
        return {"score": args.score}, reading
    from extractor.bell.rigs import optimal_rig

    visibility, efficiency, pairs, dark = (getattr(args, name) for name in RIG_OPTIONS)
    no_click = reading.no_click if None not in reading.no_click else None
    return {
        "model": optimal_rig(
            1.0 if efficiency is None else efficiency,
            1.0 if pairs is None else pairs,
            1.0 if visibility is None else visibility,
            settings=reading.settings,
            convention=reading.convention,
            no_click=no_click,  # type: ignore[arg-type]
            dark_counts=(dark or 0.0,) * 2,
        )
    }, reading


def plan(args: argparse.Namespace) -> int:
    from extractor import pipeline

    if (args.rounds is None) == (args.length is None):
        raise InputError("give either --rounds (prints the length) or --length (prints the rounds)", code="bad-usage")
    if args.round_rate is not None and args.round_rate <= 0:
        raise InputError("a rate of rounds per second is needed, above 0", code="out-of-range", field="/round_rate")
    expectation, reading = _expectation(args)
    common = dict(
        **pipeline.expect(**expectation, convention=reading.convention),
        settings=reading.settings,
        convention=reading.convention,
        soundness=args.soundness,
        disclosure=args.disclosure,
        output_rule=args.output_rule,
        order=args.order,
        confidence=args.confidence,
    )
    plans, refusals = [], []
    for method in (args.method,) if args.method else METHODS:
        try:
            rounds = args.rounds or pipeline.rounds_for(args.length, method=method, **common)
            document = pipeline.plan(rounds=rounds, method=method, **common).document()
            plans.append(document | {"hours": rounds / args.round_rate / 3600 if args.round_rate else None})
        except InputError as fault:
            only_here = fault.code == "score-out-of-range" and args.score is None    # the calibration may still suit another
            if args.method or fault.code in ALWAYS_WRONG and not only_here:
                raise
            refusals.append({"method": method, "code": fault.code, "detail": str(fault)})
    document = {"score": common["score"], "wanted_length": args.length, "plans": plans, "not_applicable": refusals}
    # One method asked for: its plan is the result. Several: a list of plans.
    result = document["plans"][0] | {"wanted_length": args.length} if args.method else document
    emit(args, result, _plan_lines(args, document))
    return DONE


def _plan_lines(args: argparse.Namespace, document: dict[str, Any]) -> list[str]:
    plans = document["plans"]
    lines = rows(
        [
            *(
                [("wanted length", several(args.length, "bit"))]
                if args.length
                else [("rounds", grouped(args.rounds))]
            ),
            ("winning probability", f"{document['score']:.7f}"),
            ("soundness error", f"{args.soundness:g}"),
            *([("no method exceeds",
                    f"{max(p['limit_rate'] for p in plans):.4g} bits per round (i.i.d. limit)")] if plans else []),
        ]
    )
    if plans:
        lines += ["", f"{'method':<15}{'rounds':>18}{'expected bits':>18}{'reliable bits':>18}{'order':>11}"]
        for p in plans:
            order = f"{p['order']:.6f}" if p["order"] is not None else "-"
            lines.append(
                f"{p['method']:<15}{grouped(p['rounds']):>18}{grouped(p['certified_length']):>18}"
                f"{grouped(p['reliable_length']):>18}{order:>11}"
            )
        lines += ["", f"reliable: reached by an honest rig with probability {args.confidence:g}"]
        if args.method:
            p = plans[0]
            lines += rows(
                [
                    ("credit", f"{p['rate']:.4g} bits per round"),
                    ("penalty", f"{p['penalty_bits']:.1f} bits"),
                    ("seed needed", several(p["seed_bits"], "bit")),
                    ("settings take", f"{grouped(p['settings_bits'])} bits"),
                    ("net balance", f"{grouped(p['net_bits'])} bits: out, less settings and seed"),
                    ("of the limit", f"{100 * p['limit_fraction']:.1f} % reached"),
                    *([("it takes", f"{p['hours']:.3g} hours at {args.round_rate:g} rounds per second")] if p["hours"] else []),
                    *([(f"reached with {chance}", f"{grouped(bits)} bits") for chance,
                            bits in (p["reached"] or {}).items()]),
                ]
            )
        lines += [f"{p['method']}: {p['note']}" for p in plans if p.get("note")]
    lines += [f"{r['method']} does not apply: {r['detail']}" for r in document["not_applicable"]]
    return lines


def declare(args: argparse.Namespace) -> int:
    from extractor import pipeline
    from extractor.documents import declaration_document
    from extractor.seal import canonical

    out = Path(args.out)
    if out.exists():
        raise InputError("exists already; a declaration is never replaced", code="file-exists", file=str(out))
    expectation, reading = _expectation(args)
    declaration = pipeline.declare(
        rig=args.rig,
        purpose=args.purpose,
        rounds=args.rounds,
        method=args.method,
        soundness=args.soundness,
        settings=reading.settings,
        convention=reading.convention,
        no_click=reading.no_click,
        output_rule=args.output_rule,
        output_bits=args.length,
        disclosure=args.disclosure,
        seed_source=args.seed_source,
        order=args.order,
        confidence=args.confidence,
        **expectation,
    )
    document = declaration_document(declaration)
    write_file(out, json_bytes(document), replace=False)
    result: dict[str, Any] = {
        "file": str(out),
        "digest": canonical.digest(document),
        "declaration": document,
        "recorded": None,
    }
    if args.post:
        from service.commands.remote import client_of

        note(f"written: {out}")
        recorded = client_of(args).declare(document)
        result["recorded"] = {name: recorded.get(name) for name in ("id", "digest", "time", "ledger_index")}
    d = declaration
    emit(
        args,
        result,
        rows(
            [
                ("written", out),
                ("digest", result["digest"]),
                ("method", d.method + (f", order {d.order:.6f}" if d.order is not None else "")),
                ("rounds", grouped(d.rounds)),
                ("expected score", f"{d.expected_score:.7f}" if d.expected_score is not None else "not given"),
                ("soundness error", f"{d.soundness:g}"),
                (
                    "output",
                    f"{'exactly' if d.output_rule == 'fixed' else 'at most'} {several(d.output_bits, 'bit')}",
                ),
                *(
                    [("recorded as", result["recorded"]["id"]), ("at", result["recorded"]["time"])]
                    if args.post
                    else [
                        ("recorded", "not yet: submit records it, or use --post; do it before the first round is taken")
                    ]
                ),
            ]
        ),
    )
    return DONE
