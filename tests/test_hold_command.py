"""The exchange with the supply and its record: in which order, and what is never done."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping
from pathlib import Path

import pytest
from scripted_instrument import ScriptedInstrument
from small_laboratory import write_small_laboratory

from acquire.bus import free_address
from acquire.config import load
from acquire.config.hold import HoldSection
from acquire.errors import ConnectError, ReplyTimeout, RunError
from acquire.hold import record
from acquire.hold.__main__ import main
from acquire.hold.command import hold
from acquire.instrument import Instrument
from acquire.run_folder import RunFolder, create_run
from acquire.stop import Stop, Stopped
from dashboard.streams import run_tables

IDENTITY = "MAKER,SUPPLY,7,1"


def section(**keys: object) -> HoldSection:
    plain = {
        "resource": "TCPIP::127.0.0.1::1::SOCKET",
        "write_termination": "\n",
        "read_termination": "\n",
        "timeout_ms": 300,
        "identity": {"pattern": "SUPPLY"},
        "command": "PAUSE",
        "stands_within_s": 10.0,
        "standing_T": 0.001,
    }
    return HoldSection.model_validate({**plain, **keys})


class Told:
    """A supply, a keeper and a record that note what is done, in order."""

    def __init__(self, *replies: str | Exception, allowed: bool = True) -> None:
        self.done: list[str] = []
        self.said: list[tuple[str, str]] = []
        self._replies, self._allowed = list(replies), allowed
        self.claim_error: Exception | None = None

    def open(self, known_identity: str | None = None) -> str:
        return self._answer("open")

    def ask(self, query: str) -> str:
        return self._answer(query)

    def tell(self, command: str) -> None:
        self._answer(command)

    def close(self) -> None:
        self.done.append("close")

    def may_send(self, told: str) -> bool:
        assert IDENTITY in told
        self.done.append("may_send")
        return self._allowed

    def claim(self, content: Mapping[str, object]) -> None:
        self.done.append("claim")
        if self.claim_error is not None:
            raise self.claim_error

    def run(self, **keys: object) -> str:
        return hold(
            section(**keys), self, self.may_send, self.claim, lambda *said: self.said.append(said)
        )

    def _answer(self, what: str) -> str:
        self.done.append(what)
        reply = self._replies.pop(0)
        if isinstance(reply, Exception):
            raise reply
        return reply


def test_it_is_written_down_before_it_is_sent_and_sent_once() -> None:
    told = Told(IDENTITY, "", IDENTITY)
    assert told.run() == "answered"
    assert told.done == ["open", "may_send", "claim", "PAUSE", "*IDN?", "close"]
    assert [step for step, _ in told.said] == ["sending", "answered"]
    assert told.said[0][1] == r'Sending "PAUSE\n" to TCPIP::127.0.0.1::1::SOCKET.'


def test_with_a_reply() -> None:
    told = Told(IDENTITY, "OK 7")
    assert told.run(reply=r"OK \d") == "answered"
    assert told.done == ["open", "may_send", "claim", "PAUSE", "close"]


@pytest.mark.parametrize(
    ("replies", "keys", "words"),
    [
        (("OK 7",), {"reply": "OK"}, "answered OK 7, which 'OK' is not"),
        ((ReplyTimeout("no reply within 300 ms"),), {"reply": "OK"}, "no reply within 300 ms."),
        (("", "ERROR -113"), {}, "the supply said ERROR -113"),
        (("", ReplyTimeout("no reply")), {}, "did not answer as configured: no reply."),
    ],
)
def test_what_is_not_answered_as_configured_is_told_and_not_sent_again(
    replies: tuple[str | Exception, ...], keys: dict[str, object], words: str
) -> None:
    told = Told(IDENTITY, *replies)
    assert told.run(**keys) == "trouble"
    assert words in told.said[-1][1]
    assert told.done.count("PAUSE") == 1 and told.done[-1] == "close"


def test_not_allowed_not_sent() -> None:
    told = Told(IDENTITY, allowed=False)
    assert told.run() == "not_sent"
    assert told.done == ["open", "may_send", "close"]


def test_nobody_there_nothing_sent() -> None:
    told = Told(ConnectError("refused"))
    assert told.run() == "not_sent"
    assert told.done == ["open", "close"]


def test_what_can_not_be_written_down_is_not_sent() -> None:
    told = Told(IDENTITY)
    told.claim_error = RunError("the disk is full")
    assert told.run() == "not_sent"
    assert told.done == ["open", "may_send", "claim", "close"]
    assert "the disk is full" in told.said[-1][1]


def test_asked_to_end_before_it_is_written_down() -> None:
    told, stop = Told(IDENTITY), Stop()
    stop.requested = True
    with pytest.raises(Stopped):
        hold(section(), told, told.may_send, told.claim, lambda *said: None, stop.wait)
    assert told.done == ["close"]


def test_over_a_socket() -> None:
    with ScriptedInstrument({"*IDN?": IDENTITY, "PAUSE": ()}) as supply:
        told = Told()
        done = hold(
            section(resource=supply.resource),
            Instrument(section(resource=supply.resource)),
            told.may_send,
            told.claim,
            lambda *said: told.said.append(said),
        )
        assert done == "answered"
        assert [text for _, text in supply.questions] == ["*IDN?", "PAUSE", "*IDN?"]


def test_a_claim_is_made_once(tmp_path: Path) -> None:
    record.claim(tmp_path, {"command": "PAUSE"})
    assert json.loads((tmp_path / record.SENDING).read_text()) == {"command": "PAUSE"}
    with pytest.raises(RunError, match="goes out once"):
        record.claim(tmp_path, {"command": "PAUSE"})
    assert record.was_claimed(tmp_path) and not record.was_concluded(tmp_path)
    record.conclude(tmp_path, {"outcome": "answered"})
    assert record.was_concluded(tmp_path)


def test_a_claim_that_can_not_be_made(tmp_path: Path) -> None:
    with pytest.raises(RunError, match="so nothing was sent"):
        record.claim(tmp_path / "gone", {})
    with pytest.raises(RunError, match="can't be written"):
        record.conclude(tmp_path / "gone", {})


@pytest.fixture
def run(tmp_path: Path) -> RunFolder:
    """A run with a [hold], which nobody watches."""
    rig, data = load(write_small_laboratory(tmp_path / "small.toml", hold=True))
    return create_run(rig, data, list(run_tables(rig).values()), tmp_path)


def by_hand(run: RunFolder, capsys: pytest.CaptureFixture[str]) -> tuple[int, list[dict[str, str]]]:
    """Start the process's program by hand, in this process."""
    status = main([str(run.path)])
    return status, [json.loads(line) for line in capsys.readouterr().out.splitlines()]


