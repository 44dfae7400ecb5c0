"""The fault matrix: what can go wrong, for every process that can meet it, and the test of it.

``READER`` and ``LABORATORY`` are run here, against an instrument that answers as it is told and
against the simulated laboratory: a reader reads, one thing goes wrong, it passes, and the reader
reads on. Every question is answered by another number, so that a reading with the status "ok"
proves that it is the answer to its own question. ``ELSEWHERE`` names the tests of the other rows.
"""

from __future__ import annotations

import ast
import threading
import time
import tracemalloc
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from scripted_instrument import (
    Answer,
    Close,
    Hold,
    ScriptedInstrument,
    Send,
    ToNewest,
    delayed,
    half_then_close,
    long_line,
    split,
    trickle,
    twice,
    unterminated,
)

from acquire.config.reader import ReaderSection
from acquire.instrument import Instrument
from acquire.laboratory.bench import Bench
from acquire.laboratory.scenario import Scenario
from acquire.laboratory.server import LaboratoryServer
from acquire.reader import Reader
from acquire.socket_line import is_writable

IDENTITY = "MAKER,MODEL,7,1.0"
DEADLINE_S = 40.0
SHORT_MS, LONG_MS = 80, 10_000
MOST_CPU_S = 3.0  # a reader that spins through one of the long timeouts needs more
MOST_BYTES = 3_000_000  # at once, while a line of 10 MB comes
GOOD = frozenset({"ok", "settings"})


class Reading:
    """A reader and an instrument, and what the reader published.

    Each row is kept with the number of readings that had been asked for when it came: the n-th
    is answered by n, so an "ok" row with another number is a wrong reading.
    """

    def __init__(self, resource: str, asked: Callable[[], int], **keys: object) -> None:
        plain = {
            "name": "lockin",
            "resource": resource,
            "write_termination": "\n",
            "read_termination": "\n",
            "timeout_ms": LONG_MS,
            "queries": ["X?"],
            "period_s": 0.02,
            "values": [{"name": "x", "position": 1}],
        }
        section = ReaderSection.model_validate({**plain, **keys})
        self.instrument = Instrument(section)
        self.rows: list[tuple[str, Any, int]] = []
        self.words: list[str] = []
        self._asked = asked
        self.reader = Reader(
            section, self.instrument, self.publish, time.monotonic, complain=self.words.append
        )

    def publish(self, time_s: float, took_s: object, status: str, detail: str, *values: Any) -> int:
        self.rows.append((status, values[0], self._asked()))
        return len(self.rows) - 1

    def until(self, condition: Callable[[], bool]) -> None:
        """Let the reader do what is due until the condition holds."""
        deadline, pause = time.monotonic() + DEADLINE_S, threading.Event()
        while not condition():
            assert time.monotonic() < deadline, self.rows[-10:]
            due = self.reader.step()
            pause.wait(min(max(due - time.monotonic(), 0.0), 0.01))

    def count(self, *statuses: str) -> int:
        return sum(status in statuses for status, _, _ in self.rows)

    def read_more(self, count: int = 2) -> None:
        wanted = self.count("ok") + count
        self.until(lambda: self.count("ok") >= wanted)

    def wrong(self) -> list[tuple[str, Any, int]]:
        """Rows with the status "ok" that are not the answer to their question."""
        return [row for row in self.rows if row[0] == "ok" and row[1] != row[2]]


@pytest.fixture
def scripted() -> Iterator[ScriptedInstrument]:
    with ScriptedInstrument({"*IDN?": IDENTITY}) as server:
        server.answers["X?"] = lambda: f"{server.asked('X?')}.0"
        yield server


