"""What all commands share: the look of the help, option types, reading and writing of files, output and progress.

Results go to stdout (one JSON object with --json), everything else to stderr.
"""

from __future__ import annotations

import argparse
import json
import os
import re
import sys
import textwrap
import threading
import time
from collections.abc import Callable, Iterable
from pathlib import Path
from types import TracebackType
from typing import Any, NoReturn

from extractor.errors import InputError

DONE, REFUSED, BAD_INPUT = 0, 1, 2
WIDTH = 80
LARGEST_DOCUMENT_BYTES = 64 << 20
# When stderr is not a terminal: a line at the latest after SPARSE_LINE_S, earlier when a tenth more is done.
SPARSE_LINE_S, DENSE_LINE_S, SPARSE_SHARE = 5.0, 1.0, 0.1


class _Help(argparse.RawDescriptionHelpFormatter):
    def __init__(self, prog: str) -> None:
        super().__init__(prog, max_help_position=26, width=WIDTH - 2)


class UsageError(SystemExit):
    """The command line makes no sense; the reason has been printed."""

    def __init__(self, message: str) -> None:
        self.message = message
        super().__init__(BAD_INPUT)


class Parser(argparse.ArgumentParser):
    """Options are never guessed from their first letters: a script must not change meaning with a new option."""

    def __init__(self, **options: Any) -> None:
        super().__init__(formatter_class=_Help, allow_abbrev=False, **options)

    def error(self, message: str) -> NoReturn:
        self.print_usage(sys.stderr)
        note(f"{self.prog}: {message}")
        raise UsageError(message)


def add_command(
    commands: Any,
    name: str,
    run: Callable[[argparse.Namespace], int],
    summary: str,
    paragraph: str,
    example: str,
    *,
    prints_result: bool = True,
) -> Parser:
    """A command with one paragraph and an example in its --help."""
    text = textwrap.fill(" ".join(paragraph.split()), WIDTH - 2)
    lines = "\n".join("  " + line for line in textwrap.dedent(example).strip().splitlines())
    parser = commands.add_parser(name, help=summary, description=text, epilog=f"example:\n{lines}")
    parser.set_defaults(handler=run)
    if prints_result:
        parser.add_argument(
            "--json", action="store_true", help="print one JSON object on standard output, all else on standard error"
        )
    return parser


# ---- option types


def whole(text: str) -> int:
    """A whole number, also written as 1e8."""
    try:
        return int(text.replace("_", ""))
    except ValueError:
        pass
    if re.fullmatch(r"[0-9]{1,3}([,.' ][0-9]{3})+", text) and (text.count(".") != 1):
        raise argparse.ArgumentTypeError(f"{text!r}: write {_plainly(re.sub(r'[^0-9]', '', text))}")
    try:
        value = float(text)
    except ValueError:
        value = float("nan")
    if abs(value) >= 2**53:
        raise argparse.ArgumentTypeError(f"{text!r} is larger than {2**53 - 1}, the largest number taken in this form")
    if value != value or value != int(value):
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number")
    return int(value)


def _plainly(digits: str) -> str:
    """1000000 or 1e6."""
    front = digits.rstrip("0")
    if not front or len(digits) - len(front) < 3:
        return digits
    return f"{digits} or {front[0]}{'.' + front[1:] if front[1:] else ''}e{len(digits) - 1}"


