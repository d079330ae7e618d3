"""How the commands read round files, and the options that say it."""

from __future__ import annotations

import argparse
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

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


def reading_of(args: argparse.Namespace) -> Reading:
    """What the options say. Errors raised: InputError if a declaration is given together with values it fixes."""
    single = ("minus", "flip", "no_click_a", "no_click_b", "test_probability", "generation", "distribution", "bias")
    given = [name for name in single if getattr(args, name) is not None]
    if getattr(args, "declaration", None):
        if given:
            option = "--" + given[0].replace("_", "-")
            raise InputError(f"{option} is fixed by the declaration; give one or the other", code="bad-usage")
        declaration = read_declaration(args.declaration)
        return Reading(declaration.settings, declaration.convention, declaration.no_click)

    def value(name: str, default: object) -> object:
        return default if getattr(args, name) is None else getattr(args, name)

    settings = Settings(
        value("test_probability", 1.0),
        value("distribution", (0.25,) * 4),  # type: ignore[arg-type]
        value("generation", (0, 0)),
        value("bias", 0.0),
    )  # type: ignore[arg-type]
    return Reading(settings, Convention(args.minus or (1, 1), bool(args.flip)), (args.no_click_a, args.no_click_b))


def opened(paths: Sequence[str | Path]) -> Iterator[tuple[BinaryIO, str]]:
    """Each file open while it is read, with its name for error texts: what `pipeline.batches_of` takes."""
    for path in paths:
        with open(path, "rb") as file:
            yield file, Path(path).name
