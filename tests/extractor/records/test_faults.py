"""Every way in which a round file can be wrong has a code, a place and a sentence; nothing is dropped or guessed."""

from __future__ import annotations

import io

import numpy as np
import pytest

from extractor.errors import InputError
from extractor.model import RoundRules
from extractor.records import writers
from extractor.records.rounds import open_rounds
from tests.extractor.records.samples import (
    ALL_TESTS, SPOT_CHECKS, batch_of, columns_of, fault, save, savez, written,
)


def _rows(count: int, **changes: dict[int, int]) -> dict[str, np.ndarray]:
    """Plain test rounds with some values changed: field -> {row counted from 1: value}."""
    columns = {name: np.zeros(count, np.int16) for name in "xyab"}
    for field, values in changes.items():
        column = columns.setdefault(field, np.arange(1, count + 1) if field == "round" else np.ones(count, np.int16))
        for row, value in values.items():
            column[row - 1] = value
    return columns


def _as_npz(columns: dict[str, np.ndarray]) -> bytes:
    return savez(**{name: c if name == "round" else c.astype(np.uint8) for name, c in columns.items()})


def _as_npz_int8(columns: dict[str, np.ndarray]) -> bytes:
    return savez(True, **{name: c if name == "round" else c.astype(np.int8) for name, c in columns.items()})


def _as_npy(columns: dict[str, np.ndarray]) -> bytes:
    if "round" not in columns:
        return save(np.stack([columns[name] for name in "xyabt" if name in columns], axis=1).astype(np.uint8))
    rows = np.empty(len(columns["round"]), [(name, "<i8" if name == "round" else "u1") for name in columns])
    for name, column in columns.items():
        rows[name] = column
    return save(rows)


def _as_npy_columns_first(columns: dict[str, np.ndarray]) -> bytes:
    if "round" in columns:
        return _as_npy(columns)
    return save(np.asfortranarray(np.stack([columns[n] for n in "xyabt" if n in columns], axis=1).astype(np.uint8)))


def _as_csv(columns: dict[str, np.ndarray], end: str = "\n") -> bytes:
    lines = [",".join(columns)] + [",".join(map(str, row)) for row in zip(*(c.tolist() for c in columns.values()))]
    return (end.join(lines) + end).encode()


def _as_csv_crlf(columns: dict[str, np.ndarray]) -> bytes:
    return _as_csv(columns, "\r\n")


VALUE_FORMATS = pytest.mark.parametrize(
    "form", [_as_npz, _as_npz_int8, _as_npy, _as_npy_columns_first, _as_csv, _as_csv_crlf],
    ids=lambda form: form.__name__[4:])


@VALUE_FORMATS
@pytest.mark.parametrize("field", ["x", "y", "a", "b", "t"])
@pytest.mark.parametrize("row", [1, 6, 20])
def test_a_value_that_is_not_a_bit(form, field, row):
    """A 3 (or a 2 where there is no click to miss) is refused with row and field."""
    for value in (3,) if field in "ab" else (2, 3):
        error = fault(form(_rows(20, **{field: {row: value}})), RoundRules(no_click=(0, 0)))
        assert (error.code, error.row, error.field) == ("not-a-bit", row, field)
        assert f"{value}" in error.message and ("no-click" if field in "ab" else "0 or 1") in error.message


@VALUE_FORMATS
@pytest.mark.parametrize("side", [0, 1])
def test_a_no_click_without_a_declared_value(form, side):
    """A 2 on a side whose no-clicks have no declared outcome is refused with row and field."""
    no_click = (None, 0) if side == 0 else (0, None)
    error = fault(form(_rows(20, a={3: 2, 9: 2}, b={4: 2, 9: 2})), RoundRules(no_click=no_click))
    assert (error.code, error.row, error.field) == ("no-click-undeclared", 3 + side, "ab"[side])
    assert "declaration" in str(error)


@VALUE_FORMATS
def test_rounds_that_are_missing_repeated_or_out_of_order(form):
    """A jump ahead is a missing round, a number that was there is repeated, one before the first is out of order."""
    for row, number, code, words in (
        (5, 6, "missing-round", "round 5 is missing here: round 6 follows round 4"),
        (5, 4, "repeated-round", "round 4 was there before; round 5"),
        (5, 1, "repeated-round", "round 1 was there before"),
        (5, 0, "round-out-of-order", "round 0 follows round 4, but the file began with round 1"),
        (20, 21, "missing-round", "round 20 is missing"),
    ):
        error = fault(form(_rows(20, round={row: number})), ALL_TESTS)
        assert (error.code, error.row, error.field) == (code, row, "round")
        assert words in str(error)


