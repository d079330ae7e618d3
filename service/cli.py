"""`bellassay`, the command line: joins the commands and turns trouble into a sentence and an exit code.

Exit codes: 0 done, 1 refused or verification failed, 2 bad input or usage (a service that cannot be reached included).
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence

from extractor.errors import InputError, ProofError
from service.commands import collect, offline, planning, remote, serving, simulate, submit, tally
from service.commands.common import BAD_INPUT, REFUSED, Parser, note
from service.errors import StorageFailed, Unavailable

GROUPS = (serving, simulate, tally, planning, offline, submit, remote, collect)


def build_parser() -> argparse.ArgumentParser:
    """The parser with all commands."""
    parser = Parser(
        prog="bellassay",
        description="Rounds of a Bell-test rig in; certified random bits out, with a report\n"
        "that can be checked offline.",
        epilog="example:\n  bellassay serve\n  bellassay COMMAND --help\n\n"
        "exit codes: 0 done, 1 refused or verification failed, 2 bad input or usage",
    )
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, parser_class=Parser)
    for group in GROUPS:
        group.add(commands)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; the exit code. Trouble the user can mend is a sentence on stderr, a defect a traceback."""
    from service.transport import ServiceProblem

    args = build_parser().parse_args(arguments)
    try:
        return args.handler(args)
    except InputError as fault:
        note(f"bellassay: {fault}")
        return BAD_INPUT
    except ProofError as fault:
        note(f"bellassay: verification failed: {fault}")
        return REFUSED
    except ServiceProblem as problem:
        note(f"bellassay: {problem}")
        for error in problem.errors:
            place = ", ".join(
                f"{name} {error[name]}"
                for name in ("file", "row", "field", "pointer")
                if error.get(name) not in (None, "")
            )
            note(f"  {place}: {error.get('detail', '')}" if place else f"  {error.get('detail', '')}")
        return BAD_INPUT
    except (Unavailable, StorageFailed) as fault:
        note(f"bellassay: {fault}")
        return BAD_INPUT
    except BrokenPipeError:
        sys.stderr.close()  # the reader of our output has gone: nobody is left to tell
        return BAD_INPUT
    except OSError as fault:
        note(f"bellassay: {fault.filename}: {fault.strerror}" if fault.filename else f"bellassay: {fault}")
        return BAD_INPUT
    except KeyboardInterrupt:
        note("\nbellassay: interrupted")
        return 130


if __name__ == "__main__":
    sys.exit(main())