@pytest.fixture(autouse=True)
def quick_pauses(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("acquire.pauses.SHORTEST_PAUSE_S", 0.02)
    monkeypatch.setattr("acquire.pauses.LONGEST_PAUSE_S", 0.1)
    monkeypatch.setattr("acquire.reader.SILENT_ROW_S", 0.05)


@dataclass(frozen=True)
class Fault:
    """One row: ``answer`` makes the answer to one question out of its number, ``marked`` are the
    statuses of which one has to appear, ``again`` how many questions are answered so."""

    answer: Callable[[int], Answer]
    marked: tuple[str, ...]
    timeout_ms: int = LONG_MS
    again: int = 1


NEVER = threading.Event()

READER: dict[str, Fault] = {
    "close before reply": Fault(lambda n: (Close(),), ("no_answer",)),
    "reset before reply": Fault(lambda n: (Close(reset=True),), ("no_answer",)),
    "close mid-reply": Fault(lambda n: half_then_close(f"{n}.0000000"), ("no_answer",)),
    "no reply": Fault(lambda n: (Hold(NEVER),), ("no_answer",), SHORT_MS),
    "late reply": Fault(lambda n: delayed(f"{n}.0", 0.2), ("no_answer",), SHORT_MS),
    "split reply": Fault(lambda n: (Send(f"{n}".encode()), ".0"), ("ok",)),
    "split reply across timeout": Fault(
        lambda n: split(f"{n}.23456", 3, NEVER), ("no_answer",), SHORT_MS
    ),
    "wrong terminator": Fault(lambda n: unterminated(f"{n}.0\r"), ("no_answer",), SHORT_MS),
    "no terminator": Fault(lambda n: unterminated(f"{n}.0"), ("no_answer",), SHORT_MS),
    "non-ASCII": Fault(lambda n: f"{n}.0".encode() + b"\xb5\n", ("bad_reply",)),
    "empty line": Fault(lambda n: "", ("bad_reply",)),
    "blank line": Fault(lambda n: "  ", ("bad_reply",)),
    "unit behind the number": Fault(lambda n: f"{n}.0V", ("bad_reply",)),
    "decimal comma": Fault(lambda n: f"{n},0", ("bad_reply",)),
    "echo": Fault(lambda n: "X?", ("bad_reply",)),
    "echo before the reply": Fault(lambda n: b"X?\n%d.0\n" % n, ("bad_reply",)),
    "overflow sentinel": Fault(lambda n: "9.9e37", ("overload",)),
    "underflow sentinel": Fault(lambda n: "-9.9E+37", ("overload",)),
    "not-a-number sentinel": Fault(lambda n: "9.91E37", ("overload",)),
    "sentinel in single precision": Fault(lambda n: "9.8999997E+37", ("overload",)),
    "NaN text": Fault(lambda n: "NAN", ("bad_reply",)),
    "infinity text": Fault(lambda n: "-INF", ("overload",)),
    "overload text": Fault(lambda n: "OVLD", ("overload",)),
    "beyond the stated range": Fault(lambda n: f"-{n}.0", ("range",)),
    "duplicate reply": Fault(lambda n: f"{n}.0\n{n}.0\n".encode(), ("bad_reply",)),
    "duplicate of the reply before": Fault(
        lambda n: f"{n - 1}.0\n{n}.0\n".encode(), ("bad_reply",)
    ),
    "every reply twice from now on": Fault(
        lambda n: f"{n}.0\n{n}.0\n".encode(), ("bad_reply",), again=6
    ),
    "a word unasked": Fault(lambda n: b"READY\n%d.0\n" % n, ("bad_reply",)),
    "10 MB line": Fault(lambda n: long_line(10_000_000), ("bad_reply",)),
    "slow trickle": Fault(lambda n: trickle("1" * 2000, 0.004), ("no_answer",), SHORT_MS),
    "trickle that ends in time": Fault(lambda n: (*trickle(f"{n}.0", 0.001), ""), ("ok",)),
}


@pytest.mark.parametrize("name", READER)
def test_reader_and_scripted_instrument(scripted: ScriptedInstrument, name: str) -> None:
    fault, good = READER[name], scripted.answers["X?"]
    one = Reading(
        scripted.resource,
        lambda: scripted.asked("X?"),
        timeout_ms=fault.timeout_ms,
        values=[{"name": "x", "position": 1, "lowest": -0.5, "overload_texts": ["OVLD"]}],
    )
    left = [fault.again]

    def spoiled() -> Answer:
        left[0] -= 1
        if left[0] <= 0:
            scripted.answers["X?"] = good
        return fault.answer(scripted.asked("X?"))

    cpu = time.thread_time()
    try:
        one.read_more()
        known = len(one.rows)
        scripted.answers["X?"] = spoiled
        if name == "10 MB line":
            tracemalloc.start()
        one.until(lambda: left[0] <= 0)
        one.until(lambda: any(row[0] in fault.marked for row in one.rows[known:]))
        if name == "10 MB line":
            assert tracemalloc.get_traced_memory()[1] < MOST_BYTES
        one.read_more()
    finally:
        tracemalloc.stop()
        one.reader.end()
    assert one.wrong() == []
    found = {row[0] for row in one.rows[known:]}
    assert found <= {*fault.marked, *GOOD, "no_answer", "bad_reply", "end"}
    assert ("ok" in fault.marked) == (found <= {*GOOD, "end"})
    assert time.thread_time() - cpu < MOST_CPU_S


def test_reader_and_an_instrument_that_sends_every_reply_twice(
    scripted: ScriptedInstrument,
) -> None:
    """From the start on: it never gets as far as a reading, and says why."""
    good = scripted.answers["X?"]
    scripted.answers["*IDN?"] = twice(IDENTITY)
    scripted.answers["X?"] = lambda: twice(good())
    one = Reading(scripted.resource, lambda: scripted.asked("X?"))
    one.until(lambda: one.count("no_answer", "bad_reply") >= 5)
    assert one.wrong() == []
    scripted.answers["*IDN?"], scripted.answers["X?"] = IDENTITY, good
    one.read_more()
    one.reader.end()
    assert one.wrong() == []


@pytest.mark.parametrize(
    ("queries", "replies"),
    [
        (["X?", "Y?"], {"Y?": b"1.0\n2.0\n"}),  # x again, then y
        (["X?", "Y?"], {"X?": b"1.0\n1.0\n"}),  # x twice
        (["XY?", "S?"], {"XY?": b"0\n", "S?": b"1.0,2.0\n"}),  # all one behind
        (["XY?", "S?"], {"S?": b"1.0,2.0\n0\n"}),
    ],
)
def test_reader_and_answers_that_slip_between_the_questions_of_one_reading(
    scripted: ScriptedInstrument, queries: list[str], replies: dict[str, bytes]
) -> None:
    """The count of all fields alone does not show it: 1 + 2 are as many as 2 + 1."""
    scripted.answers.update({"X?": "1.0", "Y?": "2.0", "XY?": "1.0,2.0", "S?": "0"})
    names = ["x", "y", "s"][: 2 if "Y?" in queries else 3]
    values = [{"name": name, "position": k} for k, name in enumerate(names, 1)]
    one = Reading(
        scripted.resource, lambda: 1, queries=queries, fields=len(names), values=values
    )
    one.read_more()
    known = len(one.rows)
    good = {query: scripted.answers[query] for query in replies}
    for query, reply in replies.items():
        scripted.answers[query] = [reply, good[query]]
    one.until(lambda: any(row[0] == "bad_reply" for row in one.rows[known:]))
    one.read_more()
    one.reader.end()
    assert one.wrong() == []


def test_reader_and_a_late_reply_that_a_gateway_hands_to_the_next_connection(
    scripted: ScriptedInstrument,
) -> None:
    """Closing and opening anew is no help there."""
    good, again, later = scripted.answers["X?"], threading.Event(), threading.Event()
    one = Reading(scripted.resource, lambda: scripted.asked("X?"), timeout_ms=200)
    one.read_more()
    for moment in ("before the identity", "between identity and reading"):
        known, count = len(one.rows), scripted.connections + 1
        again.clear()
        later.clear()
        stray = f"{scripted.asked('X?') + 1}.0\n".encode()
        scripted.answers["X?"] = [(Hold(again), ToNewest(stray)), good]
        if moment == "before the identity":
            scripted.answers["*IDN?"] = [(Hold(later), IDENTITY), IDENTITY]
            one.until(_has_connected(scripted, count))
            again.set()
            one.until(lambda: one.count("no_answer", "bad_reply") > 0)
            later.set()
        else:
            one.until(lambda done=_has_connected(scripted, count): done() and one.reader.connected)
            again.set()
        one.read_more(3)
        assert any(row[0] in ("no_answer", "bad_reply") for row in one.rows[known:])
    one.reader.end()
    assert one.wrong() == []


def _has_connected(scripted: ScriptedInstrument, count: int) -> Callable[[], bool]:
    return lambda: scripted.connections >= count


def test_reader_with_a_proof_and_answers_that_stay_one_behind(
    scripted: ScriptedInstrument,
) -> None:
    """No silence shows it: each answer comes as soon as the next question is asked."""
    scripted.answers["DONE?"] = "1"
    one = Reading(
        scripted.resource,
        lambda: scripted.asked("X?"),
        proof={"query": "DONE?", "reply": "1"},
    )
    one.read_more()
    known, good = len(one.rows), scripted.answers["X?"]
    scripted.answers["X?"] = [lambda: f"{scripted.asked('X?') - 1}.0", good]
    scripted.answers["DONE?"] = [lambda: good(), "1"]
    one.until(lambda: any(row[0] == "bad_reply" for row in one.rows[known:]))
    scripted.answers["X?"] = ["1", good]
    scripted.answers["DONE?"] = [lambda: good(), "1"]
    one.until(lambda: one.count("bad_reply") >= 2)
    one.read_more()
    one.reader.end()
    assert one.wrong() == []


def test_reader_refused_and_accepted_again(scripted: ScriptedInstrument) -> None:
    one = Reading(scripted.resource, lambda: scripted.asked("X?"))
    one.read_more()
    scripted.refuse()
    one.until(lambda: one.count("no_answer") >= 3)
    scripted.listen()
    one.read_more()
    one.reader.end()
    assert one.wrong() == []


def test_reader_accepted_then_closed(scripted: ScriptedInstrument) -> None:
    one = Reading(scripted.resource, lambda: scripted.asked("X?"))
    one.read_more()
    cpu = time.thread_time()
    scripted.greeting = (Close(),)
    scripted.cut()
    one.until(lambda: one.count("no_answer") >= 3)
    scripted.greeting = ()
    one.read_more()
    one.reader.end()
    assert one.wrong() == []
    assert time.thread_time() - cpu < MOST_CPU_S


def test_reader_whose_writing_is_blocked(scripted: ScriptedInstrument) -> None:
    good, deaf = scripted.answers["X?"], threading.Event()
    one = Reading(scripted.resource, lambda: scripted.asked("X?"), timeout_ms=SHORT_MS)
    one.read_more()
    scripted.answers["X?"] = [(Hold(deaf), Close()), lambda: good()]
    line = one.instrument._socket
    assert line is not None
    line.send(b"X?\n")
    line.setblocking(False)
    while is_writable(line, 0.05):
        try:
            line.send(b"." * 65_536)
        except BlockingIOError:
            continue
    known = len(one.rows)
    one.until(lambda: any(row[0] == "no_answer" for row in one.rows[known:]))
    deaf.set()
    scripted.answers["X?"] = good
    one.read_more()
    one.reader.end()
    assert one.wrong() == []


@pytest.mark.parametrize("jump_s", [-3600.0, 3600.0])
def test_reader_while_the_clock_on_the_wall_jumps(
    scripted: ScriptedInstrument, monkeypatch: pytest.MonkeyPatch, jump_s: float
) -> None:
    one = Reading(scripted.resource, lambda: scripted.asked("X?"))
    one.read_more()
    wall = time.time
    monkeypatch.setattr(time, "time", lambda: wall() + jump_s)
    one.read_more(5)
    monkeypatch.setattr(time, "time", wall)
    one.read_more(5)
    one.reader.end()
    assert one.wrong() == []
    assert {row[0] for row in one.rows} <= {"ok", "settings", "end"}


def test_reader_and_a_late_answer_to_a_setting(scripted: ScriptedInstrument) -> None:
    """A reading that comes in answer to a setting is not taken for a time constant."""
    scripted.answers["T?"] = "0.3"
    scripted.answers["X?"] = "1.0"
    one = Reading(
        scripted.resource,
        lambda: 1,
        settings=[{"name": "T", "query": "T?"}],
        settings_period_s=0.05,
    )
    one.read_more()
    scripted.answers["T?"] = [b"1.0\n0.3\n", "0.3"]
    one.until(lambda: one.count("no_answer", "bad_reply") > 0)
    one.read_more()
    one.reader.end()
    assert one.wrong() == []
    assert one.count("settings") == 1
    assert one.reader._dialogue.settings == {"T": {"raw": "0.3", "value": 0.3}}


# ---- the simulated laboratory ----

LABORATORY: dict[str, tuple[str, tuple[str, ...]]] = {
    "late reply": ("delay,replies=1,delay_s=0.3", ("no_answer",)),
    "split reply across timeout": ("split,replies=1,delay_s=0.3", ("no_answer",)),
    "no reply": ("drop,replies=1", ("no_answer",)),
    "non-ASCII": ("garble,replies=1", ("bad_reply",)),
    "duplicate reply": ("duplicate,replies=1,delay_s=0.001", ("bad_reply",)),
    "overload by status bit": ("overload,replies=1", ("overload",)),
    "close before reply": ("disconnect,replies=1", ("no_answer",)),
    "refuse": ("off,lasts_s=0.3", ("no_answer",)),
    "deaf for a while": ("silence,lasts_s=0.3", ("no_answer",)),
    "every reply twice for a while": ("duplicate,lasts_s=0.5,delay_s=0.01", ("bad_reply",)),
}


@pytest.fixture
def laboratory() -> Iterator[LaboratoryServer]:
    """A lock-in that always shows the same: the ramp waits, there is no noise."""
    scenario = Scenario.model_validate(
        {
            "current_A": 1e-6,
            "sample": {"sheet_density_per_m2": 3e15, "mobility_m2_per_V_s": 20.0},
            "magnet": {"path_T": [0.5, 1.0], "rate_T_per_min": 1.0, "wait_s": 1e6},
            "lockins": [
                {"name": "xx", "measures": "longitudinal", "noise_V_per_rtHz": 0.0}
            ],
        }
    )
    with LaboratoryServer(Bench(scenario)) as server:
        over = threading.Event()

        def serve() -> None:
            while not over.is_set():
                server.step(0.005)

        thread = threading.Thread(target=serve)
        thread.start()
        yield server
        over.set()
        thread.join(DEADLINE_S)


@pytest.mark.parametrize("name", LABORATORY)
def test_reader_and_simulated_laboratory(laboratory: LaboratoryServer, name: str) -> None:
    begin, marked = LABORATORY[name]
    resource = f"TCPIP::127.0.0.1::{laboratory.ports['xx']}::SOCKET"
    one = Reading(
        resource,
        lambda: 0,
        timeout_ms=150,
        queries=["XYS?"],
        fields=3,
        overload={"position": 3, "bits": 4},
    )
    one.read_more()
    truth, known = one.rows[-1][1], len(one.rows)
    hand = Instrument(ReaderSection.model_validate({**_HAND, "resource": resource}))
    hand.open()
    assert hand.ask(f"SIMULATE:BEGIN {begin}") == "OK"
    one.until(lambda: any(row[0] in marked for row in one.rows[known:]))
    one.read_more()
    hand.close()
    one.reader.end()
    assert {row[1] for row in one.rows if row[0] == "ok"} == {truth}
    assert truth != 0.0


_HAND = {
    "name": "hand",
    "write_termination": "\n",
    "read_termination": "\n",
    "queries": ["X?"],
    "values": [{"name": "x", "position": 1}],
}


# ---- the rows that other tests are for ----

ELSEWHERE: dict[tuple[str, str], str] = {
    ("SIGTERM", "reader"): "test_reader::test_a_process_that_waits_for_an_answer_ends_at_once",
    ("SIGKILL + restart", "reader"): (
        "test_reader::test_a_process_that_was_killed_goes_on_with_the_next_number"
    ),
    ("parent killed", "reader"): "test_reader::test_a_process_ends_when_its_parent_is_gone",
    ("disk full", "reader"): (
        "test_reader::test_a_full_disk_stops_publishing_and_costs_no_reading"
    ),
    ("disk full for longer than memory lasts", "reader"): (
        "test_reader::"
        "test_a_disk_full_for_longer_than_memory_lasts_is_said_with_how_many_and_why"
    ),
    ("disk full", "estimator"): (
        "test_service::test_a_full_disk_delays_estimates_and_events_and_changes_none"
    ),
    ("disk full", "supervisor"): (
        "test_watch::test_a_full_disk_is_told_everywhere_and_costs_nothing"
    ),
    ("off for an hour", "reader"): (
        "test_reader::test_after_an_hour_without_an_instrument_it_is_found_again_within_seconds"
    ),
    ("another instrument", "reader"): (
        "test_reader::test_another_instrument_is_said_once_and_never_used"
    ),
    ("block cut in the middle", "reader"): "test_blocks::test_a_block_that_is_not_whole_is_none",
    ("block in pieces", "reader"): "test_blocks::test_a_block_comes_in_any_pieces",
    ("block that comes twice", "reader"): (
        "test_blocks::test_a_block_that_comes_twice_is_used_once_and_nothing_is_lost"
    ),
    ("buffer overrun", "reader"): (
        "test_blocks::test_a_buffer_that_ran_over_is_marked_and_shifts_nothing"
    ),
    ("NaN, sentinel or status bit in a block", "reader"): (
        "test_blocks::test_what_is_wrong_in_a_block_is_marked_and_the_reader_goes_on"
    ),
    ("changed setting", "estimator"): (
        "test_instrument_settings::test_a_time_constant_that_changes_is_used_from_its_reading_on"
    ),
    ("glitch at a change of range", "estimator"): (
        "test_instrument_settings::test_readings_beside_a_change_of_range_are_not_used"
    ),
    ("unknown code of a setting", "estimator"): (
        "test_instrument_settings::"
        "test_while_a_code_is_not_known_nothing_is_used_and_that_is_said"
    ),
    ("all of a reader's life", "serial line"): (
        "test_instrument::test_a_reader_on_a_serial_line_from_end_to_end"
    ),
    ("late reply on a serial line", "reader"): (
        "test_instrument::test_what_comes_late_on_a_serial_line_is_thrown_away_on_opening"
    ),
    ("whatever a VISA library raises", "reader"): (
        "test_instrument::test_whatever_goes_wrong_below_is_one_of_our_errors_and_closes"
    ),
    ("SIGTERM", "simulated laboratory"): (
        "test_laboratory_server::test_the_process_says_when_it_is_ready_and_ends_when_asked"
    ),
    ("SIGTERM", "supervisor"): "test_watch::test_ctrl_c_ends_in_time_and_in_order",
    ("SIGKILL", "supervisor"): (
        "test_watch::"
        "test_no_orphan_when_the_watch_itself_is_killed_and_the_next_one_closes_its_run"
    ),
    ("SIGKILL of any other process", "supervisor"): (
        "test_watch::test_any_process_killed_in_mid_ramp_changes_nothing"
    ),
    ("a process that does not end", "supervisor"): (
        "test_watch::test_a_process_that_cannot_be_asked_is_killed_in_time"
    ),
    ("a process that can't live", "supervisor"): (
        "test_supervisor::test_one_that_cannot_live_leaves_the_others_working"
    ),
    ("SIGKILL + restart", "journal"): (
        "test_journal::test_a_killed_writer_loses_nothing_that_it_has_reported"
    ),
    ("power cut", "journal"): "test_journal::test_what_a_power_cut_leaves_is_cut_away",
    ("disk full", "journal"): "test_journal::test_a_full_disk_loses_nothing_and_is_got_over",
    ("HWM overflow", "bus"): "test_bus::test_what_a_slow_subscriber_loses_is_filled",
    ("subscriber frozen", "bus"): (
        "test_flood::test_a_frozen_listener_loses_nothing_and_costs_nobody_else_memory"
    ),
    ("subscriber frozen at the end", "bus"): (
        "test_bus::test_closing_does_not_wait_for_somebody_who_does_not_listen"
    ),
    ("frozen", "estimator"): (
        "test_flood::test_a_frozen_estimator_goes_on_as_if_it_had_not_been"
    ),
    ("terminal closed", "supervisor"): (
        "test_closed_terminal::test_a_terminal_that_is_closed_ends_all_in_order"
    ),
    ("power cut", "run"): "test_bad_end::test_a_power_cut_is_told",
    ("SIGKILL of everything", "run"): (
        "test_bad_end::test_it_is_as_an_undisturbed_run_but_for_its_marks"
    ),
    ("all of it at random", "everything"): "test_soak::test_a_short_soak",
    ("late reply", "hold"): "test_hold_watch::test_answering_late",
    ("half-dead supply", "hold"): "test_hold_watch::test_half_dead_from_the_command_on",
    ("a command that is ignored", "hold"): "test_hold_watch::test_ignored",
    ("estimator killed before the command", "hold"): (
        "test_hold_watch::test_the_estimator_dies_between_decision_and_command"
    ),
    ("SIGKILL + restart of the publisher", "bus"): (
        "test_bus::test_a_killed_publisher_is_followed_through_its_restarts"
    ),
    ("malformed messages", "bus"): (
        "test_bus::test_malformed_frames_are_counted_and_do_no_harm"
    ),
    ("an address off loopback", "bus"): (
        "test_bus_keys::test_nothing_is_bound_beyond_loopback_without_keys"
    ),
    ("wrong key", "bus"): (
        "test_bus_keys::test_who_is_refused_hears_nothing_and_both_sides_say_why"
    ),
    ("no key", "bus"): "test_bus_keys::test_who_has_no_keys_is_refused_and_told",
    ("revoked key", "bus"): (
        "test_bus_keys::test_a_key_that_is_taken_away_cuts_the_connection_and_no_other"
    ),
    ("authenticator killed", "bus"): (
        "test_bus_keys::test_the_bus_stays_closed_whatever_the_gate_does"
    ),
    ("SIGKILL + restart", "estimator"): "test_service::test_a_killed_process_loses_nothing",
    ("messages in any order", "estimator"): (
        "test_service::test_any_order_of_messages_writes_the_same_tables"
    ),
    ("SIGKILL + restart", "relay"): (
        "test_relay::test_whoever_is_killed_no_row_is_lost_or_doubled"
    ),
    ("disk full", "relay"): "test_relay::test_a_full_disk_delays_rows_and_loses_none",
    ("200 GETs", "page"): (
        "test_page_incoming::test_two_hundred_requests_make_no_more_pages_than_are_allowed"
    ),
    ("frozen tab", "page"): (
        "test_page_incoming::"
        "test_a_tab_that_stops_reading_makes_its_own_page_wait_and_nothing_grow"
    ),
    ("slider out of range", "page"): "test_page_incoming::test_nothing_else_is_taken",
    ("a Hall bar that is not there", "page"): (
        "test_page_panels::test_a_browser_can_choose_no_hall_bar_that_is_not_there"
    ),
    ("a stream that stops", "page"): (
        "test_page::test_a_stream_that_stops_looks_stopped_and_comes_back"
    ),
    ("<script> from an instrument", "page"): (
        "test_page::test_what_instruments_and_people_say_is_shown_as_text"
    ),
    ("each key wrong", "configuration"): (
        "test_configs::test_a_mistake_is_told_with_its_place_its_rule_and_what_was_found"
    ),
    ("any bytes", "configuration"): "test_configs::test_any_bytes_raise_nothing_but_config_error",
}


@pytest.mark.parametrize("row", ELSEWHERE, ids=lambda row: f"{row[1]}: {row[0]}")
def test_a_row_that_is_tested_elsewhere_is(row: tuple[str, str]) -> None:
    module, name = ELSEWHERE[row].split("::")
    tree = ast.parse((Path(__file__).parent / f"{module}.py").read_text(encoding="utf-8"))
    found = [node for node in tree.body if isinstance(node, ast.FunctionDef) and node.name == name]
    assert len(found) == 1, f"{ELSEWHERE[row]} is gone: name its successor in ELSEWHERE"