@VALUE_FORMATS
def test_round_numbers_out_of_range(form):
    """A first round number below 0 or of 10^18 and more is refused, as is a count that passes that limit."""
    for number in (-1, 10**18):
        error = fault(form(_rows(20, round={1: number})), ALL_TESTS)
        assert (error.code, error.row, error.field) == ("bad-round-number", 1, "round")
    columns = _rows(20, round={})
    columns["round"] = columns["round"] + (10**18 - 11)
    error = fault(form(columns), ALL_TESTS)
    assert (error.code, error.row, error.field) == ("bad-round-number", 11, "round")


def test_huge_unsigned_round_number_is_not_taken_for_another():
    """A number of 2^64 - 1 is reported as it stands."""
    bits = {name: np.zeros(2, np.uint8) for name in "xyab"}
    error = fault(savez(round=np.array([2**64 - 1, 1], np.uint64), **bits), ALL_TESTS)
    assert (error.code, error.row) == ("bad-round-number", 1) and str(2**64 - 1) in str(error)
    error = fault(savez(round=np.array([7, 2**64 - 1], np.uint64), **bits), ALL_TESTS)
    assert (error.code, error.row) == ("bad-round-number", 2)


@VALUE_FORMATS
def test_the_earliest_row_at_fault_is_named(form):
    """Of several faults of different kinds the one in the earliest row is reported."""
    faults = {"round": {12: 90}, "a": {9: 2}, "x": {11: 3}, "t": {4: 0}}
    places = [("not-a-test-round", 4), ("no-click-undeclared", 9), ("not-a-bit", 11), ("missing-round", 12)]
    for (code, row), field in zip(places, ("t", "a", "x", "round")):
        error = fault(form(_rows(20, **faults)), ALL_TESTS)
        assert (error.code, error.row, error.field) == (code, row, field)
        del faults[field]


@VALUE_FORMATS
def test_generation_rounds_must_be_declared_and_have_their_settings(form):
    """t = 0 is refused without declared generation rounds, and with other settings than the declared ones."""
    columns = _rows(20, t={7: 0, 8: 0}, x={7: 1})
    error = fault(form(columns), ALL_TESTS)
    assert (error.code, error.row, error.field) == ("not-a-test-round", 7, "t")
    error = fault(form(columns), RoundRules(0.5, (1, 0)))
    assert (error.code, error.row, error.field) == ("generation-settings", 8, "x")
    assert "x = 1, y = 0" in str(error)
    error = fault(form(columns), RoundRules(0.5, (1, 1)))
    assert (error.code, error.row, error.field) == ("generation-settings", 7, "y")


def test_generation_rules_hold_for_packed_planes():
    """Packed planes obey the same rules as values, rows counted across windows."""
    columns = columns_of(2**20 + 100, rules=ALL_TESTS)
    columns["t"][2**20 + 40] = 0
    columns["x"][2**20 + 40], columns["y"][2**20 + 40] = 1, 1
    data = written(writers.write_npz, [batch_of(columns)])
    error = fault(data, ALL_TESTS)
    assert (error.code, error.row, error.field) == ("not-a-test-round", 2**20 + 41, "t")
    error = fault(data, SPOT_CHECKS)
    assert (error.code, error.row, error.field) == ("generation-settings", 2**20 + 41, "y")


@VALUE_FORMATS
@pytest.mark.parametrize("field", ["x", "y", "a", "b"])
def test_a_missing_field(form, field):
    """Each of x, y, a, b must be there."""
    columns = _rows(20, round={})
    del columns[field]
    error = fault(form(columns), ALL_TESTS)
    assert (error.code, error.field) == ("missing-field", field)


@VALUE_FORMATS
def test_a_missing_test_field(form):
    """With declared generation rounds the t field must be there."""
    error = fault(form(_rows(20)), SPOT_CHECKS)
    assert (error.code, error.field) == ("missing-field", "t")
    assert "generation rounds" in str(error)


def test_an_unknown_field():
    """A field that is none of ours is refused, not skipped."""
    columns = _rows(20, round={}) | {"time": np.arange(20)}
    for data in (_as_csv(columns), _as_npz(columns), _as_npy(columns)):
        error = fault(data, ALL_TESTS)
        assert (error.code, error.field) == ("unknown-field", "time")
        assert "x, y, a, b" in str(error)
    assert fault(b"x,y,a,b \n0,0,0,0\n").field == "b "
    assert fault(b"x,y,a,b,\n0,0,0,0,\n").field == "(empty name)"
    planes = {name: np.zeros(1, np.uint8) for name in "xyab"}
    assert fault(savez(rounds=np.int64(8), round=np.arange(8), **planes)).field == "round"


