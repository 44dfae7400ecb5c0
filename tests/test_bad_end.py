"""A run that ended badly is closed and marked: once, completely, and never while it lives."""

from __future__ import annotations

import errno
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import asdict, replace
from pathlib import Path
from random import Random
from typing import Any

import pytest
from two_bars import CONFIG, rig, rows

from acquire.bus import free_address, free_endpoints
from acquire.disk import write_whole
from acquire.errors import RunError
from acquire.hold import record
from acquire.journal import Journal
from acquire.reader_output import reader_output
from acquire.readings import reading_table, stream_of
from acquire.run_folder import LiveRun, RunFolder, create_run
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.replay import RowMaker, merge_by_time, replay_readings
from analyse.service import KIND
from dashboard import bad_end, cli
from dashboard.bad_end import close_if_ended_badly
from dashboard.earlier_runs import EarlierRuns
from dashboard.page.feed import Feed
from dashboard.page.list_panel import banner_panel, head_panel
from dashboard.page.store import RunStore
from dashboard.replay import logged_readings

READERS = {reader.name: reading_table(reader.name, reader) for reader in rig().readers}
BY = "rampside replay"


@pytest.fixture(scope="module")
def gone() -> int:
    """The number of a process that has ended."""
    with subprocess.Popen([sys.executable, "-c", ""]) as process:
        process.wait()
    return process.pid


@pytest.fixture(scope="module")
def whole() -> dict[str, list[Row]]:
    """The rows without seq of both tables, as all readings make them."""
    found: dict[str, list[Row]] = {"estimates": [], "events": []}
    for one in replay_readings(RowMaker(rig()), merge_by_time(rows())):
        found[one.stream].append(one.cells)
    return found


class Crashed:
    """A run whose supervisor has gone. ``share`` of its estimates and events were written."""

    def __init__(self, folder: Path, pid: int, whole: dict[str, list[Row]], share: float) -> None:
        tables = [*READERS.values(), ESTIMATES, EVENTS]
        self.run: RunFolder = create_run(rig(), CONFIG, tables, folder)
        endpoints = free_endpoints([table.stream for table in tables])
        self.live: LiveRun = self.run.write_live(endpoints, free_address(), pid=pid)
        for name, readings in rows().items():
            self.add(READERS[name], [reading.cells() for reading in readings])
        estimates = whole["estimates"][: int(share * len(whole["estimates"]))]
        self.add(ESTIMATES, estimates)
        events = [row for row in whole["events"] if (row[5] or 0) < len(estimates)]
        self.add(EVENTS, [(0.5, "note", None, "n", "the first", 0, "id1"), *events])

    def add(self, table: Any, cells: list[Row]) -> None:
        with Journal(self.run.journal_path(table), table) as journal:
            for row in cells:
                journal.append(row)

    def tear(self, table: Any, torn: bytes) -> None:
        with open(self.run.journal_path(table), "ab") as file:
            file.write(torn)

    def be_of_another_start(self) -> None:
        """As if the machine had been started anew since."""
        import json

        told = {**asdict(self.live), "boot": "another", "pid": os.getpid()}
        write_whole(self.run.path / "live.json", json.dumps(told).encode())

    def estimates(self) -> list[Row]:
        return [row[1:] for row in self.run.rows(ESTIMATES)]

    def events(self, *kinds: str) -> list[Row]:
        return [row[1:] for row in self.run.rows(EVENTS) if row[KIND] in kinds]

    def codes(self) -> list[object]:
        return [row[3] for row in self.events("run")]

    def assert_closed_once(self, whole: dict[str, list[Row]]) -> None:
        assert self.estimates() == whole["estimates"]
        determined = self.events("verdict", "caution", "caution_over")
        assert determined == whole["events"]
        assert self.codes().count("ended_badly") == 1
        assert self.run.live() is None


@pytest.fixture
def crashed(tmp_path: Path, gone: int, whole: dict[str, list[Row]]) -> Crashed:
    """A run that was killed somewhere in its second half."""
    return Crashed(tmp_path, gone, whole, 0.6)


