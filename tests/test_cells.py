import csv
import json
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from acquire.cells import LONGEST_LINE, RowCodec
from acquire.errors import JournalError
from acquire.tables import SEQ, TIME, Column, Table

TABLE = Table(
    "readings/a",
    "readings/a.csv",
    "",
    (SEQ, TIME, Column("count", "integer"), Column("detail", "string"), Column("x", "number")),
)
CODEC = RowCodec(TABLE)
NUMBERS = (
    st.none() | st.floats(allow_nan=False, allow_infinity=False) | st.integers(-(2**60), 2**60)
)
CELLS = st.tuples(
    NUMBERS,
    st.none() | st.integers(-(2**63), 2**63 - 1),
    st.none() | st.text(st.characters(codec=None), max_size=30),
    NUMBERS,
)


@given(CELLS, st.integers(0, 10**9))
def test_a_canonical_row_reads_back_as_the_same_row(cells, seq):
    row = (seq, *CODEC.canonical(cells))
    line = CODEC.line(row)
    (back,) = CODEC.rows_in(line, seq)
    assert list(map(repr, back)) == list(map(repr, row))  # tells 1 from 1.0 and 0.0 from -0.0
    assert line.count(b"\n") == 1
    assert line.decode().splitlines() == [line.decode()[:-1]]


@given(CELLS)
def test_canonical_cells_stay_as_they_are(cells):
    once = CODEC.canonical(cells)
    assert CODEC.canonical(once) == once


def test_cells_take_the_kind_of_their_column():
    assert CODEC.canonical((1, True, "", 2**53)) == (1.0, 1, None, 9007199254740992.0)
    assert [type(cell) for cell in CODEC.canonical((1, True, "ok", 2))] == [float, int, str, float]


def test_line_breaks_and_control_characters_become_text():
    text = "a\nb\r\tc\0d\x1b\x85\u2028\udc80"
    (_, _, clean, _) = CODEC.canonical((0, 0, text, 0))
    assert clean == r"a\nb\r\tc\x00d\x1b\x85\u2028\udc80"


def test_json_in_a_cell_stays_json():
    detail = json.dumps({"identity": "maker, model\r\n", "mass": 'm*= "0.067" \u00b5'})
    row = (0, *CODEC.canonical((0, 0, detail, 0)))
    (back,) = CODEC.rows_in(CODEC.line(row), 0)
    assert json.loads(back[3]) == json.loads(detail)


def test_lines_are_csv_for_others():
    line = CODEC.line((0, 0.1, None, 'said "1,5"', 1e-300)).decode()
    assert next(csv.reader([line])) == ["0", "0.1", "", 'said "1,5"', "1e-300"]


@pytest.mark.parametrize(
    ("cells", "column"),
    [
        ((math.nan, 0, "", 0), "time_s"),
        ((0, 0, "", math.inf), "x"),
        ((0, 0, "", 10**400), "x"),
        ((0, 0, "", "1.5"), "x"),
        ((0, 1.0, "", 0), "count"),
        ((0, 2**63, "", 0), "count"),
        ((0, 0, 5, 0), "detail"),
        ((0, 0, b"x", 0), "detail"),
    ],
)
def test_a_cell_of_the_wrong_kind_is_refused_by_its_column(cells, column):
    with pytest.raises(JournalError, match=f"for the column {column}"):
        CODEC.canonical(cells)


def test_a_wrong_number_of_cells_is_refused():
    with pytest.raises(JournalError, match="takes 4 cells after seq, got 3"):
        CODEC.canonical((0, 0, ""))


def test_a_line_that_is_too_long_is_refused():
    with pytest.raises(JournalError, match="too long"):
        CODEC.line((0, 0.0, 0, "x" * LONGEST_LINE, 0.0))


@pytest.mark.parametrize(
    "line",
    ["1,0.1,,,", "0,0.1,,", "0,0.1,,,,", "0,nan,,,", "0,inf,,,", "0,x,,,", "0,,1.5,,", ",,,,",
     '0,0.1,,"a,1.0', '0,0.1,,"a"b,1.0', ""],
)  # fmt: skip
def test_a_line_that_is_no_row_is_refused_with_its_number(line):
    with pytest.raises(JournalError, match="readings/a.csv, line 2"):
        CODEC.rows_in(f"{line}\n".encode(), 0)


def test_bytes_that_are_no_lines_are_refused():
    with pytest.raises(JournalError, match="not UTF-8"):
        CODEC.rows_in(b"0,0.1,,\xff,1.0\n", 0)
    with pytest.raises(JournalError, match="torn"):
        CODEC.rows_in(b"0,0.1,,a,1.0", 0)