def real(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = float("nan")
        if re.fullmatch(r"[0-9]*,[0-9]+", text):
            raise argparse.ArgumentTypeError(f"{text!r}: write {text.replace(',', '.')}") from None
    if value != value or value in (float("inf"), float("-inf")):
        raise argparse.ArgumentTypeError(f"{text!r} is not a number")
    return value


def setting_pair(text: str) -> tuple[int, int]:
    if text not in ("00", "01", "10", "11"):
        raise argparse.ArgumentTypeError(f"{text!r} is none of 00, 01, 10, 11")
    return int(text[0]), int(text[1])


def four_probabilities(text: str) -> tuple[float, float, float, float]:
    parts = text.split(",")
    if len(parts) != 4:
        raise argparse.ArgumentTypeError(f"{text!r} is not four numbers such as 0.25,0.25,0.25,0.25")
    return tuple(real(part) for part in parts)  # type: ignore[return-value]


# ---- files


def read_bytes(path: str | Path, largest: int = LARGEST_DOCUMENT_BYTES) -> bytes:
    """A whole small file. Errors raised: InputError if it is larger than it can sensibly be; OSError."""
    with open(path, "rb") as file:
        data = file.read(largest + 1)
    if len(data) > largest:
        raise InputError(f"is larger than {largest >> 20} MiB", code="too-large", file=str(path))
    return data


def read_json(path: str | Path) -> Any:
    """The JSON value in a file; duplicate names and values such as NaN are refused."""
    from extractor.seal import canonical

    try:
        return canonical.parse(read_bytes(path))
    except InputError as fault:
        raise InputError(
            fault.message, code=fault.code, file=fault.file or str(path), row=fault.row, field=fault.field
        ) from None


def read_declaration(path: str | Path) -> Any:
    """The declaration in a JSON file."""
    from extractor.documents import declaration_from

    try:
        return declaration_from(read_json(path))
    except InputError as fault:
        raise InputError(
            fault.message, code=fault.code, file=fault.file or str(path), row=fault.row, field=fault.field
        ) from None


def write_file(path: Path, data: bytes, *, secret: bool = False, replace: bool = True) -> None:
    """Write a file whole or not at all. With replace=False an existing file is an InputError."""
    if not replace and path.exists():
        raise InputError("exists already; choose another place or move it away", code="file-exists", file=str(path))
    part = path.with_name(path.name + ".part")
    try:
        with os.fdopen(os.open(part, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600 if secret else 0o666), "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, path)
    except BaseException:
        part.unlink(missing_ok=True)
        raise


def json_bytes(document: Any) -> bytes:
    return (json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()


# ---- output


def note(text: str = "") -> None:
    """A remark for the person at the terminal."""
    print(text, file=sys.stderr, flush=True)


def emit(args: argparse.Namespace, document: Any, lines: Iterable[str]) -> None:
    """The result of a command: the document with --json, the lines otherwise."""
    if args.json:
        print(json.dumps(document, ensure_ascii=False, allow_nan=False), flush=True)
    else:
        for line in lines:
            print(line, flush=True)


def rows(pairs: Iterable[tuple[str, object]]) -> list[str]:
    """Names and values as aligned lines of at most 80 columns; long values wrapped, digests on a line of their own."""
    pairs = [(name, str(value)) for name, value in pairs]
    width = max((len(name) for name, _ in pairs), default=0) + 2
    lines: list[str] = []
    for name, value in pairs:
        if " " not in value and len(value) > WIDTH - width:
            lines += [name, f"  {value}"]
            continue
        parts = textwrap.wrap(value, WIDTH - width, break_long_words=False, break_on_hyphens=False) or [""]
        lines += [f"{name:<{width}}{parts[0]}", *(" " * width + more for more in parts[1:])]
    return lines


def bullets(sentences: Iterable[str]) -> list[str]:
    """Sentences as an indented list."""
    return [
        line
        for sentence in sentences
        for line in textwrap.wrap(
            sentence, WIDTH, initial_indent="  - ", subsequent_indent="    ", break_on_hyphens=False
        )
    ]


def grouped(number: int) -> str:
    """A whole number with thin gaps for reading: 12 345 678."""
    return f"{number:,}".replace(",", " ")


def several(number: int, word: str) -> str:
    """1 segment, 12 345 segments."""
    return f"{grouped(number)} {word}{'' if number == 1 else 's'}"


def volume(size: float) -> str:
    """A number of bytes with three digits that count: 18.4 kB, 1.25 GB."""
    for unit in ("B", "kB", "MB", "GB"):
        if size < 999.5:
            break
        size /= 1000
    else:
        unit = "TB"
    return f"{size:.0f} {unit}" if unit == "B" or size >= 100 else f"{size:.3g} {unit}"


def duration(seconds: float) -> str:
    """12.3 s, 4 min 5 s, 3 h 10 min."""
    if seconds < 60:
        return f"{seconds:.1f} s"
    minutes, rest = divmod(round(seconds), 60)
    return f"{minutes} min {rest} s" if minutes < 60 else f"{minutes // 60} h {minutes % 60} min"


def due(seconds: float, share: float) -> bool:
    """Whether a progress line is due, so long after the last one and so much further."""
    return seconds >= SPARSE_LINE_S or (seconds >= DENSE_LINE_S and share >= SPARSE_SHARE)


class Progress:
    """A progress bar on a terminal; elsewhere a line on stderr for every tenth and at least every five seconds.

    What is over within a second is worth no line.

    total  in `unit` ("B" is scaled to kB, MB, ...), None if unknown
    """

    def __init__(self, label: str, total: int | None, unit: str, clock: Callable[[], float] = time.monotonic) -> None:
        self._label, self._total, self._unit, self._clock = label, total, unit, clock
        self._begin = self._said = clock()
        self._at = self._said_at = 0
        self._over = threading.Event()
        self._bar = None
        if sys.stderr.isatty():
            from tqdm import tqdm

            # The size is given, as some terminals say 0 x 0 and would get no bar at all.
            self._bar = tqdm(
                total=total, desc=label, unit=unit, unit_scale=True, ncols=WIDTH - 1, nrows=24, file=sys.stderr
            )

    def advance(self, amount: int) -> None:
        self._at += amount
        if self._bar is not None:
            self._bar.update(amount)
        elif due(self._clock() - self._said, (self._at - self._said_at) / self._total if self._total else 0.0):
            self._said, self._said_at = self._clock(), self._at
            part = self._part()
            rate = self._at / max(self._said - self._begin, 1e-9)
            note(f"{self._label}: {part}, {volume(rate) if self._unit == 'B' else f'{rate:.3g} {self._unit}'}/s")

    def move_to(self, place: int) -> None:
        self.advance(place - self._at)

    def _part(self) -> str:
        if self._total:
            return f"{100 * self._at / self._total:.0f} %"
        return volume(self._at) if self._unit == "B" else f"{grouped(self._at)} {self._unit}"

    def _stay_in_touch(self) -> None:
        """Says every now and then that a long step without news is still under way."""
        while not self._over.wait(SPARSE_LINE_S):
            if self._clock() - self._said >= SPARSE_LINE_S:
                self._said = self._clock()
                note(f"{self._label}: {self._part()}, at work for {duration(self._said - self._begin)}")

    def __enter__(self) -> Progress:
        if self._bar is None:
            threading.Thread(target=self._stay_in_touch, daemon=True).start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._over.set()
        if self._bar is not None:
            self._bar.close()
