"""Holding the field on the page: what is shown, what is asked for, and who decides."""

from __future__ import annotations

import re
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from bokeh.document import Document
from made_run import MadeRun, config, estimates, ramp
from playwright.sync_api import Browser, expect
from scripted_instrument import ScriptedInstrument
from test_hold_watch import Terminal
from test_page import SCRIPT, assert_in_sight, opened, served

from acquire.closing import Closing
from acquire.config import Rig, parse
from acquire.errors import BusError
from acquire.hold.words import CAUTIONS, GOOD_ENOUGH
from acquire.run_folder import RunFolder, create_run
from dashboard.hold_link import HoldLink, HoldState
from dashboard.hold_watch import HoldWatch
from dashboard.page.field_now import FieldNow
from dashboard.page.hold_panel import moves, strip_text
from dashboard.page.session import Session
from dashboard.page.store import RunStore
from dashboard.progress import Progress
from dashboard.streams import run_tables

HOLD = """
[hold]
resource = "TCPIP::127.0.0.1::1::SOCKET"
write_termination = "\\r\\n"
read_termination = "\\r\\n"
identity = { pattern = "SUPPLY" }
command = "PAUSE"
stands_within_s = 10.0
standing_T = 0.001
"""
WORKING = {"reader magnet": "ready"}


class Watching(Closing):
    """The watch's part of a made run, in a thread of its own; the field stands."""

    def __init__(self, made: MadeRun) -> None:
        self.terminal = Terminal()
        self.events: list[tuple[str, str, str]] = []
        self._made, self._over = made, threading.Event()
        self._begun = threading.Event()
        self._thread = threading.Thread(target=self._watch)
        self._thread.start()
        assert self._begun.wait(20)

    @property
    def code(self) -> str:
        found = re.search(r"Code: ([A-Z]{4})", "\n".join(self.terminal.lines))
        assert found is not None
        return found[1]

    def close(self) -> None:
        self._over.set()
        self._thread.join()

    def _watch(self) -> None:
        run = self._made.run
        progress = Progress(run.run_id, run.rig)
        with HoldWatch(run, self.terminal) as hold:
            live = run.live()
            assert live is not None
            run.write_live(live.endpoints, live.requests, hold=hold.address)
            hold.begin(lambda *event: self.events.append(event), False, self._over)
            self._begun.set()
            while not self._over.wait(0.02):
                hold.field(time.monotonic(), 1.0)
                hold.look(progress, False, WORKING)
            hold.end()


