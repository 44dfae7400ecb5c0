"""Tables measured elsewhere: every dialect read, nothing doubtful used, errors that help."""

from __future__ import annotations

import math
import os
import random
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from acquire.config import load
from acquire.config.table import TableSection
from acquire.errors import TableError
from acquire.table import MeasuredTable, read_table
from acquire.table.numbers import read_number

NAMES = ("field", "xx", "xy")
Make = Callable[..., MeasuredTable]


def section(
    columns: Sequence[str | int] = ("B", "Rxx", "Rxy"),
    time_column: str | int | None = None,
    **keys: Any,
) -> TableSection:
    """A section that wants these columns, with everything else as given or by default."""
    values = [{"name": f"v{place}", "column": column} for place, column in enumerate(columns)]
    scale = keys.pop("time_scale", 1.0)
    if time_column is not None:
        keys["time"] = {"column": time_column, "scale": scale}
    return TableSection.model_validate({"values": values, **keys})


@pytest.fixture
def read(tmp_path: Path) -> Make:
    """``read(content, ...)``: the table in a file of this content (or these contents)."""

    def make(*contents: str | bytes, **keys: Any) -> MeasuredTable:
        paths = []
        for number, content in enumerate(contents):
            paths.append(tmp_path / f"{'abc'[number]}.dat")
            data = content if isinstance(content, bytes) else content.encode()
            paths[-1].write_bytes(data)
        return read_table(section(**keys), paths)

    return make


def numbers(table: MeasuredTable) -> list[tuple[float | None, ...]]:
    """The values of the good rows."""
    return [reading.values for reading in table.readings if reading.status == "ok"]


def reasons(table: MeasuredTable) -> list[tuple[int, str]]:
    """Line and reason of the bad rows."""
    return [(row.line, row.reason) for row in table.bad_rows]


ROWS = [(0.0, 100.5, -1.25), (0.5, 101.5, 30.0), (1.0, 99.75, 61e-3)]
PLAIN = "B,Rxx,Rxy\n0,100.5,-1.25\n.5,101.5,+30.\n1.0,99.75,61E-3\n"


# ---------------------------------------------------------------------------------- the readings


def test_rows_become_the_readings_of_one_reader_that_ends(read: Make) -> None:
    table = read(PLAIN)
    assert numbers(table) == ROWS
    readings = list(table.readings)
    assert [reading.seq for reading in readings] == [0, 1, 2, 3]
    assert {reading.reader for reading in readings} == {"table"}
    assert [reading.status for reading in readings] == ["ok", "ok", "ok", "end"]
    assert readings[-1].values == (None, None, None)
    assert table.columns == ("B", "Rxx", "Rxy")
    assert table.bad_rows == ()


def test_readings_are_a_sequence_that_can_be_read_again(read: Make) -> None:
    readings = read(PLAIN + "oops\n").readings
    assert len(readings) == 5
    assert list(readings) == list(readings) == [readings[index] for index in range(5)]
    assert readings[-1].status == "end"
    assert readings[1:3] == list(readings)[1:3]
    with pytest.raises(IndexError):
        readings[5]


def test_without_time_the_rows_number_stands_for_it(read: Make) -> None:
    table = read(PLAIN)
    assert not table.has_time
    assert [reading.time_s for reading in table.readings] == [0.0, 1.0, 2.0, 2.0]
    assert any("no time column" in note for note in table.notes)


def test_time_is_scaled_and_counts_from_the_first_row(read: Make) -> None:
    table = read("t,B\n10,1\n11,2\n13,3\n", columns=["B"], time_column="t", time_scale=60.0)
    assert table.has_time
    assert [reading.time_s for reading in table.readings] == [0.0, 60.0, 180.0, 180.0]
    assert any("at 600 s" in note for note in table.notes)
    assert numbers(table) == [(1.0,), (2.0,), (3.0,)]


def test_numbers_stay_as_they_are_in_the_file(tmp_path: Path) -> None:
    (tmp_path / "a").write_text("1 2\n")
    values = [{"name": "a", "column": 1, "scale": 1e-3}, {"name": "b", "column": 2, "scale": -2.0}]
    table = read_table(TableSection.model_validate({"values": values}), [tmp_path / "a"])
    assert numbers(table) == [(1.0, 2.0)]


def test_files_say_how_they_were_read(read: Make) -> None:
    (file,) = read("# by hand\n\n" + PLAIN.replace(",", "\t") + "x\n").files
    assert (file.rows, file.bad, file.heading_line, file.first_line) == (4, 1, 3, 4)
    assert (file.delimiter, file.encoding) == ("tabs", "utf-8")
    assert str(file) == (
        "a.dat: 4 rows, 1 of them bad, from line 4 on, headings in line 3; separated by tabs, utf-8"
    )


