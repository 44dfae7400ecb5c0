"""The estimator as a process of a run: what it writes depends on the readers' journals alone."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import threading
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any, Self

import pytest
from two_bars import CONFIG, interleaved, rig, rows

from acquire.bus import Publisher, Subscriber, ask, free_address, free_endpoints
from acquire.cells import RowCodec
from acquire.errors import JournalError
from acquire.journal import Journal
from acquire.readings import Reading, reading_table, stream_of
from acquire.run_folder import RunFolder, create_run
from acquire.stop import Stop
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.replay import RowMaker, merge_by_time, replay_readings
from analyse.row_maker import DETERMINED
from analyse.service import ID, KIND, RETRY_S, Output, Service, main, run_service

READERS = {reader.name: reading_table(reader.name, reader) for reader in rig().readers}
FINISH = {"kind": "run", "code": "finish"}


def expected(readings: dict[str, list[Reading]]) -> dict[str, list[Row]]:
    """Rows of both tables, with seq, as a replay makes them."""
    found: dict[str, list[Row]] = {"estimates": [], "events": []}
    codecs = {"estimates": RowCodec(ESTIMATES), "events": RowCodec(EVENTS)}
    for record in replay_readings(RowMaker(rig()), merge_by_time(readings)):
        table = found[record.stream]
        table.append((len(table), *codecs[record.stream].canonical(record.cells)))
    return found


@pytest.fixture(scope="module")
def whole() -> dict[str, list[Row]]:
    """What all rows come to."""
    return expected(rows())


class Desk:
    """A service with lists in the place of journals, which may have rows already."""

    def __init__(self, tables: dict[str, list[Row]] | None = None, now_s: float = 7.0) -> None:
        self.tables = {"estimates": [], "events": []} if tables is None else tables
        self.full = False
        self.words: list[str] = []
        self.now = now_s
        written = {name: list(known) for name, known in self.tables.items()}
        self.service = Service(
            RowMaker(rig()),
            Output(iter(written["estimates"]), self._publish("estimates"), ESTIMATES),
            Output(
                iter(written["events"]), self._publish("events"), EVENTS,
                lambda row: row[KIND] in DETERMINED,
            ),
            self._publish("events"),
            lambda: self.now,
            written["events"],
            self.words.append,
        )  # fmt: skip

    def _publish(self, name: str) -> Callable[[Row], None]:
        codec = RowCodec({"estimates": ESTIMATES, "events": EVENTS}[name])

        def publish(cells: Row) -> None:
            if self.full:
                raise JournalError(f"{name}.csv: no space", "disk full")
            self.tables[name].append((len(self.tables[name]), *codec.canonical(cells)))

        return publish

    def take(self, readings: Iterable[Reading]) -> None:
        """Take readers' rows."""
        for reading in readings:
            self.service.take(reading)

    def request(self, **message: Any) -> dict[str, Any]:
        """A request, where there is nothing to catch up with."""
        return self.service.request(message, lambda: None)

    def determined(self) -> dict[str, list[Row]]:
        """The tables without what people and processes said; events numbered anew."""
        events = [row for row in self.tables["events"] if row[KIND] in DETERMINED]
        numbered = [(seq, *row[1:]) for seq, row in enumerate(events)]
        return {"estimates": self.tables["estimates"], "events": numbered}


# ---- Output ----


def test_output_passes_over_what_is_written_and_goes_on_after_it() -> None:
    published: list[Row] = []
    written: list[Row] = [(0, 1.0, "note", None, "a", None, 0, None),
                          (1, 2.0, "verdict", "bar", "stable", "x", 3, None)]  # fmt: skip
    output = Output(iter(written), published.append, EVENTS, lambda row: row[KIND] in DETERMINED)
    output.put((2.0, "verdict", "bar", "stable", "x", 3, None))
    assert (published, output.differing) == ([], 0)
    output.put((3.0, "caution", "bar", "overload", "y", 4, None))
    assert published == [(3.0, "caution", "bar", "overload", "y", 4, None)]


def test_output_counts_rows_that_come_out_otherwise_and_mends_none() -> None:
    published: list[Row] = []
    written: list[Row] = [(k, float(k), "verdict", "bar", "stable", "x", k, None) for k in range(3)]
    output = Output(iter(written), published.append, EVENTS)
    for k in range(4):
        output.put((float(k), "verdict", "bar", "converging" if k == 1 else "stable", "x", k, None))
    assert (output.differing, len(published)) == (1, 1)


