from __future__ import annotations

from collections.abc import Iterator

import pytest
from scripted_instrument import Close, ScriptedInstrument, unterminated

from acquire.config.reader import ReaderSection
from acquire.probe import probe

IDENTITY = "MAKER,MODEL,7,1.0"


def section(resource: str, **keys: object) -> ReaderSection:
    plain = {
        "name": "lockin",
        "resource": resource,
        "write_termination": "\n",
        "read_termination": "\n",
        "timeout_ms": 10_000,
        "identity": {"pattern": "MODEL"},
        "queries": ["XY?", "F?"],
        "fields": 3,
        "values": [
            {"name": "x", "position": 1},
            {"name": "y", "position": 2, "scale": 1e-3},
            {"name": "f", "position": 3, "unit": "Hz"},
        ],
        "settings": [
            {"name": "time_constant", "query": "T?", "unit": "s", "codes": {"9": 0.3}},
            {"name": "mode", "query": "M?"},
        ],
    }
    return ReaderSection.model_validate({**plain, **keys})


@pytest.fixture
def scripted() -> Iterator[ScriptedInstrument]:
    answers = {"*IDN?": IDENTITY, "XY?": "1.5,-2", "F?": "17.77", "T?": "9", "M?": "fast"}
    with ScriptedInstrument(answers) as server:
        yield server


def test_a_good_instrument(scripted: ScriptedInstrument) -> None:
    found = probe(section(scripted.resource))
    assert found.good
    assert (found.reader, found.resource) == ("lockin", scripted.resource)
    assert found.identity == IDENTITY
    assert found.reading is not None
    assert found.reading.values == (1.5, -2.0, 17.77)
    assert found.settings == {"time_constant": 0.3, "mode": "fast"}
    told = [(item.what, item.asked, item.raw, item.meaning) for item in found.exchanges]
    assert told == [
        ("identity", "*IDN?", (IDENTITY + "\n").encode(), IDENTITY),
        ("reading", "XY?", b"1.5,-2\n", "x = 1.5 V, y = -0.002 V"),
        ("reading", "F?", b"17.77\n", "f = 17.77 Hz"),
        ("setting time_constant", "T?", b"9\n", "time_constant = 0.3 s"),
        ("setting mode", "M?", b"fast\n", "mode = fast"),
    ]


def test_only_the_questions_of_the_configuration_are_asked_once_each(
    scripted: ScriptedInstrument,
) -> None:
    probe(section(scripted.resource))
    assert [text for _, text in scripted.questions] == ["*IDN?", "XY?", "F?", "T?", "M?"]


def test_each_exchange_says_how_long_it_took(scripted: ScriptedInstrument) -> None:
    ticks = iter(range(1000))
    found = probe(section(scripted.resource), lambda: float(next(ticks)))
    assert all(item.took_s >= 1.0 for item in found.exchanges)


def test_an_instrument_that_is_not_there(scripted: ScriptedInstrument) -> None:
    scripted.refuse()
    found = probe(section(scripted.resource))
    assert not found.good
    assert (found.identity, found.reading, found.settings) == (None, None, {})
    (identity,) = found.exchanges
    assert (identity.what, identity.raw) == ("identity", b"")
    assert "refused" in str(identity.error)


def test_somebody_else_is_told_with_what_he_said(scripted: ScriptedInstrument) -> None:
    scripted.answers["*IDN?"] = "OTHER,1"
    (identity,) = probe(section(scripted.resource)).exchanges
    assert identity.raw == b"OTHER,1\n"
    assert "does not match 'MODEL'" in str(identity.error)


def test_one_wrong_question_does_not_hide_the_others(scripted: ScriptedInstrument) -> None:
    scripted.answers["XY?"] = (Close(),)
    scripted.answers["T?"] = b"\xff\n"
    found = probe(section(scripted.resource))
    assert not found.good
    assert found.reading is None
    assert found.settings == {"mode": "fast"}
    assert [item.error is None for item in found.exchanges] == [True, False, True, False, True]
    assert found.exchanges[3].raw == b"\xff\n"


def test_a_wrong_terminator_is_shown(scripted: ScriptedInstrument) -> None:
    scripted.answers["M?"] = unterminated("fast\r")
    found = probe(section(scripted.resource, timeout_ms=100))
    assert found.exchanges[-1].raw == b"fast\r"
    assert "but with" in str(found.exchanges[-1].error)


def test_a_reply_that_can_not_be_read_is_told_at_the_last_query(
    scripted: ScriptedInstrument,
) -> None:
    scripted.answers["F?"] = "17.77,3"
    found = probe(section(scripted.resource))
    assert not found.good
    assert "4 fields where 3 are due" in str(found.exchanges[2].error)


def test_an_overload_is_an_answer(scripted: ScriptedInstrument) -> None:
    scripted.answers["XY?"] = "9.9e37,1"
    found = probe(section(scripted.resource))
    assert found.good
    assert found.reading is not None
    assert found.reading.status == "overload"
    assert "overload: x" in str(found.exchanges[2].meaning)


def test_a_code_that_is_not_in_the_table_is_told(scripted: ScriptedInstrument) -> None:
    scripted.answers["T?"] = "11"
    found = probe(section(scripted.resource))
    assert not found.good
    assert found.exchanges[3].error == "'11' is not among the configured codes (9)"


def test_what_an_instrument_says_is_only_ever_text(scripted: ScriptedInstrument) -> None:
    scripted.answers["*IDN?"] = "MODEL <script>\x1b[2J"
    found = probe(section(scripted.resource))
    assert found.identity == "MODEL <script>\x1b[2J"
