from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from acquire.config.reader import ReaderSection, Setting
from acquire.reply import (
    LONGEST_TEXT,
    escaped,
    fits,
    parse_replies,
    read_number,
    read_setting,
)


def section(*values: dict[str, object], **keys: object) -> ReaderSection:
    plain = {
        "name": "lockin",
        "resource": "TCPIP::127.0.0.1::1::SOCKET",
        "write_termination": "\n",
        "read_termination": "\n",
        "queries": ["X?"],
        "fields": max(int(str(value["position"])) for value in values),
        "values": list(values),
    }
    return ReaderSection.model_validate({**plain, **keys})


X = {"name": "x", "position": 1}
XY = section(X, {"name": "y", "position": 2})


@pytest.mark.parametrize(
    ("text", "number"),
    [
        ("0", 0.0),
        ("+1.5", 1.5),
        ("-1.25E-06", -1.25e-6),
        (".5", 0.5),
        ("5.", 5.0),
        (" 3e8\t", 3e8),
        ("-0.0", -0.0),
        ("1E+0", 1.0),
    ],
)
def test_numbers_are_read(text: str, number: float) -> None:
    assert read_number(text) == number


@pytest.mark.parametrize(
    "text",
    ["", ".", "e5", "1e", "1,5", "1_000", "0x10", "1.5V", "1 2", "--1", "inf", "nan", "True"]
    + ["1e999", "1.5\x00", "\u0661", "1\n", "1e1.5", "9" * 65, "1" * 60_000 + "x", "½"],
)
def test_what_is_not_wholly_a_number_is_none(text: str) -> None:
    assert read_number(text) is None


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_number_written_by_python_reads_back_the_same(number: float) -> None:
    assert read_number(repr(number)) == number


@given(st.text(max_size=100))
def test_no_text_makes_more_than_a_finite_number_of_it(text: str) -> None:
    number = read_number(text)
    assert number is None or (math.isfinite(number) and number == float(text))


@given(st.lists(st.text(max_size=40), max_size=4))
def test_no_reply_raises_and_values_are_finite_or_none(replies: list[str]) -> None:
    reply = parse_replies(XY, replies)
    assert reply.status in ("ok", "overload", "range", "bad_reply")
    assert len(reply.values) == 2
    assert all(value is None or math.isfinite(value) for value in reply.values)
    assert (reply.status == "ok") == (None not in reply.values and not reply.detail)


def test_a_good_reply_is_kept_as_read() -> None:
    scaled = section({"name": "x", "position": 2, "scale": 1e-3}, fields=3)
    reply = parse_replies(scaled, ["junk,1.5,more"])
    assert (reply.status, reply.values, reply.detail, reply.in_order) == ("ok", (1.5,), "", True)


def test_fields_of_several_replies_are_counted_through() -> None:
    both = section(X, {"name": "y", "position": 3}, queries=["A?", "B?"])
    assert parse_replies(both, ["1,2", "3"]).values == (1.0, 3.0)


def test_blanks_as_separator_separate_once_however_many() -> None:
    blanks = section(X, {"name": "y", "position": 2}, separator=" ")
    assert parse_replies(blanks, ["  1.0    2.0 "]).values == (1.0, 2.0)


@pytest.mark.parametrize("replies", [["1"], ["1,2,3"], [""], [], ["1,2", "3"], ["1;2"]])
def test_a_wrong_count_of_fields_is_out_of_order(replies: list[str]) -> None:
    reply = parse_replies(XY, replies)
    assert (reply.status, reply.values, reply.in_order) == ("bad_reply", (None, None), False)
    assert "where 2 are due" in reply.detail


def test_the_second_half_of_a_reply_has_too_few_fields() -> None:
    assert not parse_replies(XY, ["456"]).in_order


@pytest.mark.parametrize("text", ["", "abc", "1.5V", "0x12", "1.5 1.5", "MAKER"])
def test_what_is_no_number_is_out_of_order_and_leaves_no_value(text: str) -> None:
    reply = parse_replies(XY, [f"1.0,{text}"])
    assert (reply.status, reply.values, reply.in_order) == ("bad_reply", (None, None), False)
    assert "y: " in reply.detail


@pytest.mark.parametrize("text", ["NAN", "nan", "+NaN"])
def test_not_a_number_is_a_bad_reply_in_order(text: str) -> None:
    reply = parse_replies(XY, [f"1.0,{text}"])
    assert (reply.status, reply.values, reply.in_order) == ("bad_reply", (None, None), True)


@pytest.mark.parametrize("text", ["INF", "-inf", "+INFINITY", "NINF"])
def test_infinity_in_words_is_overload(text: str) -> None:
    reply = parse_replies(XY, [f"1.0,{text}"])
    assert (reply.status, reply.values, reply.in_order) == ("overload", (1.0, None), True)


