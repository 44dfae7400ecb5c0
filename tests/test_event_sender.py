"""Events reach the estimator once it is there, each under one id."""

from __future__ import annotations

import threading
from collections.abc import Callable

import pytest

import dashboard.event_sender as module
from acquire.bus import Inbox, ask
from acquire.errors import BusError
from dashboard.event_sender import EventSender


class Estimator:
    """Answers from the ``deaf_for``-th question on, and has room from the ``full_for``-th on."""

    def __init__(self, deaf_for: int = 0, full_for: int = 0) -> None:
        self.deaf_for = deaf_for
        self.full_for = full_for
        self.asked: list[dict[str, object]] = []
        self.answered: list[dict[str, object]] = []
        self.heard = threading.Condition()

    def ask(self, address: str, message: dict[str, object], timeout_s: float) -> dict[str, object]:
        """As acquire.bus.ask."""
        with self.heard:
            self.asked.append(message)
            self.heard.notify_all()
            if len(self.asked) <= self.deaf_for:
                raise BusError("no reply")
            if len(self.asked) <= self.full_for:
                return {"ok": False, "error": "events.csv: no space", "again": True}
            self.answered.append(message)
            return {"ok": True}

    def wait(self, count: int) -> None:
        """Until it has answered so many."""
        with self.heard:
            assert self.heard.wait_for(lambda: len(self.answered) >= count, timeout=10.0)


def test_sent_in_order() -> None:
    estimator = Estimator()
    sender = EventSender("tcp://127.0.0.1:1", estimator.ask)
    for number in range(5):
        sender.send("process", "died", f"process {number}")
    estimator.wait(5)
    assert sender.close() == 0
    assert [message["text"] for message in estimator.answered] == [
        f"process {number}" for number in range(5)
    ]
    assert len({message["id"] for message in estimator.answered}) == 5


def test_sent_again_under_the_same_id_until_acknowledged(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(module, "BETWEEN_TRIES_S", 0.001)
    estimator = Estimator(deaf_for=3)
    sender = EventSender("tcp://127.0.0.1:1", estimator.ask)
    sender.send("process", "died", "the estimator was killed")
    estimator.wait(1)
    assert sender.close() == 0
    assert len(estimator.asked) == 4
    assert len({message["id"] for message in estimator.asked}) == 1


def test_closing_gives_up_and_says_how_many_were_not_written(
    wait_for: Callable[..., None],
) -> None:
    estimator = Estimator(deaf_for=10**9)
    sender = EventSender("tcp://127.0.0.1:1", estimator.ask)
    sender.send("process", "died", "one")
    sender.send("process", "back", "two")
    wait_for(lambda: estimator.asked, "it has tried")
    assert sender.close() == 2


def test_closing_tries_on_with_what_still_waits(wait_for: Callable[..., None]) -> None:
    estimator = Estimator(deaf_for=3)
    sender = EventSender("tcp://127.0.0.1:1", estimator.ask)
    for number in range(4):
        sender.send("process", "died", str(number))
    wait_for(lambda: estimator.asked, "it has tried")
    assert sender.close(10.0) == 0
    assert [message["text"] for message in estimator.answered] == ["0", "1", "2", "3"]


def test_over_a_real_inbox() -> None:
    with Inbox("tcp://127.0.0.1:0") as inbox:
        sender = EventSender(inbox.address, ask)
        sender.send("process", "died", "page was killed")
        asked = inbox.receive(10.0)
        assert asked is not None
        message, reply = asked
        reply({"ok": True})
        assert (message["kind"], message["code"]) == ("process", "died")
        assert sender.close(2.0) == 0


def test_sent_again_until_there_is_room_for_it(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "BETWEEN_TRIES_S", 0.001)
    estimator = Estimator(full_for=3)
    sender = EventSender("tcp://127.0.0.1:1", estimator.ask)
    sender.send("process", "cannot_record", "readings/magnet: disk full")
    estimator.wait(1)
    assert sender.close() == 0
    assert len({message["id"] for message in estimator.asked}) == 1
    assert len(estimator.asked) == 4