def test_from_the_button_to_the_alarm(
    browser: Browser, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    """The supply is gone when the command is due, which has to be loud on the page, too."""
    with (
        ScriptedInstrument({"*IDN?": "MAKER,SUPPLY,7,1"}, "\r\n", "\r\n") as supply,
        MadeRun(tmp_path, more=HOLD.replace("::1::", f"::{supply.port}::")) as made,
        Watching(made) as watching,
    ):
        made.estimate(*estimates(ramp(1.0, 20)))
        with served(made.path) as process, opened(browser, process.address()) as seen:
            strip, box = seen.section("hold"), seen.section("hold_box")
            expect(strip).to_contain_text("Holding the field: not armed")
            first = box.get_by_text("Before you arm it, read this.")
            expect(first).to_be_hidden()
            assert_in_sight(seen.page)
            strip.get_by_role("button", name="Hold the field").click()
            expect(first).to_be_visible()
            for text in (*CAUTIONS, f'"PAUSE\\r\\n" to {supply.resource}', "no reply"):
                expect(box).to_contain_text(text)
            arm = box.get_by_role("button", name="Arm", exact=True)
            arm.click()
            expect(box).to_contain_text("type the run's code")
            box.get_by_placeholder("code").fill("AIAI")
            arm.click()
            expect(box).to_contain_text("not the code of this run")
            assert [code for _, code, _ in watching.events] == ["hold_wrong_code"]
            box.get_by_placeholder("code").fill(watching.code)
            box.get_by_role("button", name="Hold now").click()
            expect(box).to_contain_text("arm it first")
            arm.click()
            expect(strip).to_contain_text("Holding the field: armed")
            box.get_by_role("button", name="Disarm").click()
            expect(strip).to_contain_text("Disarmed, and nothing was sent: disarmed by a person")
            arm.click()
            expect(strip).to_contain_text("Holding the field: armed")
            wait_for(lambda: watching.events[-1][1] == "hold_reached", "the trial")
            supply.refuse()
            box.get_by_role("button", name="Hold now").click()
            expect(strip).to_contain_text("ALARM")
            expect(strip).to_contain_text("THE COMMAND WAS NOT SENT")
            assert watching.terminal.alarms[0].startswith("THE COMMAND WAS NOT SENT")
            assert watching.events[-1][1] == "hold_not_sent"


@pytest.mark.parametrize("phase", ["live", "ended", "crashed"])
def test_a_page_without_hold_shows_nothing_of_it(phase: Any) -> None:
    store = RunStore("run", parse(config()))
    store.begin(phase, (lambda: 1.0) if phase == "live" else None)
    document = Document()
    Session(store).open(document)
    for name in ("hold", "hold_box"):
        part: Any = document.get_model_by_name(name)
        assert not part.visible
    document.clear()


def words(text: str) -> str:
    return re.sub(r"\s+", " ", re.sub(r"<[^>]*>", " ", text)).strip()


def test_the_strip_says_how_it_stands() -> None:
    assert strip_text(False, None, False) == ""
    assert words(strip_text(False, None, True)) == GOOD_ENOUGH
    assert "no answer from the watch" in strip_text(True, None, False)
    off = HoldState("off", "Not armed.", True)
    assert words(strip_text(True, off, False)) == "Holding the field: not armed Not armed."
    assert words(strip_text(True, off, True)) == GOOD_ENOUGH
    armed = HoldState("armed", f"Armed {SCRIPT}", True)
    assert SCRIPT not in strip_text(True, armed, True)
    assert words(strip_text(True, armed, True)).startswith("Holding the field: armed Armed &lt;")
    assert 'class="hold alarm"' in strip_text(True, HoldState("alarm", "x", True), True)


@pytest.fixture
def rig() -> Rig:
    return parse(config() + HOLD.encode())


def test_there_is_a_ramp_to_pause_while_the_field_moves(rig: Rig) -> None:
    assert not moves(rig, None)
    assert not moves(rig, FieldNow(1.0, 2.0, None))
    assert moves(rig, FieldNow(1.0, 2.0, -0.6))
    assert not moves(rig, FieldNow(1.0, 2.0, 0.01))


def test_good_enough_is_said_on_the_page_while_the_ramp_goes_on(rig: Rig) -> None:
    store = RunStore("run", rig)
    for seq, cells in enumerate(estimates(ramp(4.0, 400))):
        store.take("estimates", (seq, *cells))
    for seq in range(40):
        store.take("readings/magnet", (seq, 0.1 * seq, 0.01, "ok", None, 1e-3 * seq))
    store.begin("live", lambda: 4.0)
    document = Document()
    Session(store).open(document)
    assert store.all_stable()
    state: Any = document.get_model_by_name("hold_state")
    assert GOOD_ENOUGH in state.text
    opener: Any = document.get_model_by_name("hold_open")
    assert not opener.visible, "nobody can be asked"
    document.clear()


class Keeper:
    """An inbox that answers as it is told, and notes what came."""

    def __init__(self) -> None:
        self.messages: list[dict[str, Any]] = []
        self.deaf = False

    def ask(self, address: str, message: dict[str, Any], timeout_s: float) -> dict[str, Any]:
        if self.deaf:
            raise BusError("no reply")
        self.messages.append(message)
        return {"ok": True, "text": "Done.", "state": "armed", "told": "Armed.", "good": False}

    def asked_for(self) -> list[dict[str, Any]]:
        return [message for message in self.messages if message["do"] != "state"]


@pytest.fixture
def run(tmp_path: Path, rig: Rig) -> RunFolder:
    run = create_run(rig, config() + HOLD.encode(), list(run_tables(rig).values()), tmp_path)
    run.write_live({}, "tcp://127.0.0.1:1", hold="tcp://127.0.0.1:2")
    return run


@pytest.fixture
def keeper() -> Keeper:
    return Keeper()


@pytest.fixture
def link(run: RunFolder, keeper: Keeper) -> Iterator[HoldLink]:
    with HoldLink(run, keeper.ask) as link:
        yield link


def test_a_request_is_sent_once(
    link: HoldLink, keeper: Keeper, wait_for: Callable[..., None]
) -> None:
    wait_for(lambda: link.state == HoldState("armed", "Armed.", False))
    request = link.request("hold_now", "ABCD" + "x" * 1000)
    wait_for(lambda: request.text == "Done.")
    (message,) = keeper.asked_for()
    assert message["do"] == "hold_now" and len(message["code"]) == 100


def test_no_answer_is_said_and_not_asked_again(
    link: HoldLink, keeper: Keeper, wait_for: Callable[..., None]
) -> None:
    wait_for(lambda: link.state is not None)
    keeper.deaf = True
    request = link.request("arm", "ABCD")
    wait_for(lambda: "No answer from the watch" in request.text)
    wait_for(lambda: link.state is None)
    keeper.deaf = False
    wait_for(lambda: link.state is not None)
    assert keeper.asked_for() == []


def test_a_run_that_has_ended_can_be_asked_for_nothing(
    link: HoldLink, keeper: Keeper, run: RunFolder, wait_for: Callable[..., None]
) -> None:
    wait_for(lambda: link.state is not None)
    run.end_live()
    wait_for(lambda: link.state is None)
    request = link.request("arm", "ABCD")
    wait_for(lambda: request.text.startswith("Nobody watches"))
    assert keeper.asked_for() == []