def test_a_field_that_stands_twice():
    """Two columns of one name are refused."""
    error = fault(b"x,y,a,b,a\n0,0,0,0,0\n", ALL_TESTS)
    assert (error.code, error.field) == ("repeated-field", "a")


def test_unequal_lengths():
    """Fields of unequal lengths are refused with both lengths."""
    columns = _rows(20)
    columns["b"] = columns["b"][:19]
    error = fault(_as_npz(columns), ALL_TESTS)
    assert (error.code, error.field) == ("unequal-lengths", "b")
    assert "19" in str(error) and "20" in str(error)
    columns = _rows(20) | {"round": np.arange(21)}
    assert fault(_as_npz(columns), ALL_TESTS).field == "round"
    planes = {name: np.zeros(3, np.uint8) for name in "xyab"}
    for rounds in (16, 25):
        error = fault(savez(rounds=np.int64(rounds), **planes), ALL_TESTS)
        assert (error.code, error.field) == ("unequal-lengths", "x")


@pytest.mark.parametrize("field", ["x", "y", "a", "b", "t"])
def test_tail_bits_that_are_set(field):
    """A bit beyond the last round of a packed plane is refused."""
    planes = {name: np.zeros(3, np.uint8) for name in "xyab"} | {"t": np.array([255, 255, 15], np.uint8)}
    planes[field] = planes[field] | np.array([0, 0, 16], np.uint8)
    error = fault(savez(rounds=np.int64(20), **planes), ALL_TESTS)
    assert (error.code, error.field) == ("tail-bits-set", field)
    assert "20" in str(error)


@pytest.mark.parametrize("dtype", ["<f8", "<i4", "<u2", "S1", "<U1", "O", "<c8", "V1", "<M8[s]"])
def test_a_wrong_element_type(dtype):
    """Bits are bool, uint8 or int8; anything else, pickled objects first of all, is refused by its header."""
    column = np.zeros(20, dtype)
    error = fault(savez(**(_rows(20) | {"x": column})), ALL_TESTS)
    assert (error.code, error.field) == ("wrong-type", "x")
    assert fault(save(np.zeros((20, 4), dtype)), ALL_TESTS).code == "wrong-type"
    structured = np.zeros(20, [("x", dtype)] + [(name, "u1") for name in "yab"])
    assert fault(save(structured), ALL_TESTS).code == "wrong-type"


@pytest.mark.parametrize("dtype", ["<f8", "?", "S8", "O"])
def test_a_wrong_type_of_round_numbers(dtype):
    """Round numbers, and the number of rounds, are integers."""
    numbers = np.arange(1, 21).astype(dtype)
    bits = {name: np.zeros(20, np.uint8) for name in "xyab"}
    assert fault(savez(round=numbers, **bits), ALL_TESTS).code == "wrong-type"
    error = fault(savez(rounds=np.array(20).astype(dtype), **bits), ALL_TESTS)
    assert (error.code, error.field) == ("wrong-type", "rounds")


def test_packed_planes_must_be_bytes():
    """Packed planes are uint8; bool planes with a number of rounds mean nothing."""
    error = fault(savez(rounds=np.int64(8), **{name: np.zeros(1, bool) for name in "xyab"}), ALL_TESTS)
    assert (error.code, error.field) == ("wrong-type", "x")


def test_wrong_shapes():
    """Shapes that are no rounds are refused."""
    for shape in ((20,), (20, 3), (20, 6), (2, 4, 4), (6, 8), ()):
        assert fault(save(np.zeros(shape, np.uint8)), ALL_TESTS).code == "wrong-shape"
    assert fault(save(np.zeros((4, 20), bool)), ALL_TESTS).code == "wrong-shape"
    bits = _rows(20)
    assert fault(_as_npz(bits | {"a": np.zeros((20, 1), np.uint8)}), ALL_TESTS).field == "a"
    assert fault(savez(rounds=np.array([8, 8]), **bits), ALL_TESTS).code == "wrong-shape"
    structured = np.zeros((4, 5), [(name, "u1") for name in "xyab"])
    assert fault(save(structured), ALL_TESTS).code == "wrong-shape"
    nested = np.zeros(4, [("x", "u1", (2,))] + [(name, "u1") for name in "yab"])
    assert fault(save(nested), ALL_TESTS).code == "bad-header"