# ----------------------------------------------------------------------------------- the dialects


@pytest.mark.parametrize("mark", ["\t", ",", ";", "|", " ", "    ", " \t ", ", ", " ; "])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_a_delimiter_is_found_with_every_line_end(read: Make, mark: str, end: str) -> None:
    assert numbers(read(PLAIN.replace(",", mark).replace("\n", end))) == ROWS


@pytest.mark.parametrize(
    ("key", "mark"),
    [("tab", "\t"), ("comma", ","), ("semicolon", ";"), ("space", "  "), (" ", " "), ("\t", "\t"),
     (":", ":"), ("^", "^"), ("x", "x"), ("\x1f", "\x1f"), ("§", "§")],
)  # fmt: skip
def test_a_delimiter_can_be_given(read: Make, key: str, mark: str) -> None:
    text = PLAIN.replace("Rxx", "U").replace("Rxy", "V").replace(",", mark)
    assert numbers(read(text, columns=["B", "U", "V"], delimiter=key)) == ROWS


@pytest.mark.parametrize("mark", ["\t", ";", "|", " ", "   "])
@pytest.mark.parametrize("delimiter", ["auto", "given"])
@pytest.mark.parametrize("columns", [("B", "Rxx", "Rxy"), (1, 2, 3)])
def test_decimal_commas_are_not_taken_for_delimiters(
    read: Make, mark: str, delimiter: str, columns: Sequence[str | int]
) -> None:
    text = PLAIN.replace(",", mark).replace(".", ",")
    key = "auto" if delimiter == "auto" else mark[0]
    assert numbers(read(text, columns=columns, decimal=",", delimiter=key)) == ROWS


@pytest.mark.parametrize("mark", ["\t", ";", " "])
@pytest.mark.parametrize("columns", [("B", "Rxx"), (1, 2), (1, 3), (2,)])
def test_an_unexpected_decimal_comma_is_an_error_and_never_a_number(
    read: Make, mark: str, columns: Sequence[str | int]
) -> None:
    text = f"B{mark}Rxx{mark}Rxy\n1,5{mark}2,5{mark}3,5\n1,6{mark}2,6{mark}3,5\n"
    with pytest.raises(TableError, match='decimal = ","'):
        read(text, columns=columns)


def test_decimal_commas_between_commas_are_read_in_quotes_only(read: Make) -> None:
    quoted = 'B,U\n"1,5","2,5"\n"1,6","2,75"\n'
    assert numbers(read(quoted, columns=["B", "U"], decimal=",")) == [(1.5, 2.5), (1.6, 2.75)]
    with pytest.raises(TableError):
        read(quoted.replace('"', ""), columns=["B", "U"], decimal=",")


def test_a_table_with_some_wholes_does_not_hide_its_decimal_commas(read: Make) -> None:
    text = "1;2;3\n" + "1,5;2;3\n" * 3
    with pytest.raises(TableError, match='3 rows, most of all.*set decimal = ","'):
        read(text, columns=[1, 2])


def test_comment_lines_do_not_mislead_the_search_for_the_delimiter(read: Make) -> None:
    comments = "".join(f"# 1, 2, 3, {n}, 5, 6\n" for n in range(500))
    text = comments + "B\tRxx\tRxy\n" + "".join("1\t2\t3\n# 1,2,3\n" for _ in range(10))
    assert numbers(read(text)) == [(1.0, 2.0, 3.0)] * 10


def test_long_settings_above_the_numbers_do_not_mislead_it_either(read: Make) -> None:
    text = "".join(f"Channel {n}: 0,{n},2,3;1\n" for n in range(700))
    text += "".join(f"{n}\t2\t3\n" for n in range(100))
    table = read(text, columns=[1, 2, 3], comment="")
    assert len(numbers(table)) == 100
    assert table.bad_rows == ()


def test_empty_cells_in_columns_that_are_not_wanted_do_not_shift_others(read: Make) -> None:
    text = "B\tT\tRxx\tRxy\n1\t\t2\t3\n2\t4.2\t2\t3\n3\t\t2\t3\n"
    assert numbers(read(text)) == [(1.0, 2.0, 3.0), (2.0, 2.0, 3.0), (3.0, 2.0, 3.0)]


def test_text_in_columns_that_are_not_wanted_is_let_be(read: Make) -> None:
    text = 'when,B,Rxx,Rxy,remark\n27.10.2009 15:32,1,2,3,"fine, really"\n,2,2,3,\n'
    assert numbers(read(text)) == [(1.0, 2.0, 3.0), (2.0, 2.0, 3.0)]