@pytest.fixture(autouse=True)
def signals() -> object:
    """What the program does to signals is undone."""
    import signal

    numbers = (signal.SIGTERM, signal.SIGINT, signal.SIGHUP)
    before = {number: signal.getsignal(number) for number in numbers}
    yield None
    for number, handler in before.items():
        signal.signal(number, handler)


def test_by_hand_nothing_can_be_sent(run: RunFolder, capsys: pytest.CaptureFixture[str]) -> None:
    status, said = by_hand(run, capsys)
    assert status == 1
    assert said[0]["step"] == "not_sent" and "nobody watches this run" in said[0]["text"]
    run.write_live({}, "tcp://127.0.0.1:1", hold="tcp://127.0.0.1:1")
    status, said = by_hand(run, capsys)
    assert "can't be opened" in said[0]["text"], "the laboratory is not there"
    assert not record.was_claimed(run.path)


def test_without_the_watch_nothing_is_sent(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """It was killed between the decision and the command: nobody allows it any more."""
    monkeypatch.setattr("acquire.hold.__main__.ALLOWED_WITHIN_S", 0.2)
    with ScriptedInstrument({"*IDN?": IDENTITY, "PAUSE": ()}) as supply:
        config = write_small_laboratory(tmp_path / "small.toml", hold=True)
        text = config.read_text().split("[hold]")
        text[1] = re.sub(r"TCPIP[^\"]*", supply.resource, text[1]).replace("MAGNET ", "")
        config.write_text("[hold]".join(text))
        rig, data = load(config)
        run = create_run(rig, data, list(run_tables(rig).values()), tmp_path)
        run.write_live({}, "tcp://127.0.0.1:1", hold=free_address())
        status, said = by_hand(run, capsys)
        assert status == 1
        assert said == [{"step": "not_sent", "text": "it was not allowed any more."}]
        assert [text for _, text in supply.questions] == ["*IDN?"]
    assert not record.was_claimed(run.path)


def test_started_again_after_the_claim_it_sends_nothing(
    run: RunFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    run.write_live({}, "tcp://127.0.0.1:1", hold="tcp://127.0.0.1:1", pid=os.getpid())
    record.claim(run.path, {})
    status, said = by_hand(run, capsys)
    assert status == 1
    assert "nothing was sent again" in said[0]["text"]