@pytest.mark.parametrize("text", ["9.9e37", "+9.90000E+37", "-9.9E37", "9.91e37", "1e300"])
def test_the_sentinels_of_scpi_are_overload_whatever_is_configured(text: str) -> None:
    tiny = section({"name": "x", "position": 1, "scale": 1e-9, "overload_above": 1e99})
    reply = parse_replies(tiny, [text])
    assert (reply.status, reply.values) == ("overload", (float(text),))


def test_a_configured_text_is_overload_for_its_field_or_for_the_whole_reply() -> None:
    told = section({**X, "overload_texts": ["OVLD"]}, {"name": "y", "position": 2})
    assert parse_replies(told, ["OVLD, 2.0"]).values == (None, 2.0)
    assert parse_replies(told, ["OVLD, 2.0"]).status == "overload"
    whole = parse_replies(told, [" OVLD "])
    assert (whole.status, whole.values, whole.in_order) == ("overload", (None, None), True)
    assert parse_replies(told, ["1.0,OVLD"]).status == "bad_reply"


@pytest.mark.parametrize(
    ("text", "status"),
    [("1000", "ok"), ("-1000", "ok"), ("1001", "overload"), ("-1001", "overload")],
)
def test_overload_above_is_a_magnitude_in_the_unit_of_the_value(text: str, status: str) -> None:
    milli = section({**X, "scale": 1e-3, "overload_above": 1.0})
    assert parse_replies(milli, [text]).status == status


@pytest.mark.parametrize(
    ("text", "status"), [("-0.2", "range"), ("-0.1", "ok"), ("0.1", "ok"), ("0.11", "range")]
)
def test_the_stated_range_includes_its_ends(text: str, status: str) -> None:
    reply = parse_replies(section({**X, "lowest": -0.1, "highest": 0.1}), [text])
    assert (reply.status, reply.values, reply.in_order) == (status, (float(text),), True)


def test_the_range_is_in_the_unit_of_the_value_also_when_the_sign_turns() -> None:
    turned = section({**X, "scale": -1e-3, "lowest": 0.0})
    assert parse_replies(turned, ["-5"]).status == "ok"
    assert parse_replies(turned, ["5"]).status == "range"


@pytest.mark.parametrize(
    ("word", "status"), [("0", "ok"), ("3", "ok"), ("4", "overload"), ("255", "overload")]
)
def test_status_bits_mean_overload_and_values_are_kept(word: str, status: str) -> None:
    bits = section(X, fields=2, overload={"position": 2, "bits": 4})
    reply = parse_replies(bits, [f"1.5,{word}"])
    assert (reply.status, reply.values) == (status, (1.5,))


@pytest.mark.parametrize("word", ["", "-1", "1.5", "x", "1e30"])
def test_what_is_no_status_word_is_out_of_order(word: str) -> None:
    bits = section(X, fields=2, overload={"position": 2, "bits": 4})
    reply = parse_replies(bits, [f"1.5,{word}"])
    assert (reply.status, reply.values, reply.in_order) == ("bad_reply", (None,), False)


def test_the_gravest_finding_is_the_status_and_all_are_told() -> None:
    both = section({**X, "highest": 1.0}, {"name": "y", "position": 2})
    reply = parse_replies(both, ["2.0,9.9e37"])
    assert reply.status == "overload"
    assert "x: 2.0 is above 1.0" in reply.detail
    assert "y: " in reply.detail


def setting(**keys: object) -> Setting:
    return Setting.model_validate({"name": "s", "query": "S?", **keys})


@pytest.mark.parametrize("raw", ["9", "+9", "9.0", " 9 ", "9E0", "09"])
def test_a_code_is_found_by_text_or_number(raw: str) -> None:
    assert read_setting(setting(codes={"8": 0.1, "9": 0.3}), raw) == 0.3


def test_a_code_that_is_not_in_the_table_is_none() -> None:
    codes = setting(codes={"8": 0.1, "A": "auto"})
    assert read_setting(codes, "7") is None
    assert read_setting(codes, "B") is None
    assert read_setting(codes, "A") == "auto"


def test_a_setting_without_codes_is_a_scaled_number_or_a_text() -> None:
    assert read_setting(setting(scale=1e-3), "300") == 300 * 1e-3
    assert read_setting(setting(), "SLOW ") == "SLOW"
    assert read_setting(setting(scale=1e300), "1e300") is None


def test_codes_may_be_scaled_and_keep_their_kind_when_not() -> None:
    assert read_setting(setting(codes={"1": 300}, scale=1e-3), "1") == 300 * 1e-3
    poles = read_setting(setting(codes={"3": 4}), "3")
    assert poles == 4
    assert isinstance(poles, int)


def test_what_is_shown_has_escapes_and_is_cut() -> None:
    assert escaped(b"1.5\r\n\xff") == "1.5\\r\\n\\xff"
    assert escaped("a" * 100, 10) == "a" * 10 + "... (90 more)"
    assert fits("a" * LONGEST_TEXT)
    assert not fits("a" * (LONGEST_TEXT + 1))