def test_quoted_numbers_and_headings(read: Make) -> None:
    text = '"B (T)";"R; xx";"Rxy"\n"1.5";"2";3\n'
    assert numbers(read(text, columns=["B", "R; xx", "Rxy"])) == [(1.5, 2.0, 3.0)]


@pytest.mark.parametrize("mark", ["\t", ",", ";", "|"])
def test_a_delimiter_at_the_end_of_each_line_or_some(read: Make, mark: str) -> None:
    text = f"B{mark}U{mark}\n1{mark}2{mark}\n3{mark}4\n5{mark}6{mark}{mark} {mark}\n"
    table = read(text, columns=["B", "U"])
    assert numbers(table) == [(1.0, 2.0), (3.0, 4.0), (5.0, 6.0)]
    assert table.bad_rows == ()


def test_lines_of_delimiters_alone_are_blank_lines(read: Make) -> None:
    assert read(PLAIN + ",,\n\n  \n,,,,\n").bad_rows == ()


@pytest.mark.parametrize(
    "encoding",
    ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "utf-32", "latin-1", "cp1252"],
)
@pytest.mark.parametrize("given", [False, True])
def test_encodings(read: Make, encoding: str, given: bool) -> None:
    text = "Messung für µ\nB/T;Rxx/mΩ;Rxy\n1;2;3\n"
    if encoding in ("latin-1", "cp1252"):
        text = text.replace("Ω", "Ohm")
    table = read(text.encode(encoding), encoding=encoding if given else "auto")
    assert numbers(table) == [(1.0, 2.0, 3.0)]
    assert table.columns[0] == "B/T"


def test_windows_quotes_and_what_only_latin_1_has(read: Make) -> None:
    assert read(b"\x80\x93\xb5\x94\nB\tU\n1\t2\n", columns=["B", "U"]).files[0].encoding == "cp1252"
    assert read(b"\x81\x8d\nB\tU\n1\t2\n", columns=["B", "U"]).files[0].encoding == "latin-1"


def test_an_end_of_file_mark_of_old_systems_is_no_row(read: Make) -> None:
    assert read(PLAIN + "\x1a").bad_rows == ()


@pytest.mark.parametrize("number", ["1.5D-3", "1.5d-3", "1.5E-3", "1.5e-03", "+1.5E-3", "0015E-4"])
def test_exponents(read: Make, number: str) -> None:
    assert numbers(read(f"1\t{number}\n", columns=[1, 2])) == [(1.0, 1.5e-3)]


# ---------------------------------------------------------------------------- headings and preamble


@pytest.mark.parametrize(
    "line",
    ["B (T)\tRxx (Ohm)\tRxy (Ohm)", "B [T]\tRxx [Ohm]\tRxy [Ohm]", "B / T\tRxx / Ohm\tRxy / Ohm",
     "B/T\tRxx\tRxy(kOhm)", "  B \t Rxx \t Rxy  ", '"B (T)"\t"Rxx"\t"Rxy"', "# B\tRxx\tRxy",
     "#B\tRxx\tRxy", "% B\tRxx\tRxy", "## B Rxx Rxy", "B, Rxx, Rxy", "B (T)  Rxx (Ohm)  Rxy (Ohm)",
     "B (T) Rxx (Ohm) Rxy (k Ohm)", "B;Rxx;Rxy;;", "! B | Rxx | Rxy"],
)  # fmt: skip
@pytest.mark.parametrize("mark", ["\t", " ", ","])
def test_headings_with_units_in_comments_and_cut_otherwise(
    read: Make, line: str, mark: str
) -> None:
    text = f"# measured by hand\nSample 17, cooled twice\n{line}\n1{mark}2{mark}3\n"
    assert numbers(read(text)) == [(1.0, 2.0, 3.0)]


def test_a_heading_can_be_given_with_its_unit(read: Make) -> None:
    text = "R (Ohm)\tR (kOhm)\tB\n1\t2\t3\n"
    assert numbers(read(text, columns=["B", "R (kOhm)"])) == [(3.0, 2.0)]
    assert numbers(read(text, columns=[" B ", 1])) == [(3.0, 1.0)]


def test_a_whole_heading_comes_before_one_without_its_unit(read: Make) -> None:
    assert numbers(read("B (set)\tB\n1\t2\n", columns=["B"])) == [(2.0,)]


def test_lines_of_units_and_settings_are_preamble(read: Make) -> None:
    text = "Field 5 T at 0.2 T/min\nR 1 2\nB\tRxx\tRxy\nT\tOhm\tOhm\n\n-\t-\t-\n1\t2\t3\n"
    table = read(text)
    assert numbers(table) == [(1.0, 2.0, 3.0)]
    assert table.bad_rows == ()
    assert table.files[0].first_line == 7


