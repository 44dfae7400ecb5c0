from __future__ import annotations

import pytest

from acquire.config.reader import ReaderSection
from acquire.dialogue import Dialogue
from acquire.errors import BadReply, ConnectError, InstrumentError, ReplyTimeout

SECTION = ReaderSection.model_validate(
    {
        "name": "lockin",
        "resource": "TCPIP::127.0.0.1::1::SOCKET",
        "write_termination": "\n",
        "read_termination": "\n",
        "queries": ["X?", "Y?"],
        "fields": 2,
        "values": [{"name": "x", "position": 1}, {"name": "y", "position": 2}],
        "settings": [
            {"name": "time_constant", "query": "T?", "codes": {"9": 0.3, "10": 1.0}},
            {"name": "poles", "query": "P?", "codes": {"3": 4}},
        ],
    }
)


class Puppet:
    """Answers from a dictionary; an answer that is an exception is raised."""

    def __init__(self) -> None:
        self.answers: dict[str, str | InstrumentError] = {
            "*IDN?": "ME,1", "T?": "9", "P?": "3", "X?": "1.5", "Y?": "2.5",
        }  # fmt: skip
        self.asked: list[str] = []
        self.known: list[str | None] = []
        self.is_open = False

    def open(self, known_identity: str | None = None) -> str:
        self.known.append(known_identity)
        self.is_open = True
        return self.ask("*IDN?")

    def ask(self, query: str) -> str:
        assert self.is_open
        self.asked.append(query)
        answer = self.answers[query]
        if isinstance(answer, InstrumentError):
            self.is_open = False
            raise answer
        return answer

    def expect_silence(self, wait_s: float = 0.0) -> None:
        assert self.is_open

    def close(self) -> None:
        self.is_open = False


def test_connecting_asks_identity_settings_and_identity_again() -> None:
    puppet = Puppet()
    dialogue = Dialogue(SECTION, puppet)
    assert dialogue.connect()
    assert puppet.asked == ["*IDN?", "T?", "P?", "*IDN?"]
    assert dialogue.identity == "ME,1"
    assert dialogue.settings == {
        "time_constant": {"raw": "9", "value": 0.3},
        "poles": {"raw": "3", "value": 4},
    }


def test_connecting_again_demands_the_same_identity_and_tells_of_changes() -> None:
    puppet = Puppet()
    dialogue = Dialogue(SECTION, puppet, known_identity="ME,0")
    dialogue.connect()
    assert not dialogue.connect()
    puppet.answers["T?"] = "10"
    assert dialogue.connect()
    assert puppet.known == ["ME,0", "ME,1", "ME,1"]
    assert dialogue.settings["time_constant"] == {"raw": "10", "value": 1.0}


def test_answers_out_of_turn_are_found_out() -> None:
    """A late identity reply, as a serial line or a gateway keeps one, shifts all that follow."""
    puppet = Puppet()
    queue = ["ME,1", "ME,1", "9", "3"]
    puppet.ask = lambda query: queue.pop(0)  # type: ignore[method-assign]
    dialogue = Dialogue(SECTION, puppet)
    with pytest.raises(ConnectError, match="out of turn"):
        dialogue.connect()
    assert not puppet.is_open
    assert dialogue.settings == {}


def test_a_setting_that_fails_leaves_what_was_known() -> None:
    puppet = Puppet()
    dialogue = Dialogue(SECTION, puppet)
    dialogue.connect()
    puppet.answers["P?"] = ReplyTimeout("nothing")
    with pytest.raises(ReplyTimeout):
        dialogue.connect()
    assert dialogue.settings["poles"]["value"] == 4


def test_a_setting_that_does_not_fit_is_refused() -> None:
    puppet = Puppet()
    puppet.answers["T?"] = "9" * 1000
    with pytest.raises(BadReply, match="too long"):
        Dialogue(SECTION, puppet).connect()
    assert not puppet.is_open


def test_a_setting_asked_again() -> None:
    puppet = Puppet()
    dialogue = Dialogue(SECTION, puppet)
    dialogue.connect()
    before = dialogue.settings
    assert not dialogue.refresh(SECTION.settings[0])
    puppet.answers["T?"] = "10"
    assert dialogue.refresh(SECTION.settings[0])
    assert dialogue.settings["time_constant"]["value"] == 1.0
    assert before["time_constant"]["value"] == 0.3


def test_a_reading_asks_all_queries() -> None:
    puppet = Puppet()
    dialogue = Dialogue(SECTION, puppet)
    dialogue.connect()
    assert dialogue.reading().values == (1.5, 2.5)
    assert puppet.is_open
    puppet.answers["Y?"] = "1,2"
    assert dialogue.reading().status == "bad_reply"
    assert not puppet.is_open


def test_not_a_number_does_not_cost_the_session() -> None:
    puppet = Puppet()
    dialogue = Dialogue(SECTION, puppet)
    dialogue.connect()
    puppet.answers["Y?"] = "NAN"
    assert dialogue.reading().status == "bad_reply"
    assert puppet.is_open
