"""CSV files that are wrong: each kind of bad line with its code, row and field."""

from __future__ import annotations

import pytest

from extractor.records import csv, writers
from tests.extractor.records.samples import ALL_TESTS, batch_of, columns_of, fault, written


@pytest.mark.parametrize("text, code, row, field", [
    ("0,1,1,0\n0,1,1\n0,1,1,0\n", "column-count", 2, None),
    ("0,1,1,0\n0,1,1,0,1\n", "column-count", 2, None),
    ("0,1,1,0\n\n0,1,1,0\n", "column-count", 2, None),
    ("0,1,1,0\n0,1,1,0\n\n", "column-count", 3, None),
    ("0,1,1,0\n0;1;1;0\n", "column-count", 2, None),
    ("0,1,1,0\n" + "0" * 400 + "\n", "column-count", 2, None),
    ("0,1,1,0\n" + "0" * 400, "column-count", 2, None),
    ("0,1,1,0\n0,1,,0\n", "not-a-bit", 2, "a"),
    ("0,1,1,0\n0,1, 1,0\n", "not-a-bit", 2, "a"),
    ("0,1,1,0\n0,1,+1,0\n", "not-a-bit", 2, "a"),
    ("0,1,1,0\n0,1,01,0\n", "not-a-bit", 2, "a"),
    ("0,1,1,0\n0,1,1.0,0\n", "not-a-bit", 2, "a"),
    ("0,1,1,0\n0,x,1,0\n", "not-a-bit", 2, "y"),
    ("0,1,1,0\n0,\xb2,1,0\n", "not-a-bit", 2, "y"),
    ("0,1,1,0\n0,1,1,0\x00\n", "not-a-bit", 2, "b"),
    ('0,1,1,0\n0,"1",1,0\n', "not-a-bit", 2, "y"),
    ("0,1,1,0\n# note\n", "column-count", 2, None),
    ("0,1,1,0\n0,1,1,0\r\n", "bad-line-ending", 2, None),
    ("0,1,1,0\r\n0,1,1,0\r\n", "bad-line-ending", 1, None),
    ("0,1,1,0\n0,1,1", "truncated-file", 2, None),
    ("0,1,1,0\n0,1,1,", "truncated-file", 2, "b"),
    ("0,1,1,0\n0,", "truncated-file", 2, None),
    ("0,1,1,0\n0,1,1,3", "not-a-bit", 2, "b"),
])
def test_csv_lines_that_are_not_rounds(text, code, row, field):
    """A line that is not exactly the values of one round is refused with its row and, if it is one value, its field."""
    error = fault(b"x,y,a,b\n" + text.encode("latin-1"), ALL_TESTS)
    assert (error.code, error.row, error.field) == (code, row, field)


@pytest.mark.parametrize("text, code, row", [
    ("9,0,1,1,0\r\n10,0,1,1,0\n", "bad-line-ending", 2),
    ("9,0,1,1,0\r\n10,0,1,1,0\r", "truncated-file", 2),
    ("9,0,1,1,0\r\n10,0,1,1\r\n", "column-count", 2),
    ("9,0,1,1,0\r\n1", "truncated-file", 2),
    ("9,0,1,1,0\r\nten,0,1,1,0\r\n", "bad-round-number", 2),
    ("9,0,1,1,0\r\n,0,1,1,0\r\n", "bad-round-number", 2),
    ("9,0,1,1,0\r\n010,0,1,1,0\r\n", "bad-round-number", 2),
    ("9,0,1,1,0\r\n1e1,0,1,1,0\r\n", "bad-round-number", 2),
    ("9,0,1,1,0\r\n" + "1" * 30 + ",0,1,1,0\r\n", "bad-round-number", 2),
    ("009,0,1,1,0\r\n10,0,1,1,0\r\n", "bad-round-number", 2),
    ("-1,0,1,1,0\r\n", "bad-round-number", 1),
    ("9,0,1,1,0\r\n10,0,1,1,0\r\n9,0,1,1,0\r\n", "repeated-round", 3),
    ("9,0,1,1,0\r\n11,0,1,1,0\r\n", "missing-round", 2),
    ("9,0,1,1,0\r\n110,0,1,1,0\r\n", "missing-round", 2),
    ("9,0,1,1,0\r\n8,0,1,1,0\r\n", "round-out-of-order", 2),
    ("9,0,1,1,0\r\n\r\n", "column-count", 2),
    ("\r\n", "column-count", 1),
    ("9,0,1\r\n", "column-count", 1),
])
def test_csv_lines_with_round_numbers(text, code, row):
    """Round numbers must be there, be written alike and count up by one."""
    error = fault(b"round,x,y,a,b\r\n" + text.encode(), ALL_TESTS)
    assert (error.code, error.row) == (code, row)


def test_csv_cut_within_the_last_round_number():
    """A file cut within a round number at the end of a line is called cut, not repeated."""
    error = fault(b"x,y,a,b,round\n0,1,1,0,99\n0,1,1,0,10", ALL_TESTS)
    assert (error.code, error.row, error.field) == ("truncated-file", 2, "round")


def test_csv_headers():
    """The first line must be the names of the columns and nothing else."""
    for data in (b"\xef\xbb\xbfx,y,a,b\n0,0,0,0\n", b"0,1,0,1\n1,1,1,1\n", b"x" * 300 + b"\n", b"x" * 300):
        assert fault(data, ALL_TESTS).code == "bad-header"
    for data in (b"X,Y,A,B\n0,0,0,0\n", b'"x",y,a,b\n0,0,0,0\n', b"x;y;a;b\n0;0;0;0\n", b"\n0,0,0,0\n"):
        assert fault(data, ALL_TESTS).code == "unknown-field"


def test_csv_faults_far_down_and_at_window_edges(monkeypatch):
    """Rows are counted right across windows and across changes of the line length."""
    monkeypatch.setattr(csv, "_WINDOW_ROWS", 16)
    columns = columns_of(300, rules=ALL_TESTS)
    good = written(writers.write_csv, [batch_of(columns)], first_round=1).split(b"\n")
    for row in (1, 9, 10, 15, 16, 17, 32, 99, 100, 101, 300):
        for change, code in ((lambda line: line[:-1] + b"5", "not-a-bit"), (lambda line: line + b",1", "column-count"),
                             (lambda line: line[:-2], "column-count")):
            lines = list(good)
            lines[row] = change(lines[row])
            error = fault(b"\n".join(lines), ALL_TESTS)
            assert (error.code, error.row) == (code, row)
        if 1 < row < 300:                  # a file may begin and end at any round
            error = fault(b"\n".join(good[:row] + good[row + 1 :]), ALL_TESTS)
            assert (error.code, error.row, error.field) == ("missing-round", row, "round")
