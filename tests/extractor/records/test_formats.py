"""What may be read, and that it is read as it was meant."""

from __future__ import annotations

import io

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.model import RoundBatch, RoundRules
from extractor.records import columns as columns_module
from extractor.records import csv, npy, writers
from extractor.records.planes import digest_of
from extractor.records.rounds import open_rounds
from tests.extractor.records.samples import (
    ALL_TESTS, SPOT_CHECKS, batch_of, columns_of, every_format, joined, opened, same, save, savez, written,
)

QUICK = settings(derandomize=True, deadline=None, max_examples=30, database=None)


@QUICK
@given(rounds=st.integers(1, 300), seed=st.integers(0, 2**32))
def test_every_format_gives_the_same_rounds_and_digest(rounds, seed):
    """One run written in every format is read back bit for bit, under one digest."""
    columns = columns_of(rounds, seed)
    expected = digest_of([batch_of(columns)])
    for kind, data in every_format(columns).items():
        file = opened(data)
        batches = list(file)
        assert same(joined(batches), columns), kind
        assert digest_of(batches) == expected, kind
        assert file.rounds == rounds, kind
        assert file.format == kind.split()[0]


@pytest.mark.parametrize("rounds", [2**16 - 1, 2**16, 2**16 + 1, 2**20 + 13])
def test_sizes_around_windows(rounds):
    """Files that end just before, at and after the edge of a window are read whole."""
    columns = columns_of(rounds)
    expected = digest_of([batch_of(columns)])
    for kind, data in every_format(columns).items():
        if rounds < 2**20 or "deflated" not in kind:
            batches = list(opened(data))
            assert digest_of(batches) == expected, kind
            assert max(batch.rounds for batch in batches) <= 2**20


def test_small_windows_change_nothing(monkeypatch):
    """The fast paths cross their window edges many times on a small file and still give the same rounds."""
    columns = columns_of(1_000)
    files = every_format(columns)
    monkeypatch.setattr(csv, "_WINDOW_ROWS", 7)
    monkeypatch.setattr(columns_module, "BATCH_ROUNDS", 24)
    monkeypatch.setattr(columns_module, "_PACKED_WINDOW", 48)
    monkeypatch.setattr(npy, "BATCH_ROUNDS", 16)
    for kind, data in files.items():
        assert same(joined(opened(data)), columns), kind


class _OneByteAtATime(io.RawIOBase):
    """A reader that may, like any raw one, hand out less than was asked for."""

    def __init__(self, data: bytes) -> None:
        self._file = io.BytesIO(data)

    def read(self, size: int = -1) -> bytes:
        return self._file.read(min(size, 1) if size >= 0 else 1)

    def seek(self, offset: int, whence: int = 0) -> int:
        return self._file.seek(offset, whence)


def test_a_reader_that_hands_out_single_bytes():
    """A file object whose reads are short gives the same rounds."""
    columns = columns_of(50)
    for kind, data in every_format(columns).items():
        assert same(joined(open_rounds(_OneByteAtATime(data), "slow", SPOT_CHECKS)), columns), kind


def test_iterating_twice_reads_from_the_start():
    """A round file can be read again, with the same result and the same counts."""
    file = opened(written(writers.write_csv, [batch_of(columns_of(20))], first_round=5))
    assert file.rounds == 0 and file.first_round is None
    assert digest_of(file) == digest_of(file)
    assert (file.rounds, file.first_round, file.last_round) == (20, 5, 24)


def test_t_may_be_absent_when_every_round_is_a_test():
    """Without a t field every round is a test round, in every format."""
    columns = columns_of(64, rules=ALL_TESTS)
    batches = [batch_of(columns)]
    for data in (
        written(writers.write_npz, batches, with_t=False),
        written(writers.write_npz, batches, with_t=False, packed=False),
        written(writers.write_npy, batches, with_t=False),
        written(writers.write_npy, batches, with_t=False, packed=True),
        written(writers.write_npy, batches, with_t=False, first_round=1),
        written(writers.write_csv, batches, with_t=False),
    ):
        assert same(joined(opened(data, ALL_TESTS)), columns)


def test_no_clicks_take_the_declared_outcome_and_are_counted():
    """The value 2 in a or b becomes what the declaration says for that side; the counts are reported."""
    rules = RoundRules(no_click=(1, 0))
    data = {"x": [0, 1, 0], "y": [1, 1, 0], "a": [2, 0, 2], "b": [1, 2, 0]}
    arrays = {name: np.array(values, np.uint8) for name, values in data.items()}
    lines = "\n".join(["x,y,a,b"] + [",".join(map(str, row)) for row in zip(*data.values())])
    rows = np.stack(list(arrays.values()), axis=1)
    for file in (opened(savez(**arrays), rules), opened(lines.encode(), rules), opened(save(rows), rules),
                 opened(save(np.asfortranarray(rows.astype(np.int8))), rules)):
        read = joined(file)
        assert read["a"].tolist() == [1, 0, 1] and read["b"].tolist() == [1, 0, 0]
        assert file.no_clicks == (2, 1)


