"""`tally`: count the rounds of files, score them, and say what looks odd."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING, Any

from extractor.model import SETTING_PAIRS, Tally
from service.commands.common import DONE, Progress, add_command, bullets, emit, grouped, note, rows
from service.commands.rounds import Reading, add_reading_options, no_clicks_in, opened, reading_of

if TYPE_CHECKING:
    from extractor.bell.score import Score


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "tally",
        tally,
        "count the rounds of files and score them",
        """Reads round files (NPZ, NPY or CSV), checks every value, counts all cells (t, x, y, a, b) and prints the
        winning probability, the CHSH value, a p-value against local models with memory, and diagnostics. With --json
        the output is also what --calibration of plan and declare takes; it says how the rounds were read, so that these
        commands need not be told again. Several files are read as one run, in the order given.""",
        """
        bellassay tally calibration.npz --no-click-a 0 --no-click-b 0
        bellassay tally calibration.npz --json > calibration.json
        """,
    )
    parser.add_argument("files", nargs="+", metavar="FILE", help="round files, in the order they were taken")
    parser.add_argument("--calibration", metavar="COUNTS.json", help="compare with this earlier tally")
    add_reading_options(parser)


def tally(args: argparse.Namespace) -> int:
    from extractor import pipeline
    from extractor.bell.diagnostics import diagnose
    from extractor.bell.score import score
    from extractor.documents import tally_counts
    from service.commands.planning import read_calibration

    reading = reading_of(args)
    calibration, calibrated = read_calibration(args.calibration) if args.calibration else (None, None)
    if calibrated is not None and calibrated != reading:
        note(f"caution: {args.calibration} was read in another way than these rounds; comparing them says little")
    with Progress("reading", None, "rounds") as progress:
        total, digest = pipeline.read_run(pipeline.batches_of(opened(args.files), reading.rules), progress.move_to)
    no_clicks = no_clicks_in(args.files, reading.rules)
    result = score(total, reading.convention, reading.settings, reading.no_click)
    diagnostics = diagnose(total, reading.convention, reading.settings, calibration)
    document = {
        "counts": tally_counts(total),
        "rounds": total.rounds,
        "no_clicks": list(no_clicks),
        "reading": reading.document(),
        "records_digest": digest,
        "score": result.winning_probability,
        "score_error": result.winning_probability_error,
        "chsh": result.chsh,
        "chsh_error": result.chsh_error,
        "p_value": result.p_value,
        "details": result.document(),
        "diagnostics": [diagnostic.document() for diagnostic in diagnostics],
    }
    emit(args, document, _lines(total, result, document, reading))
    return DONE


def _lines(total: Tally, result: Score, document: dict[str, Any], reading: Reading) -> list[str]:
    lines: list[tuple[str, object]] = [("rounds", grouped(total.rounds)), ("test rounds", grouped(result.test_rounds))]
    if result.chsh is None:
        lines.append(("CHSH value S", result.note))
    else:
        lines += [
            ("winning probability", f"{result.winning_probability:.7f} ± {result.winning_probability_error:.7f}"),
            ("CHSH value S", f"{result.chsh:.6f} ± {result.chsh_error:.6f}"),
            ("", "local at most 2, quantum at most 2.828427"),
        ]
    if result.p_value is None:
        lines.append(("p-value", result.p_value_note))
    else:
        lines.append(("p-value", f"{_small(result.log10_p_value)} for local models, with memory"))
    if result.decisive.log10_p_value is not None:
        lines.append(("p-value, decisive", f"{_small(result.decisive.log10_p_value)}, from the decisive rounds alone"))
    on_a, on_b = document["no_clicks"]
    counted_as = ", ".join(
        f"{side} counted as {value}" for side, value in zip("ab", reading.no_click) if value is not None
    )
    lines += [
        (
            "no-clicks",
            f"{grouped(on_a)} on side a, {grouped(on_b)} on side b" + (f" ({counted_as})" if counted_as else ""),
        ),
        ("read with", _reading_text(reading)),
    ]
    text = rows([*lines, ("digest of rounds", document["records_digest"])])
    counts = total.test_counts()
    text += [
        "",
        "test rounds by settings (rows) and outcomes a b (columns)",
        f"{'':4}{'00':>16}{'01':>16}{'10':>16}{'11':>16}",
    ]
    for x, y in SETTING_PAIRS:
        text.append(f"{x}{y}  " + "".join(f"{grouped(int(n)):>16}" for n in counts[x, y].reshape(-1)))
    flagged = [item for item in document["diagnostics"] if item["flag"]]
    text += ["", "diagnostics (they certify nothing)" if flagged else "diagnostics: nothing odd (they certify nothing)"]
    text += bullets(item["sentence"] for item in flagged)
    return text


def _reading_text(reading: Reading) -> str:
    """Settings and convention in one line."""
    settings, minus = reading.settings, reading.convention.minus
    parts = [f"minus sign on settings {minus[0]}{minus[1]}" + (", b inverted" if reading.convention.flip else "")]
    if settings.test_probability < 1:
        x, y = settings.generation
        parts.append(f"test probability {settings.test_probability:g}, generation settings {x}{y}")
    parts.append("settings with probabilities " + ", ".join(f"{p:g}" for p in settings.distribution))
    if settings.bias:
        parts.append(f"bias up to {settings.bias:g}")
    return "; ".join(parts)


def _small(log10: float) -> str:
    """A p-value by its decimal logarithm, which may be far below the smallest double."""
    return f"{10**log10:.3g}" if log10 > -300 else f"10^{log10:.0f}"