@pytest.mark.parametrize("shape", [(4, 4), (4, 5), (5, 4), (5, 5)])
def test_small_arrays_that_could_be_rows_or_planes(shape):
    """Four or five rows of four or five bytes have two meanings: refused, with the way out."""
    error = fault(save(np.zeros(shape, np.uint8)), ALL_TESTS)
    assert error.code == "ambiguous-shape" and "NPZ" in str(error)


def test_empty_files():
    """A file without rounds is refused in every form."""
    with pytest.raises(InputError) as caught:
        open_rounds(io.BytesIO(b""), "night.dat", ALL_TESTS)
    assert caught.value.code == "empty-file"
    for data in (
        b"x,y,a,b\n", b"x,y,a,b", b"round,x,y,a,b\r\n", _as_npz(_rows(0)), save(np.zeros((0, 4), np.uint8)),
        save(np.zeros((4, 0), np.uint8)), save(np.zeros(0, [(n, "u1") for n in "xyab"])),
        savez(rounds=np.int64(0), **{n: np.zeros(0, np.uint8) for n in "xyab"}),
        savez(rounds=np.int64(-8), **{n: np.zeros(1, np.uint8) for n in "xyab"}),
    ):
        error = fault(data, ALL_TESTS)
        assert error.code == "empty-file" and "no rounds" in str(error)


def test_too_many_rounds():
    """More rounds than the caller accepts are refused: at once where the file declares them, else at the row."""
    columns = columns_of(21, rules=ALL_TESTS)
    for data in (written(writers.write_npz, [batch_of(columns)]), written(writers.write_npy, [batch_of(columns)])):
        error = fault(data, ALL_TESTS, limit=20)
        assert error.code == "too-many-rounds" and "20" in str(error)
    error = fault(written(writers.write_csv, [batch_of(columns)]), ALL_TESTS, limit=20)
    assert (error.code, error.row) == ("too-many-rounds", 21)


def test_an_unknown_format():
    """Bytes that begin like none of the formats are refused."""
    with pytest.raises(InputError) as caught:
        open_rounds(io.BytesIO(b"\x89HDF\r\n\x1a\n" + bytes(40)), "night.dat", ALL_TESTS)
    assert caught.value.code == "unknown-format" and caught.value.file == "night.dat"


def test_npy_cut_or_continued():
    """An NPY file with too few or too many bytes is refused before any round is handed out."""
    for data in (save(np.zeros((100, 4), np.uint8)), save(np.asfortranarray(np.zeros((100, 4), bool))),
                 save(np.zeros((4, 100), np.uint8)), _as_npy(_rows(100, round={}))):
        assert fault(data[:-1], ALL_TESTS).code == "truncated-file"
        assert fault(data[:9], ALL_TESTS).code == "truncated-file"
        assert fault(data[:40], ALL_TESTS).code == "truncated-file"
        error = fault(data + b"\0", ALL_TESTS)
        assert error.code == "bytes-after-end" and "1 bytes follow" in str(error)


def _npy(text: str, data: bytes = bytes(80), version: bytes = b"\x01\x00") -> bytes:
    raw = text.encode("latin-1")
    return b"\x93NUMPY" + version + len(raw).to_bytes(2 if version == b"\x01\x00" else 4, "little") + raw + data


GOOD_HEADER = "{'descr': '|u1', 'fortran_order': False, 'shape': (20, 4)}\n"


@pytest.mark.parametrize("text", [
    "", "\n", "0\n", "{}\n", "{'descr': '|u1'}\n", GOOD_HEADER[:-1], GOOD_HEADER.replace("|u1", "|\xfc1"),
    GOOD_HEADER.replace("False", "0"), GOOD_HEADER.replace("(20, 4)", "[20, 4]"), GOOD_HEADER.replace("20", "-20"),
    GOOD_HEADER.replace("20", "True"), GOOD_HEADER.replace("20", "2.0"), GOOD_HEADER.replace("20", "9" * 5_000),
    GOOD_HEADER.replace("20", str(2**50 + 1)), GOOD_HEADER.replace("(20, 4)", "(" * 3_000 + ")" * 3_000),
    GOOD_HEADER.replace("(20, 4)", "(1,) * 10**9"), GOOD_HEADER.replace("(20, 4)", "(1, 1, 1, 20, 4)"),
    GOOD_HEADER.replace("}", ", 'more': 1}"), GOOD_HEADER.replace("'|u1'", "__import__"),
    GOOD_HEADER.replace("'|u1'", "1"),
    GOOD_HEADER.replace("'|u1'", "[('x', '|u1', (2,))]"), GOOD_HEADER.replace("'|u1'", "[]"),
    GOOD_HEADER.replace("|u1", "\\x41"), GOOD_HEADER.replace("{", "{{"), GOOD_HEADER.replace("'shape'", "['shape']"),
    "'" + "a" * 20_000 + "'\n",
])
def test_npy_headers_that_are_not_plain_descriptions(text):
    """A header that is not exactly a plain description of an array is refused, whatever it contains."""
    assert fault(_npy(text), ALL_TESTS).code == "bad-header"


