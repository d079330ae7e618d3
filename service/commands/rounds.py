"""How the commands read round files, and the options that say it."""

from __future__ import annotations

import argparse
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

from extractor.errors import InputError
from extractor.model import Convention, RoundRules, Settings
from service.commands.common import four_probabilities, read_declaration, real, setting_pair


def add_reading_options(parser: argparse.ArgumentParser) -> None:
    """--declaration, or the single values a declaration would fix."""
    parser.add_argument(
        "--declaration", metavar="D.json", help="read settings, convention and no-click values from this declaration"
    )
    add_rig_options(parser)


def add_rig_options(parser: argparse.ArgumentParser) -> None:
    """The single values of settings, convention and no-clicks; every default is None = not given."""
    parser.add_argument(
        "--minus",
        type=setting_pair,
        metavar="XY",
        help="setting pair with the minus sign in S: 00, 01, 10 or 11 (default 11)",
    )
    parser.add_argument("--flip", action="store_true", default=None, help="read b inverted, which turns the sign of S")
    parser.add_argument(
        "--no-click-a",
        type=int,
        choices=(0, 1),
        metavar="BIT",
        help="outcome a no-click (2) on side a counts as: 0 or 1 (default: a no-click is an error)",
    )
    parser.add_argument("--no-click-b", type=int, choices=(0, 1), metavar="BIT", help="the same for side b")
    parser.add_argument(
        "--test-probability", type=real, metavar="G", help="probability of a test round, in (0, 1] (default 1)"
    )
    parser.add_argument(
        "--generation", type=setting_pair, metavar="XY", help="settings of generation rounds (default 00)"
    )
    parser.add_argument(
        "--distribution",
        type=four_probabilities,
        metavar="P,P,P,P",
        help="probabilities of the settings 00, 01, 10, 11 of a test round (default 0.25 each)",
    )
    parser.add_argument(
        "--bias",
        type=real,
        metavar="TAU",
        help="largest deviation of a setting bit's probability, 0 to 0.25 (default 0)",
    )


@dataclass(frozen=True)
class Reading:
    """How rounds are to be read and scored."""

    settings: Settings
    convention: Convention
    no_click: tuple[int | None, int | None]

    @property
    def rules(self) -> RoundRules:
        return RoundRules(self.settings.test_probability, self.settings.generation, self.no_click)

    def document(self) -> dict[str, Any]:
        """By the names of the options; `reading_from` is the way back."""
        settings = self.settings
        return {
            "test_probability": settings.test_probability,
            "distribution": list(settings.distribution),
            "generation": list(settings.generation),
            "bias": settings.bias,
            "minus": list(self.convention.minus),
            "flip": self.convention.flip,
            "no_click_a": self.no_click[0],
            "no_click_b": self.no_click[1],
        }


READING_OPTIONS = tuple(Reading(Settings(), Convention(), (None, None)).document())


def reading_from(document: object, file: str) -> Reading:
    """The reading in a tally file. Errors raised: InputError with the file and the place."""
    try:
        if not isinstance(document, Mapping) or set(document) != set(READING_OPTIONS):
            raise InputError(f"must have exactly the fields {', '.join(READING_OPTIONS)}", field="/reading")
        for name in ("distribution", "generation", "minus"):
            if not isinstance(document[name], list):
                raise InputError("must be a list", field=f"/reading/{name}")
        if not isinstance(document["flip"], bool):
            raise InputError("is neither true nor false", field="/reading/flip")
        for name in ("no_click_a", "no_click_b"):
            if document[name] is not None and (type(document[name]) is not int or document[name] not in (0, 1)):
                raise InputError("is none of 0, 1 and null", field=f"/reading/{name}")
        return Reading(
            Settings(
                document["test_probability"],
                tuple(document["distribution"]),  # type: ignore[arg-type]
                tuple(document["generation"]),  # type: ignore[arg-type]
                document["bias"],
            ),
            Convention(tuple(document["minus"]), document["flip"]),  # type: ignore[arg-type]
            (document["no_click_a"], document["no_click_b"]),
        )
    except InputError as fault:
        place = fault.field if (fault.field or "").startswith("/reading") else "/reading"
        raise InputError(fault.message, code="bad-reading", file=file, field=place) from None


def reading_of(args: argparse.Namespace, calibrated: Reading | None = None) -> Reading:
    """What the options say, and where they say nothing, `calibrated`: how the calibration was read (else the defaults).

    Errors raised: InputError if a declaration is given together with values it fixes, or a value that contradicts
    the calibration.
    """
    given = [name for name in READING_OPTIONS if getattr(args, name) is not None]
    if getattr(args, "declaration", None):
        if given:
            raise InputError(
                f"{option_of(given[0])} is fixed by the declaration; give one or the other", code="bad-usage"
            )
        declaration = read_declaration(args.declaration)
        return Reading(declaration.settings, declaration.convention, declaration.no_click)

    base = (calibrated or Reading(Settings(), Convention(), (None, None))).document()
    values = dict(base)
    for name in given:
        value = getattr(args, name)
        values[name] = list(value) if isinstance(value, tuple) else value
        if calibrated is not None and values[name] != base[name]:
            raise InputError(
                f"{option_of(name)} ({_text(values[name])}) contradicts how this calibration was read "
                f"({_text(base[name])}): leave the option out, or tally the calibration rounds again with it",
                code="calibration-contradicted",
                file=args.calibration,
            )
    return Reading(
        Settings(
            values["test_probability"], tuple(values["distribution"]), tuple(values["generation"]), values["bias"]
        ),
        Convention(tuple(values["minus"]), values["flip"]),
        (values["no_click_a"], values["no_click_b"]),
    )


def option_of(name: str) -> str:
    return "--" + name.replace("_", "-")


def _text(value: Any) -> str:
    """The value of an option as it is typed."""
    if isinstance(value, list):
        return ("," if len(value) > 2 else "").join(f"{part:g}" for part in value)
    if value is None or isinstance(value, bool):
        return "given" if value else "not given"
    return f"{value:g}"


def no_clicks_in(paths: Sequence[str | Path], rules: RoundRules) -> tuple[int, int]:
    """How many outcomes on side a and on side b are no-clicks. Reads the files, unless every no-click is an error."""
    from extractor.records.rounds import open_rounds

    total = [0, 0]
    if rules.no_click != (None, None):
        for file, name in opened(paths):
            source = open_rounds(file, name, rules)
            for _ in source.batches():
                pass
            total = [total[side] + source.no_clicks[side] for side in (0, 1)]
    return total[0], total[1]


def opened(paths: Sequence[str | Path]) -> Iterator[tuple[BinaryIO, str]]:
    """Each file open while it is read, with its name for error texts: what `pipeline.batches_of` takes."""
    for path in paths:
        with open(path, "rb") as file:
            yield file, Path(path).name
