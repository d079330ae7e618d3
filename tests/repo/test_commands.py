"""Every command explains itself, in the terminal and in the README."""

from __future__ import annotations

import argparse
import re
from pathlib import Path

import pytest

from service.cli import build_parser

ROOT = Path(__file__).resolve().parents[2]
COMMANDS = (
    "serve",
    "work",
    "simulate",
    "tally",
    "plan",
    "declare",
    "certify",
    "submit",
    "watch",
    "collect",
    "verify",
    "token",
)
WITHOUT_RESULT = ("serve", "work")


def leaves(parser: argparse.ArgumentParser, name: str = "") -> dict[str, argparse.ArgumentParser]:
    """Commands without further commands below them, by their full name."""
    below = [action for action in parser._actions if isinstance(action, argparse._SubParsersAction)]
    if not below:
        return {name: parser}
    return {
        full: leaf
        for word, child in below[0].choices.items()
        for full, leaf in leaves(child, f"{name} {word}".strip()).items()
    }


LEAVES = leaves(build_parser())


def test_the_commands_are_those_of_the_design() -> None:
    """No command is missing and none is there that nobody agreed on."""
    assert {name.split()[0] for name in LEAVES} == set(COMMANDS)


@pytest.mark.parametrize("name", LEAVES)
def test_every_command_teaches(name: str) -> None:
    """The help has a paragraph, an example that calls the command, a text for every option, and no overlong line."""
    parser = LEAVES[name]
    text = parser.format_help()
    assert parser.description and len(parser.description) > 60
    assert f"example:\n  bellassay {name}" in text
    assert all(len(line) <= 80 for line in text.splitlines())
    assert all(action.help for action in parser._actions)


@pytest.mark.parametrize("name", LEAVES)
def test_every_example_is_a_command_line_that_parses(name: str) -> None:
    """An example that the parser itself refuses would teach a mistake."""
    example = LEAVES[name].epilog.partition("example:")[2].replace("\\\n", " ")
    for line in example.strip().splitlines():
        words = re.findall(r'"[^"]*"|\S+', line.partition(" > ")[0])
        assert words[0] == "bellassay"
        build_parser().parse_args([word.strip('"') for word in words[1:]])


@pytest.mark.parametrize("name", LEAVES)
def test_every_command_with_a_result_has_json(name: str) -> None:
    """Programs read results as JSON."""
    if name.split()[0] not in WITHOUT_RESULT:
        assert any("--json" in action.option_strings for action in LEAVES[name]._actions)


def test_the_command_lines_of_the_readme_parse() -> None:
    """Every indented line of the README that calls bellassay is one the parser takes, continuation lines included."""
    readme = ROOT / "README.md"
    text = readme.read_text(encoding="utf-8") if readme.exists() else ""
    lines = re.findall(r"^    (bellassay .*)$", re.sub(r"\\\n *", " ", text), re.MULTILINE)
    for line in lines:
        words = [word.strip('"') for word in re.findall(r'"[^"]*"|\S+', re.split(r"\s+#|\s>\s", line)[0])]
        build_parser().parse_args(words[1:])


def test_options_with_a_unit_say_it() -> None:
    """The text of an option that takes bits, probabilities, seconds or an angle names what it takes."""
    units = {"BITS": "bit|0 or 1", "RAD": "radian", "DAYS": "day", "G": "probability", "E": "error", "W": "probability"}
    for name, parser in LEAVES.items():
        for action in parser._actions:
            if isinstance(action.metavar, str) and action.metavar in units:
                assert re.search(units[action.metavar], action.help), f"{name} {action.option_strings}"


def test_the_readme_names_every_command() -> None:
    """A command the README does not mention does not exist for its readers."""
    readme = ROOT / "README.md"
    text = readme.read_text(encoding="utf-8") if readme.exists() else ""
    missing = [name for name in COMMANDS if text and not re.search(rf"\b{name}\b", text)]
    assert not missing