def test_output_compares_rows_as_they_read_back() -> None:
    """A line break or an empty text is another one once it was written."""
    published: list[Row] = []
    written: list[Row] = [(0, 1.0, "caution", None, "c", "two\\nlines", 0, None)]
    output = Output(iter(written), published.append, EVENTS)
    output.put((1.0, "caution", "", "c", "two\nlines", 0, ""))
    assert (output.differing, published) == (0, [])


# ---- Service ----


@pytest.mark.parametrize("seed", [1, 2])
def test_any_order_of_messages_writes_the_same_tables(
    whole: dict[str, list[Row]], seed: int
) -> None:
    desk = Desk()
    desk.take(interleaved(random.Random(seed), rows()))
    reply = desk.request(**FINISH)
    assert reply == {"ok": True, "estimates": len(whole["estimates"]), "differing": 0}
    assert desk.tables == whole


def test_a_row_that_was_taken_is_passed_over_and_one_too_early_is_not_taken() -> None:
    desk, found = Desk(), rows()
    first, second, third = found["magnet"][:3]
    desk.take([first, first, third, second, first, third])
    assert desk.service.next_seq == {"magnet": 3, "lockin_1": 0, "lockin_2": 0, "meter": 0}
    desk.take([Reading("thermometer", 0, 1.0, 0.01, "ok", "", (4.2,))])
    assert "thermometer" not in desk.service.next_seq


def test_what_next_seq_gave_is_the_callers() -> None:
    desk = Desk()
    desk.service.next_seq["magnet"] = 17
    assert desk.service.next_seq["magnet"] == 0


@pytest.mark.parametrize("share", [0.0, 0.02, 0.37, 0.8, 1.0])
def test_killed_anywhere_and_started_again(whole: dict[str, list[Row]], share: float) -> None:
    """With any number of rows written, of either table, and notes among the events."""
    rng = random.Random(f"{share}")
    first = Desk()
    readings = list(interleaved(rng, rows()))
    cut = int(share * len(readings))
    first.request(kind="note", code="note", text="before", id="1")
    first.take(readings[:cut])
    first.request(kind="note", code="note", text="half way", id="2")
    torn = {name: known[: rng.randint(0, len(known))] for name, known in first.tables.items()}
    again = Desk(torn)
    again.request(kind="note", code="note", text="half way", id="2")
    again.take(interleaved(rng, rows()))
    reply = again.request(**FINISH)
    assert reply == {"ok": True, "estimates": len(whole["estimates"]), "differing": 0}
    assert again.determined() == whole
    notes = [row[ID] for row in again.tables["events"] if row[KIND] == "note"]
    assert notes.count("2") == 1


def test_a_full_disk_delays_estimates_and_events_and_changes_none(
    whole: dict[str, list[Row]]
) -> None:
    desk, readings = Desk(), list(merge_by_time(rows()))
    desk.take(readings[:500])
    before = {name: list(known) for name, known in desk.tables.items()}
    desk.full = True
    taken = 500
    while not desk.service.behind:
        desk.take(readings[taken : taken + 1])
        taken += 1
    note = {"kind": "note", "code": "n", "text": "while full", "id": "1"}
    reply = desk.request(**note)
    assert (reply["ok"], reply["again"]) == (False, True)
    assert "no space" in reply["error"]
    reply = desk.request(**FINISH)
    assert (reply["ok"], reply["again"]) == (False, True)
    assert desk.tables == before
    assert len(desk.words) == 1
    assert "nothing is published" in desk.words[0]
    desk.full = False
    desk.service.step()
    assert desk.tables == before, "not before its time"
    desk.now += RETRY_S
    desk.service.step()
    assert not desk.service.behind
    assert desk.words[1:] == ["estimates and events are recorded again"]
    assert desk.request(**note)["ok"]
    desk.take(readings[taken:])
    assert desk.request(**FINISH)["differing"] == 0
    assert desk.determined() == whole
    assert [row[ID] for row in desk.tables["events"] if row[KIND] == "note"] == ["1"]


def test_a_row_that_was_written_otherwise_is_told() -> None:
    desk = Desk()
    desk.take(merge_by_time(rows()))
    odd = {name: list(known) for name, known in desk.tables.items()}
    odd["estimates"][40] = (*odd["estimates"][40][:4], 1.5, *odd["estimates"][40][5:])
    kept = list(odd["estimates"])
    again = Desk(odd)
    again.take(merge_by_time(rows()))
    assert again.request(**FINISH)["differing"] == 1
    assert again.tables["estimates"][: len(kept)] == kept