@pytest.mark.parametrize("share", [0.0, 0.6, 1.0])
def test_it_is_as_an_undisturbed_run_but_for_its_marks(
    tmp_path: Path, gone: int, whole: dict[str, list[Row]], share: float
) -> None:
    crashed = Crashed(tmp_path, gone, whole, share)
    told = close_if_ended_badly(crashed.run, BY)
    assert f"{crashed.run.run_id} ended badly. The process that watched the run" in told
    crashed.assert_closed_once(whole)
    (mark,) = crashed.events("run")
    added = len(whole["estimates"]) - int(share * len(whole["estimates"]))
    assert f"closed by {BY}" in str(mark[4])
    assert f"added {added} estimates" in str(mark[4])
    last_s = max(reading.time_s for readings in rows().values() for reading in readings)
    assert mark[0] == last_s
    noted = [(entry["reader"], entry["seq"]) for entry in crashed.run.instruments()]
    settings = [(n, r.seq) for n in READERS for r in rows()[n] if r.status == "settings"]
    assert noted == settings, "what its readers had not come to note"
    assert close_if_ended_badly(crashed.run, BY) == ""
    crashed.assert_closed_once(whole)


def test_a_run_whose_watch_had_no_time_for_the_last_estimates_did_not_end_badly(
    tmp_path: Path, whole: dict[str, list[Row]]
) -> None:
    left = Crashed(tmp_path, os.getpid(), whole, 0.6)
    left.run.leave_unfinished(left.live)
    told = close_if_ended_badly(left.run, BY)
    assert f"{left.run.run_id} was left unfinished. The watch ended before all" in told
    assert left.codes() == ["finished_later"]
    assert left.estimates() == whole["estimates"]
    assert left.run.live() is None


def test_torn_lines_are_cut_away_and_told(crashed: Crashed, whole: dict[str, list[Row]]) -> None:
    crashed.tear(READERS["magnet"], b"4711,12.5,0.0")
    crashed.tear(ESTIMATES, b"9")
    told = close_if_ended_badly(crashed.run, BY)
    assert "readings/magnet.csv: 13 bytes of a torn last line were cut away." in told
    crashed.assert_closed_once(whole)
    assert crashed.codes() == ["ended_badly", "torn_line", "torn_line"]


def test_a_run_that_goes_on_is_left_alone(
    tmp_path: Path, whole: dict[str, list[Row]]
) -> None:
    going_on = Crashed(tmp_path, os.getpid(), whole, 0.5)
    assert close_if_ended_badly(going_on.run, BY) == ""
    assert going_on.run.live() == going_on.live
    assert going_on.codes() == []


