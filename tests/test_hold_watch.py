"""Holding the field on the simulated supply: the real process of the command, real sockets.

The laboratory and the watch run on one clock of ours, which goes slowly while something else than
they is at work and fast otherwise, so that nothing here depends on how fast the machine is.
"""

from __future__ import annotations

import json
import os
import re
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import psutil
import pytest
from small_laboratory import write_small_laboratory

from acquire.bus import ask
from acquire.closing import Closing
from acquire.config import load
from acquire.hold.record import SENDING, SENT, was_claimed, was_concluded
from acquire.hold.words import CAUTIONS
from acquire.laboratory.bench import Bench
from acquire.laboratory.server import LaboratoryServer
from acquire.run_folder import create_run, open_run
from analyse.estimate_table import ESTIMATES
from analyse.cautions import NOTES
from dashboard.hold_watch import HoldWatch
from dashboard.progress import Progress
from dashboard.streams import run_tables

DEADLINE_S = 50.0
READY = {"reader magnet": "ready"}
WITH_REPLY = ('command = "PAUSE"', 'command = "PAUSE;STATE?"\nreply = "[23]"')


class Terminal:
    """What was said, loudly or not."""

    def __init__(self) -> None:
        self.lines: list[str] = []
        self.alarms: list[str] = []
        self.rings = 0

    def say(self, text: str) -> None:
        self.lines.append(text)

    def alarm(self, text: str) -> None:
        self.alarms.append(text)

    def ring(self) -> None:
        self.rings += 1


class Rig(Closing):
    """A run before the simulated supply; its estimator is whoever calls :meth:`verdict`."""

    def __init__(self, folder: Path, *changes: tuple[str, str]) -> None:
        config = write_small_laboratory(folder / "small.toml", hold=True)
        text = config.read_text()
        for old, new in changes:
            assert old in text
            text = text.replace(old, new)
        config.write_text(text)
        rig, data = load(config)
        assert rig.laboratory is not None
        self.now_s = 0.0
        self.bench = Bench(rig.laboratory)
        self.server = LaboratoryServer(self.bench, lambda: self.now_s)
        self.run = create_run(rig, data, list(run_tables(rig).values()), folder / "runs")
        self.progress = Progress(self.run.run_id, rig)
        self.terminal = Terminal()
        self.events: list[tuple[str, str, str]] = []
        self.states = dict(READY)
        self.over = self.asking = False
        self.hold = HoldWatch(self.run, self.terminal, bell=True, clock=lambda: self.now_s)
        self.run.write_live({}, "tcp://127.0.0.1:1", hold=self.hold.address)
        self.hold.begin(lambda *event: self.events.append(event), False, threading.Event())

    @property
    def code(self) -> str:
        found = re.search(r"Code: ([A-Z]{4})", "\n".join(self.terminal.lines))
        assert found is not None
        return found[1]

    @property
    def codes(self) -> list[str]:
        return [code for _, code, _ in self.events]

    def text(self, code: str) -> str:
        return next(text for _, found, text in self.events if found == code)

    def heard(self, line: str = "PAUSE") -> int:
        return self.bench.places["magnet"].heard[line]

    def misbehave(self, what: str) -> None:
        (piece,) = self.bench.hear("magnet", f"SIMULATE:BEGIN {what}", self.now_s).pieces
        assert piece.data == b"OK\n"

    def look(self) -> None:
        """One look of the watch, one step of the laboratory, one field reading."""
        slowly = self.asking or self.hold.asking
        self.server.step(0.005 if slowly else 0.0)
        self.now_s += 0.0005 if slowly else 0.02
        self.hold.field(self.now_s, self.bench.magnet.reading_T(self.now_s))
        self.hold.look(self.progress, self.over, self.states)

    def go(self, until: Callable[[], object]) -> None:
        deadline = time.monotonic() + DEADLINE_S
        while not until():
            assert time.monotonic() < deadline, self.events
            self.look()

    def until(self, code: str) -> None:
        self.go(lambda: code in self.codes)

    def verdict(self, verdict: str, cautions: str | None = None) -> None:
        """The estimator's next row."""
        cells = {"seq": 0, "time_s": self.now_s, "hall_bar": "bar", "verdict": verdict,
                 "cautions": cautions}  # fmt: skip
        self.progress.take("estimates", tuple(cells.get(name) for name in ESTIMATES.names))

    def asks(self, do: str, **more: object) -> dict[str, Any]:
        """What the page is answered."""
        replies: list[dict[str, Any]] = []
        message = {"kind": "hold", "do": do, **more}
        thread = threading.Thread(
            target=lambda: replies.append(ask(self.hold.address, message, DEADLINE_S))
        )
        thread.start()
        self.asking = True
        self.go(lambda: replies)
        self.asking = False
        thread.join()
        return replies[0]

    def armed(self) -> Rig:
        """Armed in a ramp that has begun."""
        self.go(lambda: self.bench.magnet.reading_T(self.now_s) > 0.1)
        assert self.asks("arm", code=self.code)["ok"]
        self.until("hold_reached")
        self.go(lambda: not self.hold.asking)
        return self

    def asked(self) -> Rig:
        """Stable once it is armed, until the command's process has gone."""
        if "hold_armed" not in self.codes:
            self.armed()
        self.verdict("stable")
        self.until("hold_begun")
        self.go(lambda: not self.hold.asking)
        return self

    def close(self) -> None:
        self.hold.end()
        self.hold.close()
        self.server.close()