def test_a_note_becomes_an_event_at_the_next_field_point() -> None:
    desk = Desk(now_s=12.5)
    desk.take(list(merge_by_time(rows()))[:900])
    count = len(desk.tables["estimates"])
    before = len(desk.tables["events"])
    assert desk.request(kind="note", code="remark", text="warmed up", id="x1") == {
        "ok": True, "estimates": count,
    }  # fmt: skip
    row = (before, 12.5, "note", None, "remark", "warmed up", count, "x1")
    assert desk.tables["events"][before:] == [row]


def test_a_request_sent_twice_is_written_once_also_after_a_restart() -> None:
    desk = Desk()
    for _ in range(3):
        assert desk.request(kind="process", code="died", text="reader", id="same")["ok"]
    again = Desk(desk.tables)
    assert again.request(kind="process", code="died", text="reader", id="same")["ok"]
    assert len(again.tables["events"]) == 1
    for _ in range(2):
        again.request(kind="note", code="a", text="without an id")
    assert len(again.tables["events"]) == 3


@pytest.mark.parametrize(
    "message",
    [{}, {"kind": "verdict", "code": "stable"}, {"kind": "note"}, {"kind": "note", "code": 3},
     {"kind": None, "code": "x"}, {"kind": ["note"], "code": "x"}, {"code": "finish"}],
)  # fmt: skip
def test_what_is_no_request_is_refused(message: dict[str, Any]) -> None:
    desk = Desk()
    reply = desk.request(**message)
    assert reply["ok"] is False
    assert "unknown request" in reply["error"]
    assert desk.tables == {"estimates": [], "events": []}


@pytest.mark.parametrize(("text", "kept"), [(None, None), ("", None), ("x" * 900, "x" * 500),
                                            ("a\nb", "a\\nb"), (17, "17")])  # fmt: skip
def test_texts_that_people_send(text: object, kept: str | None) -> None:
    desk = Desk()
    assert desk.request(kind="note", code="c", text=text, id=5)["ok"]
    assert desk.tables["events"][0][5] == kept
    assert desk.tables["events"][0][ID] == "5"


def test_finish_catches_up_first(whole: dict[str, list[Row]]) -> None:
    desk = Desk()
    readings = list(merge_by_time(rows()))
    desk.take(readings[:500])
    reply = desk.service.request(dict(FINISH), lambda: desk.take(readings[500:]))
    assert reply["estimates"] == len(whole["estimates"])
    assert desk.tables == whole
    assert desk.request(**FINISH) == reply


# ---- the loop, with real journals and sockets ----


class LiveBench:
    """A run that goes on, and the publishers of its readers."""

    def __init__(self, folder: Path) -> None:
        tables = [*READERS.values(), ESTIMATES, EVENTS]
        self.run: RunFolder = create_run(rig(), CONFIG, tables, folder)
        endpoints = free_endpoints([table.stream for table in tables])
        self.live = self.run.write_live(endpoints, free_address())
        self._stack = ExitStack()
        self._publishers = {}
        for name, table in READERS.items():
            journal = self._stack.enter_context(Journal(self.run.journal_path(table), table))
            endpoint = endpoints[stream_of(name)]
            self._publishers[name] = self._stack.enter_context(
                Publisher(self.run.run_id, table, journal, endpoint)
            )

    def publish(self, readings: Iterable[Reading]) -> None:
        """As the readers do."""
        for reading in readings:
            seq = self._publishers[reading.reader].publish(*reading.cells())
            assert seq == reading.seq

    def finish(self) -> dict[str, Any]:
        """Have everything worked up."""
        return ask(self.live.requests, {**FINISH, "id": "end"}, 20.0)

    def tables(self) -> dict[str, list[Row]]:
        """What the service has written."""
        return {
            "estimates": list(self.run.rows(ESTIMATES)),
            "events": list(self.run.rows(EVENTS)),
        }

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *error: object) -> None:
        self._stack.close()


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[LiveBench]:
    """A live run without its estimator."""
    with LiveBench(tmp_path) as one:
        yield one


class InThread:
    """The loop in a thread of its own. ``ended``: whether it came to its end in order."""

    def __init__(self, bench: LiveBench) -> None:
        self.stop = Stop()
        self.ended = False
        self._bench = bench
        self._thread = threading.Thread(target=self._run)

    def _run(self) -> None:
        run_service(self._bench.run, self._bench.live, lambda: not self.stop.requested)
        self.ended = True

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(self, *error: object) -> None:
        self.stop.requested = True
        self._thread.join(20)
        assert not self._thread.is_alive()