@pytest.mark.parametrize("table", [READERS["magnet"], EVENTS])
def test_never_while_one_of_its_processes_lives(
    crashed: Crashed, table: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(bad_end, "LAST_PROCESSES_S", 0.0)
    with Journal(crashed.run.journal_path(table), table):
        told = close_if_ended_badly(crashed.run, BY)
        assert "was left as it is" in told
        assert "somebody else is writing it" in told
        assert crashed.run.live() is not None
        assert crashed.codes() == []


def test_a_process_of_it_that_was_stopped_is_named(
    crashed: Crashed, monkeypatch: pytest.MonkeyPatch, wait_for: Any
) -> None:
    """It could not notice that its supervisor has gone."""
    monkeypatch.setattr(bad_end, "LAST_PROCESSES_S", 0.0)
    line = [sys.executable, "-m", "acquire.reader", str(crashed.run.path), "magnet"]
    with subprocess.Popen(line, stderr=subprocess.DEVNULL) as reader:
        try:
            path = crashed.run.journal_path(READERS["magnet"])
            size = path.stat().st_size
            wait_for(lambda: path.stat().st_size > size, "it has begun", 60.0)
            reader.send_signal(signal.SIGSTOP)
            told = close_if_ended_badly(crashed.run, BY)
            assert f"Still there: process {reader.pid} (acquire.reader magnet)." in told
        finally:
            reader.kill()


def test_two_programs_at_once_close_it_once(
    crashed: Crashed, whole: dict[str, list[Row]]
) -> None:
    line = [sys.executable, "-m", "dashboard.bad_end", str(crashed.run.path)]
    closers = [subprocess.Popen(line, stderr=subprocess.PIPE, text=True) for _ in range(2)]
    said = [closer.communicate(timeout=60)[1] for closer in closers]
    assert [closer.returncode for closer in closers] == [0, 0]
    assert sum("added" in text for text in said) == 1
    crashed.assert_closed_once(whole)


def test_broken_off_it_is_made_good_later(crashed: Crashed, whole: dict[str, list[Row]]) -> None:
    left = iter([True] * 700)
    told = close_if_ended_badly(crashed.run, BY, lambda: next(left, False))
    assert "broken off" in told
    assert crashed.run.live() is not None
    close_if_ended_badly(crashed.run, BY)
    crashed.assert_closed_once(whole)


def test_killed_between_the_mark_and_the_end_it_marks_no_second_time(
    crashed: Crashed, whole: dict[str, list[Row]], monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as patch:
        patch.setattr(RunFolder, "end_live", lambda self: (_ for _ in ()).throw(KeyboardInterrupt))
        with suppress(KeyboardInterrupt):
            close_if_ended_badly(crashed.run, BY)
    assert crashed.codes() == ["ended_badly"]
    close_if_ended_badly(crashed.run, BY)
    crashed.assert_closed_once(whole)


def test_a_power_cut_is_told(crashed: Crashed, whole: dict[str, list[Row]]) -> None:
    crashed.be_of_another_start()
    told = close_if_ended_badly(crashed.run, BY)
    assert "the last second of readings before that may be missing" in told
    crashed.assert_closed_once(whole)
    assert crashed.codes() == ["ended_badly", "power_cut"]


@pytest.mark.parametrize(("sent", "words"), [(False, "is not known whether"), (True, "had been")])
def test_a_command_to_the_magnet_supply_is_told(
    crashed: Crashed, whole: dict[str, list[Row]], sent: bool, words: str
) -> None:
    record.claim(crashed.run.path, {})
    if sent:
        record.conclude(crashed.run.path, {})
    assert words in close_if_ended_badly(crashed.run, BY)
    crashed.assert_closed_once(whole)
    assert crashed.codes() == ["ended_badly", "hold_left_open"]


def test_estimates_whose_readings_a_power_cut_has_taken_are_taken_back(
    tmp_path: Path, gone: int, whole: dict[str, list[Row]]
) -> None:
    crashed = Crashed(tmp_path, gone, whole, 1.0)
    crashed.be_of_another_start()
    crashed.add(EVENTS, [(9.0, "note", None, "n", "the last", 0, "id2")])
    kept = {name: readings[: len(readings) // 3] for name, readings in rows().items()}
    for name, readings in kept.items():
        with Journal(crashed.run.journal_path(READERS[name]), READERS[name]) as journal:
            journal.cut_back(len(readings))
    less: dict[str, list[Row]] = {"estimates": [], "events": []}
    for one in replay_readings(RowMaker(rig()), merge_by_time(kept)):
        less[one.stream].append(one.cells)
    lost = len(whole["estimates"]) - len(less["estimates"])
    assert lost > 0
    told = close_if_ended_badly(crashed.run, BY)
    assert f"{lost} estimates and " in told
    crashed.assert_closed_once(less)
    assert crashed.codes() == ["ended_badly", "power_cut", "taken_back"]
    assert [row[4] for row in crashed.events("note")] == ["the first", "the last"]
    cut = (crashed.run.path / "estimates.csv.cut").read_bytes()
    assert cut.count(b"\n") == lost


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_whatever_a_power_cut_leaves_of_each_file_comes_out_whole(
    tmp_path: Path, gone: int, whole: dict[str, list[Row]], seed: int
) -> None:
    """Each file ends anywhere; some have their length but not their content on disk."""
    random = Random(seed)
    crashed = Crashed(tmp_path, gone, whole, random.random())
    for table in (*READERS.values(), ESTIMATES, EVENTS):
        path = crashed.run.journal_path(table)
        data = path.read_bytes()
        size = random.randrange(data.index(b"\n") + 1, len(data))
        path.write_bytes(data[:size] + bytes(random.choice([0, 0, 700])))
    crashed.be_of_another_start()
    close_if_ended_badly(crashed.run, BY)
    left: dict[str, list[Row]] = {"estimates": [], "events": []}
    for one in replay_readings(RowMaker(rig()), logged_readings(crashed.run, READERS)):
        left[one.stream].append(one.cells)
    crashed.assert_closed_once(left)


def test_rows_that_come_out_otherwise_are_told_and_left(
    crashed: Crashed, whole: dict[str, list[Row]]
) -> None:
    crashed.add(ESTIMATES, [(*whole["estimates"][-1][:2], 77.0, *whole["estimates"][-1][3:])])
    told = close_if_ended_badly(crashed.run, BY)
    assert "1 rows come out otherwise" in told
    assert crashed.run.live() is None


def test_a_folder_that_can_not_be_written_is_told_and_still_replayed(
    crashed: Crashed, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """A user who may do everything can't be refused by the file's mode, so the system is played."""
    opened = os.open

    def read_only(path: Any, flags: int, *rest: Any, **keys: Any) -> int:
        if flags & os.O_ACCMODE != os.O_RDONLY:
            raise OSError(errno.EROFS, "Read-only file system", str(path))
        return opened(path, flags, *rest, **keys)

    monkeypatch.setattr(os, "open", read_only)
    assert cli.main(["replay", str(crashed.run.path)]) == 0
    said = capsys.readouterr()
    assert "ended badly and was left as it is" in said.err
    assert "Read-only file system" in said.err
    assert "estimates in the run's folder came out again to the last bit, and" in said.err
    assert "left: " in said.out
    assert crashed.run.live() is not None


def test_a_run_of_one_reader_alone_is_closed_too(tmp_path: Path, gone: int) -> None:
    table = READERS["magnet"]
    run = create_run(rig(), CONFIG, [table], tmp_path)
    run.write_live(free_endpoints([table.stream]), "", pid=gone)
    with open(run.journal_path(table), "ab") as file:
        file.write(b"0,1.0,to")
    told = close_if_ended_badly(run, "rampside read")
    assert "readings/magnet.csv: 8 bytes of a torn last line were cut away." in told
    assert run.live() is None
    assert not run.journal_path(EVENTS).exists()
    assert list(run.rows(table)) == []


def test_a_reader_that_comes_too_late_adds_nothing(crashed: Crashed) -> None:
    close_if_ended_badly(crashed.run, BY)
    table = READERS["magnet"]
    with (
        pytest.raises(RunError, match="has been closed meanwhile"),
        reader_output(crashed.run, crashed.live, table, lambda text: None),
    ):
        pass
    assert stream_of("magnet") in crashed.live.endpoints


def test_earlier_runs_are_closed_beside_the_one_that_goes_on(
    crashed: Crashed, whole: dict[str, list[Row]], tmp_path: Path, wait_for: Any
) -> None:
    going_on = Crashed(tmp_path, os.getpid(), whole, 0.5)
    (tmp_path / "no run").mkdir()
    (tmp_path / "no run" / "live.json").write_text("{}")
    lines: list[str] = []
    with EarlierRuns(tmp_path, "rampside watch", lines.append):
        wait_for(lambda: lines and crashed.run.live() is None, "it is closed", 60.0)
    crashed.assert_closed_once(whole)
    assert len(lines) == 1
    assert lines[0].startswith(f"earlier run: {crashed.run.run_id} ended badly.")
    assert going_on.run.live() == going_on.live


@pytest.fixture
def store(crashed: Crashed, wait_for: Any) -> Iterator[RunStore]:
    """What the page knows of the run after it was closed."""
    close_if_ended_badly(crashed.run, "rampside page")
    store = RunStore(crashed.run.run_id, crashed.run.rig)
    feed = Feed(crashed.run, store)
    feed.start()
    wait_for(lambda: store.run().phase == "ended", "all is read")
    yield store
    feed.close()


def test_the_page_shows_it(store: RunStore) -> None:
    facts = store.run()
    assert "This run ended badly. The process that watched the run" in str(banner_panel(facts))
    assert "closed by rampside page" in str(banner_panel(facts))
    assert "ended badly after" in str(head_panel("run", rig(), facts))
    assert "ended badly" not in str(banner_panel(replace(facts, bad_end="")))