@pytest.fixture
def rig(tmp_path: Path) -> Iterator[Rig]:
    with Rig(tmp_path) as found:
        yield found


@pytest.fixture
def replying(tmp_path: Path) -> Iterator[Rig]:
    """The supply answers to the command: with its state."""
    with Rig(tmp_path, WITH_REPLY) as found:
        yield found


def test_held(rig: Rig) -> None:
    rig.asked().until("hold_held")
    assert rig.codes == [
        "hold_armed", "hold_reached", "hold_begun", "hold_connected", "hold_allowed", "hold_sending",
        "hold_answered", "hold_held",
    ]  # fmt: skip
    assert rig.terminal.alarms == [] and rig.hold.alarm == ""
    assert {kind for kind, _, _ in rig.events} == {"run"}
    assert rig.heard() == 1
    assert float(re.search(r"[+-][\d.]+(?= T)", rig.text("hold_held"))[0]) == pytest.approx(  # type: ignore[index]
        float(rig.bench.magnet.course.field_T(rig.now_s)), abs=2e-4
    )
    written = json.loads((rig.run.path / SENDING).read_text())
    assert written["command"] == "PAUSE" and "MAGNET SUPPLY" in written["who"]
    assert json.loads((rig.run.path / SENT).read_text())["outcome"] == "answered"
    rig.verdict("converging")
    rig.look()
    rig.verdict("stable")
    rig.go(lambda: rig.now_s > 20)
    assert rig.heard() == 1, "it goes out once"


def test_held_with_a_reply(replying: Rig) -> None:
    replying.asked().until("hold_held")
    assert replying.text("hold_answered") == "The supply answered as configured: 3."
    assert replying.heard("PAUSE;STATE?") == 1


def test_ignored(replying: Rig) -> None:
    replying.armed().misbehave("ignore")
    replying.asked()
    assert "answered 1" in replying.text("hold_trouble")
    replying.until("hold_not_held")
    assert "THE FIELD IS NOT HELD" in replying.terminal.alarms[0]
    assert replying.hold.alarm.startswith("THE FIELD IS NOT HELD")
    replying.go(lambda: replying.terminal.rings > 3)
    assert replying.heard("PAUSE;STATE?") == 1, "nothing more is tried"


def test_half_dead_before_the_command(rig: Rig) -> None:
    rig.armed().misbehave("silence")
    rig.asked()
    assert rig.codes[-1] == "hold_not_sent"
    assert "no reply within 300 ms" in rig.terminal.alarms[0]
    assert "Does it take another connection" in rig.terminal.alarms[0]
    assert rig.heard() == 0
    assert not was_claimed(rig.run.path)
    assert not rig.asks("hold_now", code=rig.code)["ok"], "nothing more is tried"


def test_half_dead_from_the_command_on(replying: Rig) -> None:
    """It takes the line, does nothing, says nothing."""
    replying.armed().verdict("stable")
    replying.until("hold_allowed")
    replying.misbehave("silence")
    replying.until("hold_not_held")
    assert "no reply within 300 ms" in replying.text("hold_trouble")
    assert replying.heard("PAUSE;STATE?") <= 1
    assert was_concluded(replying.run.path)


def test_answering_late(replying: Rig) -> None:
    """It obeys, and its answer comes after the timeout: the field decides."""
    replying.armed().verdict("stable")
    replying.until("hold_allowed")
    replying.misbehave("delay,delay_s=2")
    replying.until("hold_held")
    assert "no reply within 300 ms" in replying.text("hold_trouble")
    assert replying.terminal.alarms == []