def test_the_loop_takes_published_rows_and_publishes_estimates(
    bench: LiveBench, whole: dict[str, list[Row]], wait_for: Callable[..., None]
) -> None:
    readings = list(merge_by_time(rows()))
    bench.publish(readings[:400])  # before it is there
    streams = {"estimates": ESTIMATES, "events": EVENTS}
    endpoints = {name: bench.live.endpoints[name] for name in streams}
    heard: dict[str, list[Row]] = {"estimates": [], "events": []}
    with InThread(bench) as loop, Subscriber(bench.run.run_id, endpoints, streams) as subscriber:
        bench.publish(readings[400:])

        def listen(until: int) -> bool:
            for stream, row in subscriber.receive(0.05):
                heard[stream].append(row)
            return len(heard["estimates"]) >= until

        count = len(whole["estimates"])
        wait_for(lambda: listen(count - 20), "almost all estimates")
        note = {"kind": "note", "code": "n", "text": "t", "id": "1"}
        assert ask(bench.live.requests, note, 20.0)["ok"]
        assert bench.finish() == {"ok": True, "estimates": count, "differing": 0}
        wait_for(lambda: listen(count), "all estimates")
    assert loop.ended
    assert heard["estimates"] == whole["estimates"] == bench.tables()["estimates"]
    events = bench.tables()["events"]
    assert [row[1:] for row in events if row[KIND] in DETERMINED] == [
        row[1:] for row in whole["events"]
    ]
    assert [row[ID] for row in events if row[KIND] == "note"] == ["1"]


def test_started_again_it_writes_nothing_twice(
    bench: LiveBench, whole: dict[str, list[Row]]
) -> None:
    bench.publish(merge_by_time(rows()))
    for _ in range(2):
        with InThread(bench):
            assert bench.finish()["differing"] == 0
    assert bench.tables() == whole


def process(run: Path, *words: str) -> subprocess.Popen[str]:
    """The service as the supervisor starts it."""
    line = [sys.executable, "-m", "analyse.service", str(run), *words]
    return subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def test_a_killed_process_loses_nothing(
    bench: LiveBench, whole: dict[str, list[Row]], wait_for: Callable[..., None]
) -> None:
    readings = list(merge_by_time(rows()))
    with process(bench.run.path, "--parent", str(os.getpid())) as first:
        assert first.stdout is not None
        assert first.stdout.readline() == "ready\n"
        bench.publish(readings[:700])
        path = bench.run.journal_path(ESTIMATES)
        wait_for(lambda: path.read_bytes().count(b"\n") > 60, "some estimates")
        first.kill()
    with process(bench.run.path, "--parent", str(os.getpid())) as second:
        bench.publish(readings[700:])
        assert second.stdout is not None
        assert second.stdout.readline() == "ready\n"
        assert bench.finish()["differing"] == 0
        second.send_signal(signal.SIGINT)  # is the supervisor's
        second.send_signal(signal.SIGTERM)
        assert second.wait(20) == 0
        assert second.stderr is not None
        assert second.stderr.read() == ""
    assert bench.tables() == whole


def test_a_process_whose_parent_has_gone_ends(bench: LiveBench) -> None:
    with process(bench.run.path, "--parent", "1") as one:
        assert one.wait(40) == 0


def test_refuses_what_is_no_live_run(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(Stop, "install", lambda self: None)
    assert main([str(tmp_path / "nothing")]) == 1
    assert capsys.readouterr().err.startswith("estimator: ")
    run = create_run(rig(), CONFIG, [*READERS.values(), ESTIMATES, EVENTS], tmp_path)
    assert main([str(run.path)]) == 1
    assert "rampside replay" in capsys.readouterr().err


def test_an_address_that_is_taken_is_one_sentence(
    bench: LiveBench, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(Stop, "install", lambda self: None)
    endpoint = bench.live.endpoints["estimates"]
    with (
        Journal(bench.run.path / "other.csv", ESTIMATES) as journal,
        Publisher("other", ESTIMATES, journal, endpoint),
    ):
        assert main([str(bench.run.path)]) == 1
    (sentence,) = capsys.readouterr().err.splitlines()
    assert sentence.startswith("estimator: tcp://127.0.0.1:")
