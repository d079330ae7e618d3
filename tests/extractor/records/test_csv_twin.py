"""The CSV reader against a slow twin that reads line by line: both accept the same files with the same rounds."""

from __future__ import annotations

import re

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.errors import InputError
from extractor.model import RoundRules
from extractor.records import csv
from tests.extractor.records.samples import joined, opened

RULES = RoundRules(no_click=(0, 1))
PIECES = [b"", b"0", b"1", b"2", b"3", b",", b"\n", b"\r", b"\r\n", b" ", b"\xb2"]


def _twin(data: bytes) -> list[tuple[int, ...]] | None:
    """Rows (x, y, a, b) of a file of test rounds, or None if anything is wrong with it."""
    header, _, rest = data.partition(b"\n")
    end = b"\r\n" if header.endswith(b"\r") else b"\n"
    fields = header.removesuffix(b"\r").decode("ascii").split(",")
    lines = rest.removesuffix(end).split(end) if rest else []
    rows, last, width = [], None, 1
    for line in lines:
        texts = line.decode("latin-1").split(",")
        if len(texts) != len(fields):
            return None
        row = dict(zip(fields, texts))
        if any(row[name] not in ("0", "1") for name in "xyt" if name in row):
            return None
        if any(row[name] not in ("0", "1", "2") for name in "ab") or row.get("t", "1") == "0":
            return None
        if "round" in row:
            if not re.fullmatch("[0-9]{1,18}", row["round"]):
                return None
            number = int(row["round"])
            if last is None and row["round"].startswith("0"):
                width = len(row["round"])
            if (last is not None and number != last + 1) or row["round"] != f"{number:0{width}d}":
                return None
            last = number
        assigned = {"a": "0", "b": "1"}
        rows.append(tuple(int(assigned[name] if row[name] == "2" else row[name]) for name in "xyab"))
    return rows or None


@settings(derandomize=True, deadline=None, max_examples=120, database=None)
@given(data=st.data())
def test_reader_and_twin_agree(data):
    """Files put together from good and bad lines, then damaged or not, mean the same to both."""
    more = data.draw(st.sampled_from([[], ["round"], ["t"], ["t", "round"]]))
    order = data.draw(st.permutations(["x", "y", "a", "b", *more]))
    end = data.draw(st.sampled_from(["\n", "\r\n"]))
    first = data.draw(st.sampled_from([0, 1, 7, 95, 998]))
    width = data.draw(st.sampled_from([1, 1, 2, 4]))
    rng = np.random.default_rng(data.draw(st.integers(0, 2**32)))
    lines = [",".join(order)]
    for number in range(first, first + data.draw(st.integers(0, 30))):
        values = {name: str(rng.integers(0, 3 if name in "ab" and rng.integers(4) == 0 else 2)) for name in order}
        values |= {"t": "1", "round": f"{number:0{width}d}"}
        lines.append(",".join(values[name] for name in order))
    text = bytearray((end.join(lines) + data.draw(st.sampled_from([end, ""]))).encode())
    body = len(lines[0]) + len(end)
    for _ in range(data.draw(st.integers(0, 2))):
        if len(text) > body:
            place = int(rng.integers(body, len(text)))
            piece = data.draw(st.sampled_from(PIECES))
            text[place : place + data.draw(st.integers(0, 1))] = piece
    rows = csv._WINDOW_ROWS
    csv._WINDOW_ROWS = data.draw(st.sampled_from([3, 8, rows]))
    try:
        read = joined(opened(bytes(text), RULES))
        found = list(zip(*(read[name].tolist() for name in "xyab")))
    except InputError:
        found = None
    finally:
        csv._WINDOW_ROWS = rows
    assert found == _twin(bytes(text))