@pytest.mark.parametrize("heading", [False, True])
@pytest.mark.parametrize("comment", ["", "%"])
def test_header_lines_that_are_no_comments_are_preamble(
    read: Make, heading: bool, comment: str
) -> None:
    text = "# sweep of Monday\n# from 0 to 5\n#\nB\tRxx\tRxy\n1\t2\t3\n"
    table = read(text, columns=[1, 2, 3], heading=heading, comment=comment)
    assert numbers(table) == [(1.0, 2.0, 3.0)]
    assert table.bad_rows == ()


def test_columns_by_number_count_from_1(read: Make) -> None:
    table = read("1\t2\t3\t4\n", columns=[4, 2], heading=False)
    assert numbers(table) == [(4.0, 2.0)]
    assert table.columns == ("4", "2")


def test_bad_rows_at_the_top_are_counted_and_not_passed_over(read: Make) -> None:
    assert reasons(read("B\tRxx\tRxy\n1\t---\t3\n1\t2\t3\n")) == [
        (2, "column Rxx: not a number: '---'")
    ]
    assert [line for line, _ in reasons(read("1\tnan\n2\tinf\n3\t4\n", columns=[1, 2]))] == [1, 2]


def test_a_table_repeated_in_one_file(read: Make) -> None:
    table = read(PLAIN + PLAIN)
    assert numbers(table) == ROWS + ROWS
    assert reasons(table) == [(5, "column B: not a number: 'B'")]


def test_columns_that_change_places_halfway_are_refused(read: Make) -> None:
    with pytest.raises(TableError, match="a.dat: line 5 has the columns in another order"):
        read(PLAIN + "B,Rxy,Rxx\n1,2,3\n")


# ------------------------------------------------------------------------------------- the bad rows


@pytest.mark.parametrize(
    ("line", "reason"),
    [
        ("1\t2", "too few cells: 2 of 3"),
        ("1", "too few cells: 1 of 3"),
        ("1\t2\t3\t4", "too many cells: 4 of 3"),
        ("1\t2\t3\t\t5", "too many cells: 5 of 3"),
        ("1\t2\t3 # jump", "a comment after the numbers"),
        ("1\t2\t3\t# jump", "a comment after the numbers"),
        ("1\t2\t#", "a comment after the numbers"),
        ("1\t\t3", "column Rxx: empty"),
        ("1\t2\t", "column Rxy: empty"),
        ("1\t2\tnan", "column Rxy: not a number: 'nan'"),
        ("1\tNaN\t3", "column Rxx: not a number: 'NaN'"),
        ("1\tinf\t3", "column Rxx: not a number: 'inf'"),
        ("1\t-Infinity\t3", "column Rxx: not a number: '-Infinity'"),
        ("1\t---\t3", "column Rxx: not a number: '---'"),
        ("1\tOVLD\t3", "column Rxx: not a number: 'OVLD'"),
        ("1\t1_000\t3", "column Rxx: not a number: '1_000'"),
        ("1\t0x10\t3", "column Rxx: not a number: '0x10'"),
        ("1\t1e\t3", "column Rxx: not a number: '1e'"),
        ("1\t1.5.2\t3", "column Rxx: a number with other marks than decimal = \".\": '1.5.2'"),
        ("1\t2 mV\t3", "column Rxx: not a number: '2 mV'"),
        ("1\t١٢\t3", "column Rxx: not a number: '١٢'"),
        ("1\t−2\t3", "column Rxx: not a number: '−2'"),
        ("1\t1+3\t3", "column Rxx: not a number: '1+3'"),
        ("1\t1e999\t3", "column Rxx: too large a number: '1e999'"),
        ("1\t1,234\t3", "column Rxx: a number with other marks than decimal = \".\": '1,234'"),
        ("1\t1,234.5\t3", "column Rxx: a number with other marks than decimal = \".\": '1,234.5'"),
        ("1\t1'234.5\t3", 'column Rxx: a number with other marks than decimal = ".": "1\'234.5"'),
        ("1\t1 234\t3", "column Rxx: a number with other marks than decimal = \".\": '1 234'"),
        ("End of sweep", "too few cells: 1 of 3"),
        ('"1\t2\t3', "too few cells: 1 of 3"),
        ("9" * 500 + "\t2\t3", f"column B: too large a number: '{'9' * 40}...'"),
    ],
)
def test_a_bad_row_is_counted_with_its_reason_and_never_used(
    read: Make, line: str, reason: str
) -> None:
    table = read(f"B\tRxx\tRxy\n1\t2\t3\n{line}\n4\t5\t6\n")
    assert numbers(table) == [(1.0, 2.0, 3.0), (4.0, 5.0, 6.0)]
    assert reasons(table) == [(3, reason)]
    bad = table.readings[1]
    assert (bad.seq, bad.status, bad.values) == (1, "bad_reply", (None, None, None))
    assert bad.detail == str(table.bad_rows[0])
    assert bad.detail.startswith(f"a.dat, line 3: {reason}: ")
    assert table.files[0].bad == 1