def test_a_supply_that_can_not_be_asked_is_told_when_it_is_armed(rig: Rig) -> None:
    """As one does that takes a single connection, which its reader has."""
    rig.misbehave("silence")
    assert rig.asks("arm", code=rig.code)["ok"]
    rig.until("hold_disarmed")
    assert "can't be asked" in rig.terminal.alarms[0]
    assert "Does it take another connection" in rig.terminal.alarms[0]
    assert rig.heard() == 0


def test_at_target_already(replying: Rig) -> None:
    replying.go(lambda: replying.bench.magnet.course.is_over(replying.now_s))
    assert replying.asks("arm", code=replying.code)["ok"]
    assert replying.asks("hold_now", code=replying.code)["ok"]
    replying.until("hold_held")
    assert replying.text("hold_answered") == "The supply answered as configured: 2."
    assert "+1.0000 T" in replying.text("hold_held")


def test_a_ramp_that_is_over_is_not_held(rig: Rig) -> None:
    rig.armed()
    rig.over = True
    rig.look()
    rig.verdict("stable")
    rig.look()
    assert rig.codes == ["hold_armed", "hold_reached", "hold_disarmed"]
    assert not rig.asks("arm", code=rig.code)["ok"]
    assert rig.heard() == 0


def test_disarmed_at_the_last_moment(rig: Rig) -> None:
    rig.armed().verdict("stable")
    rig.look()
    assert rig.hold.asking
    assert rig.asks("disarm")["ok"]
    assert not rig.hold.asking, "its process is gone"
    rig.go(lambda: rig.now_s > 15)
    assert rig.codes == ["hold_armed", "hold_reached", "hold_begun", "hold_disarmed"]
    assert rig.heard() == 0
    assert not was_claimed(rig.run.path)


def test_stable_no_more_before_it_was_sent(rig: Rig) -> None:
    rig.armed().verdict("stable")
    rig.look()
    rig.verdict("converging")
    rig.look()
    assert not rig.hold.asking and rig.heard() == 0
    rig.verdict("stable")
    rig.until("hold_held")
    assert rig.codes.count("hold_begun") == 2 and rig.heard() == 1


@pytest.mark.parametrize("caution", ["overload", "field_stuck", "current_sag"])
def test_a_caution_that_touches_the_answer_disarms(rig: Rig, caution: str) -> None:
    rig.armed().verdict("converging", "oscillations")
    rig.look()
    assert rig.codes == ["hold_armed", "hold_reached"]
    rig.verdict("converging", f"oscillations {caution}")
    rig.look()
    assert rig.codes == ["hold_armed", "hold_reached", "hold_disarmed"]
    assert caution in rig.terminal.alarms[0]
    assert caution in rig.asks("arm", code=rig.code)["text"]
    rig.verdict("stable")
    rig.look()
    assert rig.heard() == 0
    assert rig.terminal.lines[-1] == "The answer is good enough: pause the ramp."


def test_the_estimator_dies_between_decision_and_command(rig: Rig) -> None:
    rig.armed().verdict("stable")
    rig.look()
    assert rig.hold.asking
    rig.hold.unexpected("estimator was killed by signal 9")
    rig.look()
    rig.verdict("stable")  # started again, it says the same again
    rig.go(lambda: rig.now_s > 15)
    assert rig.codes == ["hold_armed", "hold_reached", "hold_begun", "hold_disarmed"]
    assert rig.heard() == 0


def test_the_estimator_dies_after_the_command(rig: Rig) -> None:
    rig.asked().hold.unexpected("estimator was killed by signal 9")
    rig.verdict("stable")
    rig.until("hold_held")
    assert rig.heard() == 1


def command_process(rig: Rig) -> psutil.Process:
    """The process of the command."""
    children = psutil.Process().children()
    return next(child for child in children if "acquire.hold" in child.cmdline())


def test_killed_before_it_was_allowed(rig: Rig) -> None:
    rig.armed().verdict("stable")
    rig.look()
    command_process(rig).kill()
    rig.until("hold_not_sent")
    assert "signal 9 killed it" in rig.terminal.alarms[0]
    assert rig.heard() == 0
    assert not rig.asks("arm", code=rig.code)["ok"]


def test_killed_after_it_was_written_down(replying: Rig) -> None:
    """The reply hangs, so that it is known to be there when it is killed."""
    replying.armed().verdict("stable")
    replying.until("hold_connected")
    replying.misbehave("drop")
    replying.go(lambda: was_claimed(replying.run.path))
    process = command_process(replying)
    process.suspend()
    process.kill()
    replying.until("hold_unknown")
    assert "not known whether the command was sent" in replying.terminal.alarms[0]
    replying.go(lambda: {"hold_held", "hold_not_held"} & set(replying.codes))
    assert replying.heard("PAUSE;STATE?") <= 1
    assert not was_concluded(replying.run.path)
    assert not replying.asks("hold_now", code=replying.code)["ok"]


