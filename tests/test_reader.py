"""Readers: what they do when (by a clock made of nothing), and the process (by signals)."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest
from scripted_instrument import ScriptedInstrument, late

from acquire.bus import Subscriber, free_endpoints
from acquire.config import parse
from acquire.config.reader import ReaderSection
from acquire.errors import (
    BadReply,
    ConnectError,
    InstrumentError,
    JournalError,
    OtherInstrument,
    ReplyTimeout,
    RunError,
)
from acquire.pauses import pause_s
from acquire.reader import Reader, main, run_reader
from acquire.readings import reading_table
from acquire.run_folder import RunFolder, create_run, open_run
from acquire.stop import Stop
from acquire.tables import Row

IDENTITY = "MAKER,MODEL,7,1.0"


@dataclass
class Bench:
    """A reader's world: a clock, an instrument and a journal, all of them to be meddled with.

    An answer is a text, an error to raise, or a list of these to be used up but for the last.
    Every question takes ``took_s`` on the clock.
    """

    now: float = 100.0
    took_s: float = 0.01
    answers: dict[str, Any] = field(default_factory=dict)
    asked: list[tuple[float, str]] = field(default_factory=list)
    known: list[str | None] = field(default_factory=list)
    is_open: bool = False
    rows: list[tuple[Any, ...]] = field(default_factory=list)
    notes: list[dict[str, Any]] = field(default_factory=list)
    words: list[str] = field(default_factory=list)
    disk: Exception | None = None
    stray: InstrumentError | None = None  # what shows once in the silence after an answer
    notes_fail: bool = False

    def __post_init__(self) -> None:
        self.answers = {"*IDN?": IDENTITY, "X?": "1.5", "T?": "9", "G?": "2", **self.answers}

    def now_s(self) -> float:
        return self.now

    def open(self, known_identity: str | None = None) -> str:
        self.known.append(known_identity)
        if isinstance(self.answers.get("open"), InstrumentError):
            self.now += self.took_s
            raise self.answers["open"]
        self.is_open = True
        return self.ask("*IDN?")

    def ask(self, query: str) -> str:
        assert self.is_open, "a closed session was used"
        self.asked.append((self.now, query))
        self.now += self.took_s
        answer = self.answers[query]
        if isinstance(answer, list):
            answer = answer.pop(0) if len(answer) > 1 else answer[0]
        if isinstance(answer, InstrumentError):
            self.is_open = False
            raise answer
        return str(answer)

    def expect_silence(self, wait_s: float = 0.0) -> None:
        assert self.is_open, "a closed session was watched"
        assert wait_s >= 0
        self.now += wait_s
        if isinstance(self.stray, InstrumentError):
            error, self.stray = self.stray, None
            self.is_open = False
            raise error

    def close(self) -> None:
        self.is_open = False

    def publish(self, *cells: Any) -> int:
        if self.disk is not None:
            raise self.disk
        self.rows.append((len(self.rows), *cells))
        return len(self.rows) - 1

    def note(self, entry: dict[str, Any]) -> None:
        if self.notes_fail:
            raise RunError("instruments.json: no space.")
        self.notes.append(entry)

    def reader(self, known_identity: str | None = None, **keys: object) -> Reader:
        plain = {
            "name": "lockin",
            "resource": "TCPIP::127.0.0.1::1::SOCKET",
            "write_termination": "\n",
            "read_termination": "\n",
            "queries": ["X?"],
            "period_s": 0.2,
            "values": [{"name": "x", "position": 1}],
            "settings": [
                {"name": "time_constant", "query": "T?", "codes": {"9": 0.3, "10": 1.0}},
                {"name": "gain", "query": "G?"},
            ],
        }
        section = ReaderSection.model_validate({**plain, **keys})
        return Reader(
            section,
            self,
            self.publish,
            self.now_s,
            known_identity=known_identity,
            note=self.note,
            complain=self.words.append,
        )

    def run(self, reader: Reader, seconds: float) -> None:
        """Let time pass."""
        end = self.now + seconds
        due = reader.step()
        while due < end:
            self.now = max(self.now, due)
            due = reader.step()
        self.now = max(self.now, end)

    def statuses(self) -> list[str]:
        return [row[3] for row in self.rows]

    def asked_times(self, query: str) -> list[float]:
        return [time for time, text in self.asked if text == query]


def in_order(bench: Bench) -> bool:
    """Whether rows are counted without gaps and their times never go back."""
    times = [row[1] for row in bench.rows]
    return [row[0] for row in bench.rows] == list(range(len(times))) and times == sorted(times)


def test_a_reader_tells_its_settings_then_reads_by_the_clock() -> None:
    bench = Bench()
    bench.run(bench.reader(), 1.0)
    assert bench.statuses() == ["settings"] + ["ok"] * 4
    assert bench.asked_times("X?") == pytest.approx([100.2, 100.4, 100.6, 100.8])
    assert bench.rows[1] == (1, pytest.approx(100.205), pytest.approx(0.01), "ok", "", 1.5)
    assert in_order(bench)


def test_the_settings_row_and_the_note_say_who_and_how() -> None:
    bench = Bench()
    bench.reader().step()
    told = json.loads(bench.rows[0][4])
    assert told == {
        "identity": IDENTITY,
        "settings": {
            "time_constant": {"raw": "9", "value": 0.3},
            "gain": {"raw": "2", "value": 2.0},
        },
    }
    assert bench.rows[0][5] is None
    (note,) = bench.notes
    assert note | told == note
    assert (note["reader"], note["seq"], note["time_s"]) == ("lockin", 0, bench.rows[0][1])
    assert note["resource"].startswith("TCPIP")
    assert note["utc"].endswith("Z")


def test_slots_that_were_missed_are_skipped() -> None:
    bench = Bench()
    reader = bench.reader()
    bench.run(reader, 0.3)
    bench.took_s = 0.5
    bench.run(reader, 1.2)
    assert bench.asked_times("X?") == pytest.approx([100.2, 100.4, 101.0])
    assert reader.missed == 4
    assert bench.statuses() == ["settings", "ok", "ok", "ok"]


def test_a_step_too_early_does_nothing() -> None:
    bench = Bench()
    reader = bench.reader()
    due = reader.step()
    assert reader.step() == due
    assert bench.statuses() == ["settings"]


def test_several_queries_make_one_reading() -> None:
    bench = Bench(answers={"Y?": "2.5"})
    values = [{"name": "x", "position": 1}, {"name": "y", "position": 2}]
    bench.run(bench.reader(queries=["X?", "Y?"], fields=2, values=values), 0.3)
    assert bench.rows[1][2:] == (pytest.approx(0.02), "ok", "", 1.5, 2.5)
    assert bench.rows[1][1] == pytest.approx(100.21)


@pytest.mark.parametrize(
    ("answer", "status"),
    [
        (ReplyTimeout("'X?': no reply"), "no_answer"),
        (BadReply("'X?': not ascii"), "bad_reply"),
        ("", "bad_reply"),
        ("1,2", "bad_reply"),
        ("MAKER", "bad_reply"),
    ],
)
def test_a_failed_reading_is_a_row_and_costs_the_session(answer: object, status: str) -> None:
    bench = Bench(answers={"X?": ["1.5", answer, "2.5"]})
    bench.run(bench.reader(), 1.5)
    assert bench.statuses()[:3] == ["settings", "ok", status]
    assert bench.rows[2][5] is None
    assert bench.rows[2][4]
    assert bench.known == [None, IDENTITY]
    assert bench.rows[3][5] == 2.5
    assert in_order(bench)


@pytest.mark.parametrize(("answer", "status"), [("9.9e37", "overload"), ("NAN", "bad_reply")])
def test_a_reading_without_use_does_not_cost_the_session(answer: str, status: str) -> None:
    bench = Bench(answers={"X?": ["1.5", answer, "2.5"]})
    bench.run(bench.reader(), 0.8)
    assert bench.statuses() == ["settings", "ok", status, "ok"]
    assert bench.known == [None]


def test_an_instrument_that_is_off_is_told_once_a_second_and_tried_ever_less_often() -> None:
    bench = Bench(answers={"open": ConnectError("nobody there")})
    reader = bench.reader()
    bench.run(reader, 60.0)
    assert set(bench.statuses()) == {"no_answer"}
    assert 55 <= len(bench.rows) <= 61
    assert all("nobody there" in row[4] for row in bench.rows)
    assert 8 <= len(bench.known) <= 15
    assert reader.attempts == len(bench.known)
    assert in_order(bench)


def test_an_instrument_comes_back_and_reading_goes_on_in_step() -> None:
    bench = Bench()
    reader = bench.reader()
    bench.run(reader, 1.0)
    bench.answers["X?"] = ReplyTimeout("nothing")
    bench.answers["open"] = ConnectError("nobody there")
    bench.run(reader, 30.0)
    del bench.answers["open"]
    bench.answers["X?"] = "3.5"
    bench.run(reader, 12.0)
    assert bench.rows[-1][3:] == ("ok", "", 3.5)
    assert bench.statuses().count("settings") == 1
    assert reader.attempts == 0
    back = bench.asked_times("X?")[-1]
    assert back / 0.2 == pytest.approx(round(back / 0.2))
    assert in_order(bench)


def test_after_an_hour_without_an_instrument_it_is_found_again_within_seconds() -> None:
    bench = Bench(answers={"T?": ["9", "10"]})
    reader = bench.reader()
    bench.run(reader, 1.0)
    bench.answers |= {"X?": ReplyTimeout("nothing"), "open": ConnectError("nobody there")}
    bench.run(reader, 3600.0)
    assert bench.rows[-1][3] == "no_answer"
    tried = len(bench.known)
    assert 360 <= tried <= 480
    del bench.answers["open"]
    bench.answers["X?"] = "3.5"
    began = bench.now
    bench.run(reader, 10.5)
    back = next(row for row in bench.rows if row[1] > began and row[3] == "ok")
    assert back[1] - began < 10.3
    assert len(bench.known) == tried + 1
    told = [row for row in bench.rows if row[3] == "settings"]
    assert json.loads(told[-1][4])["settings"]["time_constant"]["value"] == 1.0
    assert told[-1][0] == back[0] - 1
    assert bench.words == [
        f"time_constant has changed from 0.3 to 1.0; that holds from row {back[0]} on"
    ]
    assert in_order(bench)


def test_another_instrument_is_said_once_and_never_used() -> None:
    bench = Bench()
    reader = bench.reader()
    bench.run(reader, 1.0)
    other = OtherInstrument("*IDN? was answered by 'OTHER', but the run began with 'MAKER'")
    bench.answers |= {"X?": ReplyTimeout("nothing"), "open": other}
    bench.run(reader, 60.0)
    assert bench.words == [str(other)]
    assert set(bench.statuses()[6:]) == {"no_answer"}
    assert "but the run began with" in bench.rows[-1][4]
    assert set(bench.known[1:]) == {IDENTITY}
    del bench.answers["open"]
    bench.answers["X?"] = "3.5"
    bench.run(reader, 12.0)
    assert bench.rows[-1][3] == "ok"


def test_what_comes_in_the_silence_after_an_answer_makes_it_a_bad_one() -> None:
    bench = Bench(took_s=0.03)
    reader = bench.reader()
    bench.run(reader, 1.0)
    bench.stray = BadReply("'1.5' came without a question")
    bench.run(reader, 2.0)
    assert bench.statuses().count("bad_reply") == 1
    bad = bench.rows[bench.statuses().index("bad_reply")]
    assert bad[5] is None
    assert "without a question" in bad[4]
    assert bench.rows[-1][3] == "ok"


def test_a_code_that_is_not_configured_is_said_once() -> None:
    bench = Bench(answers={"T?": "17"})
    bench.run(bench.reader(settings_period_s=1.0), 5.0)
    (words,) = bench.words
    assert "time_constant: the answer '17' to 'T?' is not among the configured codes (9, 10)" in words
    assert json.loads(bench.rows[0][4])["settings"]["time_constant"] == {"raw": "17", "value": None}


def test_a_setting_that_changed_is_believed_if_the_instrument_still_says_who_it_is() -> None:
    """An answer that belongs to the question before comes with one too many."""
    bench = Bench(answers={"T?": ["9", "10"], "*IDN?": [IDENTITY, IDENTITY, "10", IDENTITY]})
    bench.run(bench.reader(settings_period_s=1.0), 1.6)
    assert bench.statuses().count("settings") == 1
    assert "out of turn" in next(row for row in bench.rows if row[3] == "no_answer")[4]


def test_every_answer_to_a_setting_is_counted_in_the_notes() -> None:
    bench = Bench()
    reader = bench.reader(settings_period_s=1.0)
    bench.run(reader, 30.0)
    reader.end()
    assert {note["seq"] for note in bench.notes} == {0}
    assert len(bench.notes) <= 5
    told = bench.notes[-1]["answers"]["time_constant"]
    assert told["count"] == len(bench.asked_times("T?"))
    assert told["first_s"] == pytest.approx(100.02)
    assert told["last_s"] == pytest.approx(bench.asked_times("T?")[-1] + 0.01)


def test_with_a_long_period_silence_is_told_once_a_period() -> None:
    bench = Bench(answers={"open": ConnectError("nobody there")})
    bench.run(bench.reader(period_s=20.0), 60.0)
    assert len(bench.rows) in (3, 4)


def test_an_instrument_that_answers_who_it_is_but_gives_no_reading_is_not_pestered() -> None:
    bench = Bench(answers={"X?": ReplyTimeout("nothing")})
    bench.run(bench.reader(), 60.0)
    assert len(bench.known) < 15
    assert bench.statuses().count("settings") == 1


def test_a_setting_changed_while_off_is_told_before_the_next_reading() -> None:
    bench = Bench(answers={"X?": ["1.5", ReplyTimeout("nothing"), "2.5"], "T?": ["9", "10"]})
    bench.run(bench.reader(), 2.0)
    assert bench.statuses()[:5] == ["settings", "ok", "no_answer", "settings", "ok"]
    assert json.loads(bench.rows[3][4])["settings"]["time_constant"]["value"] == 1.0
    assert [note["seq"] for note in bench.notes] == [0, 3]


def test_the_identity_of_the_start_of_the_run_is_demanded_from_the_first_opening_on() -> None:
    bench = Bench()
    bench.reader(known_identity="MAKER,MODEL,6,1.0").step()
    assert bench.known == ["MAKER,MODEL,6,1.0"]


def test_settings_are_asked_again_one_a_reading() -> None:
    bench = Bench(answers={"T?": ["9", "9", "10"]})
    bench.run(bench.reader(settings_period_s=1.0), 2.9)
    assert len(bench.asked_times("T?")) == 3
    assert len(bench.asked_times("G?")) == 3
    first, second = bench.asked_times("T?")[1], bench.asked_times("G?")[1]
    assert second - first == pytest.approx(0.2)
    assert len(bench.asked_times("X?")) == 14
    told = [json.loads(row[4]) for row in bench.rows if row[3] == "settings"]
    assert [one["settings"]["time_constant"]["value"] for one in told] == [0.3, 1.0]
    assert in_order(bench)


def test_settings_are_not_asked_again_unless_wanted() -> None:
    bench = Bench()
    bench.run(bench.reader(), 30.0)
    assert len(bench.asked_times("T?")) == 1


def test_a_setting_that_fails_costs_the_session_and_is_told() -> None:
    bench = Bench(answers={"G?": ["2", ReplyTimeout("'G?': no reply"), "2"]})
    bench.run(bench.reader(settings_period_s=1.0), 3.0)
    assert bench.statuses().count("no_answer") == 1
    assert bench.known == [None, IDENTITY]
    assert bench.rows[-1][3] == "ok"


def test_a_full_disk_stops_publishing_and_costs_no_reading() -> None:
    bench = Bench()
    reader = bench.reader()
    bench.run(reader, 1.0)
    before = len(bench.rows)
    bench.disk = JournalError("readings/lockin.csv: no space", "disk full")
    bench.run(reader, 5.0)
    assert len(bench.rows) == before
    assert len(bench.words) == 1
    assert "nothing can be recorded" in bench.words[0]
    bench.disk = None
    bench.run(reader, 2.0)
    assert bench.words[1:] == ["readings are recorded again"]
    assert set(bench.statuses()[before:]) == {"ok"}
    times = [row[1] for row in bench.rows[before - 1 :]]
    assert all(0.1 < b - a < 0.3 for a, b in pairwise(times)), "no reading is missing"
    assert in_order(bench)


def test_a_disk_full_for_longer_than_memory_lasts_is_said_with_how_many_and_why(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr("acquire.recorder.MOST_WAITING", 10)
    bench = Bench()
    reader = bench.reader()
    bench.run(reader, 1.0)
    before = len(bench.rows)
    bench.disk = JournalError("readings/lockin.csv: no space", "disk full")
    bench.run(reader, 60.0)
    asked = len(bench.asked)
    assert not bench.is_open
    bench.run(reader, 60.0)
    assert len(bench.asked) == asked, "nothing is asked that can't be kept"
    bench.disk = None
    bench.answers["T?"] = "10"  # changed meanwhile
    bench.run(reader, 5.0)
    assert bench.statuses()[before : before + 13] == ["ok"] * 10 + ["no_answer", "settings", "ok"]
    gap = bench.rows[before + 10]
    span = re.fullmatch(
        r"no readings were taken from (.*) to (.*) s, (.*) were due: .*no space", gap[4]
    )
    assert span is not None, gap
    began, ended, due = map(float, span.groups())
    assert began == pytest.approx(bench.rows[before + 9][1], abs=0.1)
    assert ended == pytest.approx(gap[1], abs=0.01)
    assert due == pytest.approx(117 / 0.2, abs=10)
    assert in_order(bench)


def test_settings_that_could_not_be_recorded_come_when_there_is_room() -> None:
    bench = Bench(disk=JournalError("no space"))
    reader = bench.reader()
    bench.run(reader, 3.0)
    assert (bench.rows, bench.notes) == ([], [])
    bench.disk = None
    bench.run(reader, 2.0)
    assert bench.statuses()[:2] == ["settings", "ok"]
    assert [note["seq"] for note in bench.notes] == [0]


def test_a_full_disk_and_an_instrument_that_is_off_end_in_reading() -> None:
    bench = Bench(disk=JournalError("no space"), answers={"open": ConnectError("nobody")})
    reader = bench.reader()
    bench.run(reader, 5.0)
    bench.disk = None
    bench.run(reader, 5.0)
    del bench.answers["open"]
    bench.run(reader, 12.0)
    assert bench.rows[-1][3] == "ok"
    assert in_order(bench)


def test_a_note_that_can_not_be_written_does_not_stop_reading() -> None:
    bench = Bench(notes_fail=True)
    reader = bench.reader()
    bench.run(reader, 3.0)
    assert bench.statuses()[-1] == "ok"
    assert len(bench.words) == 1
    bench.notes_fail = False
    bench.run(reader, 10.0)
    assert [note["seq"] for note in bench.notes] == [0]


def test_the_end_is_told_and_the_instrument_closed() -> None:
    bench = Bench()
    reader = bench.reader()
    bench.run(reader, 0.5)
    reader.end()
    assert bench.statuses()[-1] == "end"
    assert not bench.is_open
    bench.disk = JournalError("no space")
    reader.end()
    assert "no space" in bench.words[-1]


def test_pauses_grow_to_ten_seconds_and_differ_between_readers() -> None:
    pauses = [pause_s("a", attempt) for attempt in range(1, 2000)]
    assert 0.4 <= pauses[0] <= 0.5
    assert all(8.0 <= pause <= 10.0 for pause in pauses[6:])
    assert pauses == [pause_s("a", attempt) for attempt in range(1, 2000)]
    assert pauses[:5] != [pause_s("b", attempt) for attempt in range(1, 6)]


def test_the_loop_ends_when_it_is_not_wanted_any_more() -> None:
    bench = Bench()
    left = [True, True, False]
    run_reader(bench.reader(), Stop(), bench.now_s, lambda: left.pop(0))
    assert bench.statuses()[-1] == "end"


# The process.

CONFIG = """
[run]
title = "reader"
[field]
reader = "lockin"
value = "B"
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = {{ reader = "lockin", x = "x" }}
hall = {{ reader = "lockin", x = "x" }}
excitation = {{ current_A = 1e-6 }}
[[readers]]
name = "lockin"
resource = "{resource}"
write_termination = "\\n"
read_termination = "\\n"
timeout_ms = {timeout_ms}
period_s = 0.02
queries = ["X?"]
fields = 2
values = [{{ name = "x", position = 1 }}, {{ name = "B", position = 2, unit = "T" }}]
settings = [{{ name = "time_constant", query = "T?", codes = {{ "9" = 0.3 }} }}]
"""


class Live:
    """A run with one reader, which may be started and killed."""

    def __init__(self, folder: Path, resource: str, timeout_ms: int = 10_000) -> None:
        config = CONFIG.format(resource=resource, timeout_ms=timeout_ms).encode()
        rig = parse(config)
        self.table = reading_table("lockin", rig.reader("lockin"))
        self.run: RunFolder = create_run(rig, config, [self.table], folder)
        self.endpoints = free_endpoints([self.table.stream])
        self.run.write_live(self.endpoints, "tcp://127.0.0.1:1")
        self.processes: list[subprocess.Popen[str]] = []

    def start(self, *words: str) -> subprocess.Popen[str]:
        command = [sys.executable, "-m", "acquire.reader", str(self.run.path), *words]
        process = subprocess.Popen(command, stderr=subprocess.PIPE, text=True)
        self.processes.append(process)
        return process

    def rows(self) -> list[Row]:
        return list(self.run.rows(self.table))

    def statuses(self) -> list[object]:
        return [row[3] for row in self.rows()]

    def close(self) -> None:
        for process in self.processes:
            process.kill()
            process.communicate()


@pytest.fixture
def scripted() -> Iterator[ScriptedInstrument]:
    with ScriptedInstrument({"*IDN?": IDENTITY, "X?": "1.5,0.25", "T?": "9"}) as server:
        yield server


@pytest.fixture
def live(tmp_path: Path, scripted: ScriptedInstrument) -> Iterator[Live]:
    run = Live(tmp_path, scripted.resource)
    yield run
    run.close()


Wait = Callable[..., None]


def ended(process: subprocess.Popen[str], within_s: float = 10.0) -> tuple[int, str]:
    _, words = process.communicate(timeout=within_s)
    return process.returncode, words


def test_a_process_reads_publishes_and_ends_in_order(live: Live, wait_for: Wait) -> None:
    process = live.start("lockin")
    streams = {live.table.stream: live.table}
    heard: list[Row] = []
    with Subscriber(live.run.run_id, live.endpoints, streams) as subscriber:

        def hear() -> bool:
            heard.extend(row for _, row in subscriber.receive(0.1))
            return bool(heard) and heard[-1][3] == "end"

        wait_for(lambda: hear() or len(heard) >= 5)
        process.send_signal(signal.SIGINT)  # Ctrl-C is for the supervisor
        process.send_signal(signal.SIGTERM)
        wait_for(hear, "the end row")
    assert ended(process) == (0, "")
    assert heard == live.rows()
    assert [row[0] for row in heard] == list(range(len(heard)))
    assert [row[3] for row in heard[:2]] == ["settings", "ok"]
    assert heard[1][5:] == (1.5, 0.25)
    (note,) = live.run.instruments()
    assert (note["reader"], note["seq"], note["identity"]) == ("lockin", 0, IDENTITY)


def test_a_process_that_waits_for_an_answer_ends_at_once(
    live: Live, scripted: ScriptedInstrument
) -> None:
    del scripted.answers["X?"]
    process = live.start("lockin")
    scripted.wait_until_asked("X?")
    process.send_signal(signal.SIGTERM)
    assert ended(process, within_s=2.0) == (0, "")
    assert live.statuses() == ["settings", "end"]


def test_a_process_that_was_killed_goes_on_with_the_next_number(
    live: Live, scripted: ScriptedInstrument, wait_for: Wait
) -> None:
    first = live.start("lockin")
    wait_for(lambda: len(live.rows()) >= 5)
    first.kill()
    first.wait()
    with open(live.run.journal_path(live.table), "ab") as file:
        file.write(b"7,torn")
    (live.run.path / "instruments.json").write_text("[]")  # killed before it was noted
    known = len(live.rows())
    second = live.start("lockin")
    wait_for(lambda: len(live.rows()) >= known + 3)
    second.terminate()
    status, words = ended(second)
    assert status == 0
    assert "6 bytes of a torn last line" in words
    rows = live.rows()
    assert [row[0] for row in rows] == list(range(len(rows)))
    assert rows[known][3] == "settings"
    times = [row[1] for row in rows]
    assert times == sorted(times)  # type: ignore[type-var]
    noted = live.run.instruments()
    assert [(entry["seq"], entry["identity"]) for entry in noted] == [
        (0, IDENTITY), (known, IDENTITY),
    ]  # fmt: skip
    assert noted[0]["time_s"] == rows[0][1]
    assert live.run.started_utc < noted[0]["utc"] < noted[1]["utc"]


def test_after_a_restart_another_instrument_is_not_accepted(
    live: Live, scripted: ScriptedInstrument, wait_for: Wait
) -> None:
    live.run.note_instrument({"reader": "lockin", "identity": "MAKER,MODEL,6,1.0"})
    process = live.start("lockin")
    wait_for(lambda: live.statuses() == ["no_answer"])
    assert "MODEL,7" in str(live.rows()[0][4])
    assert "MODEL,6" in str(live.rows()[0][4])
    process.terminate()
    assert ended(process)[0] == 0


def test_a_late_answer_never_becomes_a_reading(
    tmp_path: Path, scripted: ScriptedInstrument, wait_for: Wait
) -> None:
    answer = threading.Event()
    scripted.answers["X?"] = ["1.5,0.25", late("8.0,8.0", answer), "2.5,0.5"]
    live = Live(tmp_path, scripted.resource, timeout_ms=200)
    process = live.start("lockin")
    try:
        wait_for(lambda: "no_answer" in live.statuses())
        answer.set()
        wait_for(lambda: live.rows()[-1][5] == 2.5)
        process.terminate()
        assert ended(process)[0] == 0
    finally:
        live.close()
    assert {row[5] for row in live.rows()} == {None, 1.5, 2.5}
    assert live.statuses().count("no_answer") == 1


def test_a_process_outlives_its_instrument(
    live: Live, scripted: ScriptedInstrument, wait_for: Wait
) -> None:
    scripted.refuse()
    process = live.start("lockin")
    wait_for(lambda: live.statuses()[:1] == ["no_answer"])
    scripted.listen()
    wait_for(lambda: "ok" in live.statuses())
    scripted.refuse()
    wait_for(lambda: live.statuses()[-1] == "no_answer")
    process.terminate()
    assert ended(process)[0] == 0
    assert live.statuses()[-1] == "end"


def test_a_process_ends_when_its_parent_is_gone(live: Live) -> None:
    process = live.start("lockin", "--parent", str(os.getppid()))
    assert ended(process) == (0, "")
    assert live.statuses()[-1:] == ["end"]


def test_a_reader_that_does_not_exist_is_told_in_one_sentence(live: Live) -> None:
    status, words = ended(live.start("lokin"))
    assert status == 1
    assert "has no reader 'lokin'; it has lockin." in words
    assert len(words.splitlines()) == 1


def test_a_run_that_has_ended_takes_no_reader(
    live: Live, capsys: pytest.CaptureFixture[str], restored_signals: None
) -> None:
    live.run.end_live()
    assert main([str(live.run.path), "lockin"]) == 1
    assert "does not wait for 'lockin'" in capsys.readouterr().err


def test_a_folder_that_is_no_run_takes_no_reader(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], restored_signals: None
) -> None:
    assert main([str(tmp_path), "lockin"]) == 1
    assert capsys.readouterr().err.count("\n") == 1


def test_a_second_process_for_one_reader_is_refused(live: Live, wait_for: Wait) -> None:
    live.start("lockin")
    wait_for(lambda: "ok" in live.statuses())
    status, words = ended(live.start("lockin"))
    assert status == 1
    assert len(words.splitlines()) == 1


@pytest.fixture
def restored_signals() -> Iterator[None]:
    names = [signal.SIGTERM, signal.SIGINT, signal.SIGHUP]
    before = {name: signal.getsignal(name) for name in names}
    yield
    for name, handler in before.items():
        signal.signal(name, handler)


def test_the_run_stays_open_for_readers(live: Live) -> None:
    assert open_run(live.run.path).run_id == live.run.run_id