@pytest.mark.parametrize("cell", ["1.234", "1.234,5", "1 234,5", "1_2", "nan", "1,2,3"])
def test_with_decimal_commas_points_are_refused(read: Make, cell: str) -> None:
    table = read(f"B;U\n1,5;2,5\n{cell};2,5\n", columns=["B", "U"], decimal=",")
    assert numbers(table) == [(1.5, 2.5)]
    assert len(table.bad_rows) == 1


def test_a_comment_string_in_quotes_is_no_comment(read: Make) -> None:
    table = read('B,Rxx,Rxy,remark\n1,2,3,"run #3"\n1,2,3,run #3\n')
    assert reasons(table) == [(3, "a comment after the numbers")]


def test_a_long_bad_row_is_kept_in_part(read: Make) -> None:
    (row,) = read(PLAIN + "x" * 100_000 + "\n").bad_rows
    assert len(row.text) == 200


def test_a_bad_row_can_be_shown_in_a_terminal(read: Make) -> None:
    table = read("B\x1b[2J\tµ\n1\t2\n\x1b[31m\tµ\n", columns=[1, "µ"])
    assert str(table.bad_rows[0]).isprintable()
    assert table.bad_rows[0].text == "\\x1b[31m\\tµ"
    assert table.columns[0].isprintable()


def test_line_numbers_are_those_of_an_editor(read: Make) -> None:
    text = "# c\r\n\r\nB,Rxx,Rxy\r\n1,2,3\r\n\r\n# c\r\nbad\r\n1,2,3\r\nbad\r\n"
    assert [row.line for row in read(text).bad_rows] == [7, 9]
    assert [row.line for row in read(text.replace("\r\n", "\r")).bad_rows] == [7, 9]


# ---------------------------------------------------------------------------------------- the time


def times(table: MeasuredTable) -> list[float]:
    """The time of each row, bad ones and the end included."""
    return [reading.time_s for reading in table.readings]


def test_rows_whose_time_does_not_increase_are_bad(read: Make) -> None:
    table = read("t,B\n0,1\n1,2\n1,3\n0.5,4\n2,5\n", columns=["B"], time_column="t")
    assert numbers(table) == [(1.0,), (2.0,), (5.0,)]
    assert reasons(table) == [
        (4, "time does not increase: 1.0 s after 1.0 s"),
        (5, "time does not increase: 0.5 s after 1.0 s"),
    ]
    assert times(table) == [0.0, 1.0, 1.0, 1.0, 2.0, 2.0]


def test_bad_rows_have_the_time_before_them(read: Make) -> None:
    table = read("t,B\n4,x\n5,1\n6,y\n7,2\n", columns=["B"], time_column="t")
    assert times(table) == [0.0, 0.0, 0.0, 2.0, 2.0]


@pytest.mark.parametrize("first", ["0", "1.5", "-3"])
def test_a_time_that_begins_anew_goes_on_behind_the_file_before(read: Make, first: str) -> None:
    up = "t,B\n0,1\n1,2\n2,3\n4,4\n"
    down = f"t,B\n{first},1\n{float(first) + 0.5},2\n"
    table = read(up, down, columns=["B"], time_column="t")
    assert times(table) == [0.0, 1.0, 2.0, 4.0, 5.0, 5.5, 5.5]
    assert [reading.seq for reading in table.readings] == list(range(7))
    assert any(note.startswith("b.dat: its time begins anew") for note in table.notes)


def test_a_time_that_goes_on_by_itself_stays(read: Make) -> None:
    table = read("t,B\n0,1\n1,2\n", "t,B\n61,1\n62,2\n", columns=["B"], time_column="t")
    assert times(table) == [0.0, 1.0, 61.0, 62.0, 62.0]
    assert not any("anew" in note for note in table.notes)


def test_three_files_of_one_row_each(read: Make) -> None:
    table = read("t,B\n3,1\n", "t,B\n3,2\n", "t,B\n3,3\n", columns=["B"], time_column="t")
    assert times(table) == [0.0, 1.0, 2.0, 2.0]