@pytest.mark.parametrize("dtype", ["<i8", ">i8", "<u8", ">u4", "<i4", "<u2", ">i2", "u1", "i1"])
def test_round_numbers_of_any_integer_type(dtype):
    """Round numbers may be any integers of either byte order, in NPZ and in a structured NPY."""
    columns = columns_of(100)
    numbers = np.arange(20, 120).astype(dtype)
    rows = np.empty(100, [(name, "i1") for name in "abtxy"] + [("round", dtype)])
    for name in "abtxy":
        rows[name] = columns[name]
    rows["round"] = numbers
    aligned = np.dtype([("x", "?"), ("round", dtype), ("y", "u1"), ("a", "u1"), ("b", "i1"), ("t", "u1")], align=True)
    padded = np.zeros(100, aligned)
    for name in rows.dtype.names:
        padded[name] = rows[name]
    for data in (savez(round=numbers, **columns), save(rows), save(padded)):
        file = opened(data)
        assert same(joined(file), columns)
        assert (file.first_round, file.last_round) == (20, 119)


@pytest.mark.parametrize("first", [0, 1, 9, 95, 9_998, 99_999, 10**12 - 3, 10**18 - 5_000])
def test_csv_round_numbers_that_grow_longer(first):
    """Lines change their length with the round number, over several powers of ten, anywhere in the allowed range."""
    columns = columns_of(5_000)
    file = opened(written(writers.write_csv, [batch_of(columns)], first_round=first))
    assert same(joined(file), columns)
    assert (file.first_round, file.last_round) == (first, first + 4_999)


def test_csv_round_numbers_with_leading_zeros():
    """Zero-padded round numbers are read, also where the padding no longer suffices."""
    padded = "round,x,y,a,b\n" + "".join(f"{n:03d},0,1,1,{n % 2}\n" for n in range(95, 1_005))
    file = opened(padded.encode(), ALL_TESTS)
    assert joined(file)["b"].tolist() == [n % 2 for n in range(95, 1_005)]
    assert (file.first_round, file.last_round) == (95, 1_004)


def test_csv_last_line_end_may_be_absent():
    """A last line without its line end counts, for LF and CRLF."""
    for end in ("\n", "\r\n"):
        for header in ("x,y,a,b", "round,x,y,a,b"):
            rows = ["0,1,1,0", "1,1,0,0"] if header[0] == "x" else ["9,0,1,1,0", "10,1,1,0,0"]
            read = joined(opened(end.join([header, *rows]).encode(), ALL_TESTS))
            assert read["a"].tolist() == [1, 0] and read["x"].tolist() == [0, 1]


def test_file_of_one_round():
    """A single round is a file."""
    columns = columns_of(1)
    for kind, data in every_format(columns).items():
        assert same(joined(opened(data)), columns), kind


def test_packed_bits_are_least_significant_first():
    """Byte 0b00000001 of a packed plane means that round 1 is 1 and rounds 2 to 8 are 0."""
    zero, first = np.zeros(1, np.uint8), np.array([1], np.uint8)
    file = opened(savez(rounds=np.uint16(8), x=zero, y=zero, a=first, b=zero), ALL_TESTS)
    assert joined(file)["a"].tolist() == [1, 0, 0, 0, 0, 0, 0, 0]


def test_writers_take_paths_and_batches_of_any_size(tmp_path):
    """A writer gives the same bytes for a path and for a file, and for any split of the rounds."""
    columns = columns_of(100)
    parts = [batch_of({name: column[start:stop] for name, column in columns.items()})
             for start, stop in ((0, 3), (3, 50), (50, 100))]
    for writer, keywords in ((writers.write_npz, {}), (writers.write_npz, {"packed": False, "first_round": 2}),
                             (writers.write_npy, {}), (writers.write_csv, {"first_round": 7})):
        assert writer(tmp_path / "file", iter(parts), **keywords) == 100
        assert (tmp_path / "file").read_bytes() == written(writer, [batch_of(columns)], **keywords)


def test_numpy_reads_what_the_writers_write():
    """The files of the writers mean the same to numpy."""
    columns = columns_of(99)
    batches: list[RoundBatch] = [batch_of(columns)]
    packed = np.load(io.BytesIO(written(writers.write_npz, batches)))
    assert int(packed["rounds"]) == 99
    values = np.load(io.BytesIO(written(writers.write_npz, batches, packed=False, compressed=True, first_round=4)))
    assert values["round"].tolist() == list(range(4, 103))
    rows = np.load(io.BytesIO(written(writers.write_npy, batches)))
    structured = np.load(io.BytesIO(written(writers.write_npy, batches, first_round=4)))
    for place, name in enumerate("xyabt"):
        assert np.array_equal(np.unpackbits(packed[name], count=99, bitorder="little"), columns[name])
        for read in (values[name], rows[:, place], structured[name]):
            assert np.array_equal(read, columns[name])