def test_npy_header_versions():
    """Header versions 1 to 3 are read, other versions and marks refused."""
    for version in (b"\x01\x00", b"\x02\x00", b"\x03\x00"):
        assert sum(b.rounds for b in open_rounds(io.BytesIO(_npy(GOOD_HEADER, version=version)), "n", ALL_TESTS)) == 20
    for version in (b"\x00\x00", b"\x01\x01", b"\x04\x00"):
        assert fault(_npy(GOOD_HEADER, version=version), ALL_TESTS).code == "bad-header"
    assert fault(savez(x=np.zeros(1))[:30] + b"?", ALL_TESTS).code == "truncated-file"


def test_structured_npy_with_bad_fields():
    """Names that repeat, padding in disguise and very long elements are refused."""
    def structured(descr: str) -> bytes:
        return _npy(f"{{'descr': {descr}, 'fortran_order': False, 'shape': (1,)}}\n")
    bits = ", ".join(f"('{name}', '|u1')" for name in "xyab")
    assert fault(structured(f"[{bits}, ('a', '|u1')]"), ALL_TESTS).code == "repeated-field"
    assert fault(structured(f"[{bits}, ('', '|u1')]"), ALL_TESTS).code == "unknown-field"
    assert fault(structured(f"[{bits}, ('q', '|V4')]"), ALL_TESTS).field == "q"
    assert fault(structured(f"[{bits}, ('', '|V99')]"), ALL_TESTS).code == "wrong-type"


def test_row_numbers_far_down_in_arrays():
    """Rows are counted right beyond the first batch of an array."""
    columns = columns_of(2**20 + 50, rules=ALL_TESTS)
    columns["y"][2**20 + 30] = 7
    numbers = np.arange(5, 2**20 + 55)
    error = fault(savez(round=numbers, **columns), ALL_TESTS)
    assert (error.code, error.row, error.field) == ("not-a-bit", 2**20 + 31, "y")
    numbers[2**20 + 20:] += 1
    error = fault(savez(round=numbers, **columns), ALL_TESTS)
    assert (error.code, error.row, error.field) == ("missing-round", 2**20 + 21, "round")


def test_negative_values_are_shown_as_they_are():
    """An int8 value of -1 is reported as -1."""
    columns = {name: np.zeros(9, np.int8) for name in "xyab"}
    columns["b"][2] = -1
    error = fault(savez(**columns), RoundRules(no_click=(0, 0)))
    assert (error.code, error.row, error.field) == ("not-a-bit", 3, "b") and "-1" in str(error)


def test_a_bool_has_no_third_value():
    """A byte 2 in a bool array is no no-click but damage."""
    data = save(np.zeros((20, 4), bool))
    error = fault(data[:-1] + b"\x02", RoundRules(no_click=(0, 0)))
    assert (error.code, error.row, error.field) == ("not-a-bit", 20, "b")


class _Shrinking(io.BytesIO):
    """A file that loses its second half after its size was asked for."""

    def seek(self, offset: int, whence: int = 0) -> int:
        place = super().seek(offset, whence)
        if whence == 2:
            self.truncate(place // 2)
        return place


def test_a_file_that_becomes_shorter_while_it_is_read():
    """Bytes that vanish after the size was looked up are reported, not taken for the end."""
    columns = columns_of(1_000, rules=ALL_TESTS)
    for data in (written(writers.write_csv, [batch_of(columns)]), written(writers.write_npy, [batch_of(columns)]),
                 written(writers.write_npy, [batch_of(columns)], packed=True)):
        with pytest.raises(InputError) as caught:
            list(open_rounds(_Shrinking(data), "night.dat", ALL_TESTS))
        assert caught.value.code == "truncated-file"