def test_nobody_else_is_allowed_to_send(rig: Rig) -> None:
    rig.armed()
    assert not rig.asks("may_send", pid=1)["ok"]
    assert not rig.asks("may_send")["ok"]
    rig.verdict("stable")
    rig.look()
    assert not rig.asks("may_send", pid=1)["ok"]
    rig.until("hold_held")


def test_what_the_page_asks_for_without_the_code_is_refused(rig: Rig) -> None:
    for typed in ({}, {"code": ""}, {"code": None}):
        assert "type the run's code" in rig.asks("arm", **typed)["text"]
    assert "not the code" in rig.asks("arm", code=["A"] * 4)["text"]
    rig.armed()
    assert not rig.asks("hold_now")["ok"]
    assert "not the code" in rig.asks("hold_now", code="AAAA")["text"]
    assert rig.asks("fire")["text"] == "unknown request"
    rig.hold.look(rig.progress, False, rig.states)
    assert rig.asks("state")["state"] == "armed"
    assert not rig.hold.asking


def test_not_armed_while_a_process_is_not_there(rig: Rig) -> None:
    rig.states["estimator"] = "waiting"
    rig.look()
    assert "estimator not ready" in rig.asks("arm", code=rig.code)["text"]


def test_a_person_presses_hold_now(rig: Rig) -> None:
    assert rig.armed().asks("hold_now", code=rig.code.lower())["state"] == "begun"
    rig.until("hold_held")
    assert "a person asked for it" in rig.text("hold_begun")


@pytest.mark.parametrize(
    ("typed", "state", "words"),
    [
        ("CODE\n", "armed", ""),
        ("AIAI\n", "off", "this is not the code of this run"),
        ("\n", "off", "Not armed: no code was typed."),
        ("", "off", "Not armed: no code was typed."),
    ],
)
def test_armed_in_the_terminal(
    rig: Rig, monkeypatch: pytest.MonkeyPatch, typed: str, state: str, words: str
) -> None:
    reading, writing = os.pipe()
    os.write(writing, typed.replace("CODE", rig.code).encode())
    os.close(writing)
    with open(reading) as keyboard:
        monkeypatch.setattr("sys.stdin", keyboard)
        rig.hold.begin(lambda *event: rig.events.append(event), True, threading.Event())
    said = "\n".join([*rig.terminal.lines, *rig.terminal.alarms])
    for caution in CAUTIONS:
        assert caution in said
    assert words in said
    assert rig.asks("state")["state"] == state


def test_nobody_waits_for_a_keyboard_when_the_watch_is_to_end(
    rig: Rig, monkeypatch: pytest.MonkeyPatch
) -> None:
    reading, writing = os.pipe()
    wish = threading.Event()
    wish.set()
    with open(reading) as keyboard, open(writing, "w"):
        monkeypatch.setattr("sys.stdin", keyboard)
        rig.hold.begin(lambda *event: None, True, wish)
    assert rig.terminal.lines[-1].startswith("Not armed")


def test_not_armed_it_says_what_to_do(rig: Rig) -> None:
    rig.go(lambda: rig.now_s > 3)
    rig.verdict("stable")
    rig.look()
    rig.look()
    assert rig.terminal.lines.count("The answer is good enough: pause the ramp.") == 1
    assert rig.terminal.rings == 1
    assert rig.codes == []


def test_the_end_of_the_watch_disarms(rig: Rig) -> None:
    rig.armed().verdict("stable")
    rig.look()
    rig.hold.end()
    assert rig.codes[-1] == "hold_disarmed"
    assert not rig.hold.asking
    assert rig.heard() == 0


def test_the_cautions_that_disarm_are_those_of_the_readme() -> None:
    readme = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
    part = readme.split("## Cautions", 1)[1].split("\n## ", 1)[0]
    rows = re.findall(r"^\| `(\w+)` \|.*\| ([^|]+) \|$", part, re.MULTILINE)
    assert {code for code, touches in rows if touches == "no"} == NOTES
    assert len(rows) > len(NOTES)


def test_without_a_hold_section_there_is_nobody_to_ask(tmp_path: Path) -> None:
    rig, data = load(write_small_laboratory(tmp_path / "small.toml"))
    run = create_run(rig, data, list(run_tables(rig).values()), tmp_path)
    with HoldWatch(run, Terminal()) as hold:
        hold.begin(lambda *event: None, False, threading.Event())
        assert hold.address == ""
        run.write_live({}, "", hold=hold.address)
    assert "hold" not in json.loads((open_run(run.path).path / "live.json").read_text())
