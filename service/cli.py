"""`bellassay`, the command line: joins the commands and turns trouble into a sentence and an exit code.

Exit codes: 0 done, 1 refused or verification failed, 2 bad input or usage (a service that cannot be reached included).
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from typing import Any

from extractor.errors import InputError, ProofError
from service.commands import collect, offline, planning, remote, serving, simulate, submit, tally
from service.commands.common import BAD_INPUT, REFUSED, Parser, UsageError, note
from service.errors import StorageFailed, Unavailable

GROUPS = (serving, simulate, tally, planning, offline, submit, remote, collect)


class _Version(argparse.Action):
    """Looks the version up only when it is asked for."""

    def __call__(self, parser: argparse.ArgumentParser, *_: Any) -> None:
        from importlib.metadata import PackageNotFoundError, version

        try:
            print(f"bellassay {version('bellassay')}")
        except PackageNotFoundError:
            print("bellassay, not installed: run from its source folder")
        parser.exit()


def build_parser() -> argparse.ArgumentParser:
    """The parser with all commands."""
    parser = Parser(
        prog="bellassay",
        description="Rounds of a Bell-test rig in; certified random bits out, with a report\n"
        "that can be checked offline.",
        epilog="example:\n  bellassay serve\n  bellassay COMMAND --help\n\n"
        "exit codes: 0 done, 1 refused or verification failed, 2 bad input or usage",
    )
    parser.add_argument("--version", action=_Version, nargs=0, help="print the version and end")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, parser_class=Parser)
    for group in GROUPS:
        group.add(commands)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; the exit code. Trouble the user can mend is a sentence on stderr, a defect a traceback.

    With --json, trouble with exit code 2 is also one object {"error": {"code", "detail"}} on stdout.
    """
    words = sys.argv[1:] if arguments is None else list(arguments)
    parser = build_parser()
    if not words:
        parser.print_help(sys.stderr)
        return BAD_INPUT
    as_json = "--json" in words
    try:
        args = parser.parse_args(words)
    except UsageError as fault:
        _answer(as_json, "bad-usage", fault.message)
        raise
    from service.transport import ServiceProblem

    try:
        return args.handler(args)
    except ProofError as fault:
        note(f"bellassay: verification failed: {fault}")
        return REFUSED
    except ServiceProblem as problem:
        note(f"bellassay: {problem}")
        for error in problem.errors:
            if error.get("detail", "") in str(problem):
                continue  # said already
            place = ", ".join(
                f"{name} {error[name]}"
                for name in ("file", "row", "field", "pointer")
                if error.get(name) not in (None, "")
            )
            note(f"  {place}: {error.get('detail', '')}" if place else f"  {error.get('detail', '')}")
        return _answer(as_json, problem.code, str(problem))
    except (InputError, Unavailable, StorageFailed) as fault:
        note(f"bellassay: {fault}")
        return _answer(as_json, fault.code, str(fault))
    except BrokenPipeError:
        sys.stderr.close()  # the reader of our output has gone: nobody is left to tell
        return BAD_INPUT
    except OSError as fault:
        text = f"{fault.filename}: {fault.strerror}" if fault.filename else str(fault)
        note(f"bellassay: {text}")
        return _answer(as_json, "no-file" if isinstance(fault, FileNotFoundError) else "file-trouble", text)
    except KeyboardInterrupt:
        note("\nbellassay: interrupted")
        return 130


def _answer(as_json: bool, code: str, detail: str) -> int:
    """The same for programs."""
    if as_json:
        print(json.dumps({"error": {"code": code, "detail": detail}}, ensure_ascii=False), flush=True)
    return BAD_INPUT


if __name__ == "__main__":
    sys.exit(main())