def test_several_files_may_be_written_differently(read: Make) -> None:
    table = read(PLAIN, "Rxy\tB\tRxx\r\n3\t1\t2\r\nbad\r\n")
    assert numbers(table) == [*ROWS, (1.0, 2.0, 3.0)]
    assert [reading.seq for reading in table.readings] == list(range(6))
    assert times(table) == [0.0, 1.0, 2.0, 3.0, 4.0, 4.0]
    (bad,) = table.bad_rows
    assert (bad.file.name, bad.line) == ("b.dat", 3)
    assert table.readings[4].detail.startswith("b.dat, line 3")


def test_a_time_out_of_all_proportion_is_a_bad_row(read: Make) -> None:
    table = read("t,B\n0,1\n1e300,2\n2,3\n", columns=["B"], time_column="t")
    assert reasons(table) == [(3, "too large a time: 1e+300 s; see to its scale")]


def test_a_last_line_without_an_end_is_said(read: Make) -> None:
    assert any("last line has no end" in note for note in read(PLAIN.rstrip()).notes)
    assert not any("last line has no end" in note for note in read(PLAIN).notes)


# -------------------------------------------------------------------------------------- the errors


@pytest.mark.parametrize(
    ("content", "keys", "message"),
    [
        ("", {}, "is empty"),
        ("\n \n\r\n", {}, "only blank lines"),
        ("# nothing\n", {"columns": [1]}, "only comments and blank lines"),
        (b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR\0\0\1\0", {}, "is not text"),
        (bytes(range(256)) * 8, {}, "is not text"),
        (b"\0" * 100, {}, "is not text"),
        ("für\n1 2\n".encode("latin-1"), {"encoding": "utf-8"}, r"not text in utf-8 \(byte 1\)"),
        ("B\tR1X\tRxy\n1\t2\t3\n", {}, "no column is headed 'Rxx'.* did you mean 'Rxy'"),
        ("B\tR1X\tRxy\n1\t2\t3\n", {}, "The headings are 'B', 'R1X', 'Rxy'"),
        ("# B\tRxx\tR1Y\n1\t2\t3\n", {}, "'Rxy'.*The headings are 'B', 'Rxx', 'R1Y'"),
        ("B\tRxx\tRxy\tRxx\n1\t2\t3\t4\n", {}, "columns 2 and 4 are both headed 'Rxx'"),
        ("1\t2\t3\n", {}, "no line of headings has 'B'"),
        ("B\tRxx\tRxy\n1\t2\t3\t4\n", {}, "has 4 cells and there are 3 headings"),
        ("B\tRxx\tRxy\n", {}, "only comments and blank lines"),
        ("B\tRxx\tRxy\n1,2,3\n", {"delimiter": "tab"}, "has 1 cells and there are 3 headings"),
        ("1\t2\t3\n", {"columns": [1, 4]}, "comes nearest, but has 3 cells"),
        ("B\tRxx\tRxy\nx\ty\tz\n", {}, "column 'B' is not a number: 'x'"),
        ("15:32\t1\n15:33\t2\n", {"columns": [2], "time_column": 1}, "not a number: '15:32'"),
        ("1 2\n1 2 3 4\n1 2 3 4 # x\n", {"columns": [1, 3], "heading": False}, None),
        ("1,5\t2\n", {"columns": [1, 2]}, 'set decimal = ","'),
        ("1.5\t2\n", {"columns": [1, 2], "decimal": ","}, r'set decimal = "\."'),
    ],
)
def test_what_can_t_be_read_is_an_error_that_helps(
    read: Make, content: str | bytes, keys: dict[str, Any], message: str | None
) -> None:
    if message is None:
        assert len(read(content, **keys).bad_rows) == 1
        return
    with pytest.raises(TableError, match=message) as caught:
        read(content, **keys)
    assert "a.dat: " in str(caught.value)
    assert "\n" not in str(caught.value)


def test_none_of_the_rows_can_be_used(read: Make) -> None:
    with pytest.raises(TableError, match="none of its 1 rows can be used; the first: .*comment"):
        read("1 2 3 # x\n", columns=[1, 2])


def test_files_that_are_none(tmp_path: Path) -> None:
    fifo = tmp_path / "there"
    fifo.write_text(PLAIN)
    for paths, message in [
        ([], "no table was given"),
        ([tmp_path / "gone.dat"], "gone.dat: can't be read .No such file"),
        ([tmp_path], "is a folder"),
        ([Path("/dev/null")], "is not a file"),
        ([fifo, fifo], "is given twice"),
        ([Path("a\0b")], "can't be"),
    ]:
        with pytest.raises(TableError, match=message):
            read_table(section(), paths)


def test_a_table_can_come_through_a_pipe(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    child = os.posix_spawn("/bin/sh", ["sh", "-c", f"printf '1 2\\n3 4\\n' > '{pipe}'"], os.environ)
    table = read_table(section([1, 2]), [pipe])
    assert os.waitpid(child, 0)[1] == 0
    assert numbers(table) == [(1.0, 2.0), (3.0, 4.0)]


@pytest.mark.parametrize(
    "keys",
    [
        {"delimiter": "."}, {"delimiter": "e"}, {"delimiter": '"'}, {"delimiter": "\n"},
        {"delimiter": "--"}, {"comment": " "}, {"comment": "1"}, {"comment": "e"},
        {"comment": ";", "delimiter": ";"}, {"encoding": "nonsense"}, {"encoding": "hex"},
        {"encoding": "a\0b"}, {"heading": False}, {"columns": [""]}, {"columns": [0]},
        {"columns": []}, {"decimal": ";"},
    ],
)  # fmt: skip
def test_a_section_that_can_t_be_meant_is_refused(keys: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match="."):
        section(**keys)


def test_the_template_is_accepted_and_reads_what_it_describes(tmp_path: Path) -> None:
    rig, _ = load(Path(__file__).parents[1] / "configs" / "table.toml")
    assert rig.table is not None
    path = tmp_path / "up.dat"
    path.write_text("# up\nt (s)\tB (T)\tVxx_X\tVxy_X\n0\t0.1\t1e-6\t2e-6\n0.2\t0.2\t1e-6\t2e-6\n")
    table = read_table(rig.table, [path])
    assert numbers(table) == [(0.1, 1e-6, 2e-6), (0.2, 1e-6, 2e-6)]
    assert table.has_time


# -------------------------------------------------------------------------------- generated tables

FINITE = st.floats(allow_nan=False, allow_infinity=False)
RANDOM_FILES = settings(
    deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture]
)


@st.composite
def dialects(draw: st.DrawFn) -> dict[str, Any]:
    """How a table is written."""
    decimal = draw(st.sampled_from([".", ","]))
    marks = ["\t", ";", "|", " ", "   ", " ; "] + ([",", ", "] if decimal == "." else [])
    return {
        "decimal": decimal,
        "mark": draw(st.sampled_from(marks)),
        "end": draw(st.sampled_from(["\n", "\r\n", "\r"])),
        "encoding": draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16", "cp1252"])),
        "exponent": draw(st.sampled_from(["e", "E", "d", "D"])),
        "trailing": draw(st.booleans()),
        "headings": draw(st.sampled_from(["none", "plain", "units", "quoted", "comment"])),
        "preamble": draw(st.lists(st.sampled_from(
            ["# B; Rxx, Rxy", "Messung für Bar 3", "", "#", "Rate: 0.2", "# 1,5;2,5"]
        ), max_size=4)),
    }  # fmt: skip


def written(rows: Sequence[Sequence[float]], how: dict[str, Any]) -> bytes:
    """A table of three columns, written in a dialect."""
    heads = {
        "none": [], "plain": ["B", "Rxx", "Rxy"], "units": ["B(T)", "Rxx(Ohm)", "Rxy/Ohm"],
        "quoted": ['"B"', '"Rxx"', '"Rxy"'], "comment": ["#B", "Rxx", "Rxy"],
    }[how["headings"]]  # fmt: skip
    tail = how["mark"] if how["trailing"] else ""
    lines = [*how["preamble"]] + ([how["mark"].join(heads)] if heads else [])
    for row in rows:
        cells = [repr(number).replace("e", how["exponent"]) for number in row]
        lines.append(how["mark"].join(cell.replace(".", how["decimal"]) for cell in cells) + tail)
    return (how["end"].join(lines) + how["end"]).encode(how["encoding"])


@RANDOM_FILES
@given(st.lists(st.tuples(FINITE, FINITE, FINITE), min_size=1, max_size=20), dialects())
def test_a_table_written_in_any_dialect_reads_back_to_the_last_bit(
    tmp_path: Path, rows: list[tuple[float, ...]], how: dict[str, Any]
) -> None:
    path = tmp_path / "table"
    path.write_bytes(written(rows, how))
    columns: Sequence[str | int] = (1, 2, 3) if how["headings"] == "none" else ("B", "Rxx", "Rxy")
    table = read_table(section(columns, decimal=how["decimal"]), [path])
    assert numbers(table) == rows
    assert table.bad_rows == ()


CELLS = st.one_of(
    FINITE.map(repr),
    st.sampled_from(["", "nan", "---", "1,5", "1_0", "#", '"', '"1"', "B", "Rxx", "Rxy", "t", "0"]),
    st.text(max_size=5),
)
MARKS = st.sampled_from(["\t", ",", ";", " ", "|", "\n", "\r", "\n\n", "\r\n"])
NONSENSE = st.lists(st.tuples(CELLS, MARKS), max_size=60).map(
    lambda pairs: "".join(cell + mark for cell, mark in pairs)
)
SECTIONS = st.builds(
    section,
    columns=st.sampled_from([("B", "Rxx"), (1,), (1, 2, 3), ("B", 1), ("t",), ("1", "2")]),
    time_column=st.sampled_from([None, "t", 1, 2]),
    delimiter=st.sampled_from(["auto", "tab", "comma", "space", "x", "|"]),
    decimal=st.sampled_from([".", ","]),
    comment=st.sampled_from(["#", "", "%", "//", ";"]),
    encoding=st.sampled_from(["auto", "utf-8", "utf-16", "latin-1", "cp037", "idna", "utf-7"]),
)


def check(table: MeasuredTable) -> None:
    """What holds for every table that was read."""
    readings = list(table.readings)
    assert [reading.seq for reading in readings] == list(range(len(table.readings)))
    assert [reading.status == "end" for reading in readings] == [False] * (len(readings) - 1) + [
        True
    ]
    assert sum(reading.status == "bad_reply" for reading in readings) == len(table.bad_rows)
    all_times = [reading.time_s for reading in readings]
    assert all(map(math.isfinite, all_times))
    assert all_times == sorted(all_times)
    for values in numbers(table):
        assert all(value is not None and math.isfinite(value) for value in values)
    assert numbers(table)
    assert sum(file.rows for file in table.files) == len(readings) - 1


@RANDOM_FILES
@given(SECTIONS, st.lists(st.one_of(NONSENSE, st.text(), st.binary()), min_size=1, max_size=3))
@example(section((1,), comment=""), ["1\n"])
@example(section(("1", "2")), ["1\t2\n" * 30_000])
@example(section(("B",)), ["B " * 30_000 + "\n"] * 2)
def test_nonsense_raises_nothing_but_what_can_be_told(
    tmp_path: Path, how: TableSection, contents: list[str | bytes]
) -> None:
    paths = []
    for number, content in enumerate(contents):
        paths.append(tmp_path / str(number))
        data = content.encode("utf-8", "replace") if isinstance(content, str) else content
        paths[-1].write_bytes(data)
    try:
        table = read_table(how, paths)
    except TableError as error:
        assert str(error)
    else:
        check(table)


@RANDOM_FILES
@given(st.lists(st.lists(FINITE, min_size=1, max_size=12), min_size=1, max_size=3))
def test_time_never_goes_back_over_any_files(tmp_path: Path, files: list[list[float]]) -> None:
    paths = []
    for number, stamps in enumerate(files):
        paths.append(tmp_path / str(number))
        paths[-1].write_text("".join(f"{stamp!r}\t1\n" for stamp in [0.0, *stamps]))
    check(read_table(section([2], time_column=1), paths))


@given(st.text(), st.sampled_from([".", ","]))
def test_a_cell_is_a_number_or_not_whatever_it_holds(text: str, decimal: str) -> None:
    value = read_number(text, decimal)
    if value is not None:
        assert math.isfinite(value)
        assert float(text.replace(",", ".")) == value or "d" in text.lower()
        assert "_" not in text


def test_the_quick_way_and_the_strict_way_agree(read: Make) -> None:
    """A quote makes a line take the strict way."""
    chosen = random.Random(17)
    cells = [repr(chosen.gauss(0, 10 ** chosen.randint(-20, 20))) for _ in range(3000)]
    lines = [cells[place : place + 3] for place in range(0, 3000, 3)]
    plain = read("".join(",".join(line) + "\n" for line in lines), columns=[1, 2, 3])
    quoted = read("".join('"' + '","'.join(line) + '"\n' for line in lines), columns=[1, 2, 3])
    assert numbers(plain) == numbers(quoted) == [tuple(map(float, line)) for line in lines]


@pytest.mark.parametrize(("mark", "decimal"), [("\t", "."), (";", ","), (" ", ".")])
def test_a_hundred_thousand_rows_take_no_time(read: Make, mark: str, decimal: str) -> None:
    """A tenth of a million in a tenth of 5 s, with a reserve for a machine that is busy."""
    rows = ["t,B,Rxx,Rxy"]
    rows += [f"{n / 5:.1f},{n * 1e-5:.6f},{n % 97 * 1e-7:.5E},1.25E-3" for n in range(100_000)]
    text = "\n".join(rows).replace(",", mark).replace(".", decimal) + "\n"
    began = time.process_time()
    table = read(text, time_column="t", decimal=decimal)
    assert len(table.readings) == 100_001
    assert table.bad_rows == ()
    assert time.process_time() - began < 1.5
