"""Closing a run that ended badly: its ``live.json`` is still there, and nobody who would remove it.

Torn lines are cut away, the estimates are completed out of the readings, what happened is written to
``events.csv``, and ``live.json`` is removed, last of all. Broken off anywhere, it can be done again.

All journals of the run are locked meanwhile, so it is never done while a process of the run lives,
nor by two programs at once. As a process of its own, for folders of runs that need not be waited for::

    python -m dashboard.bad_end RUN_FOLDER... [--parent PID]
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, suppress
from dataclasses import dataclass
from pathlib import Path

from acquire.child_process import Child
from acquire.clock import utc_now_text
from acquire.errors import JournalError, RampsideError, RunError
from acquire.hold.record import left_open
from acquire.journal import IN_USE, Journal, read_rows
from acquire.readings import Reading, stream_of
from acquire.run_folder import LiveRun, RunFolder, open_run
from acquire.tables import Row
from acquire.unnoted import unnoted_settings
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.row_maker import DETERMINED, RowMaker
from analyse.service import KIND, Output, Service
from dashboard.replay import logged_readings
from dashboard.streams import run_tables

LAST_PROCESSES_S = 3.0
WRITERS = {"acquire.reader", "acquire.relay", "analyse.service", "dashboard.bad_end"}
ENDED_BADLY = "ended_badly"
"""Code of the event (of kind ``run``) that marks such a run."""
FINISHED_LATER = "finished_later"
"""The same for a run that its watch ended in order, but without the last estimates."""


def close_if_ended_badly(
    run: RunFolder, by: str, wanted: Callable[[], bool] = lambda: True
) -> str:
    """Close the run if it ended badly; ``by`` names who does it.

    Returns what was done, or why it could not be done, in sentences for a person; empty if there
    was nothing to do. ``wanted`` may say that it is to be broken off. Raises no RampsideError:
    what can't be closed can still be looked at.
    """
    try:
        live = run.live()
        if live is None or live.alive:
            return ""
        told = _patiently(_Closing(run, live, by, wanted).close)
    except RampsideError as error:
        in_use = isinstance(error, JournalError) and error.reason == IN_USE
        who = f" {_processes_of(run)}" if in_use else ""
        return f"{run.run_id} ended badly and was left as it is: {error}{who}"
    how = "was left unfinished" if live.unfinished else "ended badly"
    return "" if not told else f"{run.run_id} {how}. {' '.join(told)}"


def _processes_of(run: RunFolder) -> str:
    """Who still writes a run, or was stopped in it, as far as the system tells."""
    found = []
    for path in sorted(Path("/proc").glob("[0-9]*/cmdline")):
        with suppress(OSError):
            words = path.read_bytes().decode(errors="replace").split("\0")
            for module in WRITERS & set(words):
                what = words[words.index(module) :]
                if str(run.path) in what and path.parent.name != str(os.getpid()):
                    name = " ".join(word for word in (module, *what[2:3]) if word[:2] != "--")
                    found.append(f"{path.parent.name} ({name})")
    return f"Still there: process {', '.join(found)}." if found else ""


def complete(run: RunFolder, live: LiveRun, within_s: float) -> bool:
    """Complete and close a run without marking it, for whoever watched it, all processes of it
    having ended. False if that could not be done in so many seconds; it can be closed later."""
    deadline = time.monotonic() + within_s
    try:
        _Closing(run, live, "", lambda: time.monotonic() < deadline, marked=False).close()
    except RampsideError:
        return False
    return True


def _patiently(close: Callable[[], list[str]]) -> list[str]:
    """Processes of the run that see only now that their supervisor has gone need a moment."""
    deadline = time.monotonic() + LAST_PROCESSES_S
    while True:
        try:
            return close()
        except JournalError as error:
            if error.reason != IN_USE or time.monotonic() > deadline:
                raise
            time.sleep(0.1)


@dataclass
class _Closing:
    """One run that is being closed."""

    run: RunFolder
    live: LiveRun
    by: str
    wanted: Callable[[], bool]
    marked: bool = True

    def close(self) -> list[str]:
        """Do it; what was done, in sentences. Empty if somebody else has done it meanwhile."""
        tables = {
            stream: table
            for stream, table in run_tables(self.run.rig).items()
            if stream in self.live.endpoints
        }
        with ExitStack() as stack:
            journals = {
                stream: stack.enter_context(Journal(self.run.journal_path(table), table))
                for stream, table in tables.items()
            }
            if self.run.live() is None:
                return []
            torn = [
                f"{tables[stream].path}: {journal.torn} bytes of a torn last line were cut away."
                for stream, journal in journals.items()
                if journal.torn
            ]
            told = torn
            if {ESTIMATES.stream, EVENTS.stream} <= journals.keys():
                told = self._complete(journals[ESTIMATES.stream], journals[EVENTS.stream], torn)
            for reader in self.run.rig.readers:
                if stream_of(reader.name) in journals:
                    for entry in unnoted_settings(self.run, reader):
                        self.run.note_instrument(entry)
            for journal in journals.values():
                journal.sync()
            self.run.end_live()
        return told or ["It is closed now."]

    def _complete(self, estimates: Journal, events: Journal, torn: list[str]) -> list[str]:
        """Complete both tables and mark the run in its events; what was done, in sentences."""
        written_events = list(self.run.rows(EVENTS))
        outputs = (
            Output(self.run.rows(ESTIMATES), lambda row: _append(estimates, row), ESTIMATES),
            Output(iter(written_events), lambda row: _append(events, row), EVENTS, _determined),
        )
        times = [float(row[1] or 0.0) for row in written_events]
        last_s = [max(times, default=0.0)]
        service = Service(
            RowMaker(self.run.rig),
            *outputs,
            lambda row: _append(events, row),
            lambda: last_s[0],
            written_events,
        )

        def catch_up() -> None:
            for reading in self._readings():
                last_s[0] = max(last_s[0], reading.time_s)
                service.take(reading)
                if service.behind:
                    return

        before = estimates.next_seq
        _obeyed(service.request({"kind": "run", "code": "finish"}, catch_up))
        if not self.marked:
            return torn
        added = estimates.next_seq - before
        told = [
            self._what_happened(added),
            *(("torn_line", text) for text in torn),
            *self._power_cut(),
            *self._hold(),
            *_taken_back(service, outputs, estimates, events),
        ]
        for code, text in told:
            what = text if code == "torn_line" else code  # of these there may be several
            key = f"{what} {self.live.pid} {self.live.monotonic_start!r}"  # once, also if done twice
            message = {"kind": "run", "code": code, "text": text, "id": key}
            _obeyed(service.request(message, lambda: None))
        return [text for _, text in told]

    def _readings(self) -> Iterator[Reading]:
        for reading in logged_readings(self.run, RowMaker(self.run.rig).readers):
            if not self.wanted():
                raise RunError("closing it was broken off; the next rampside does it.")
            yield reading

    def _what_happened(self, added: int) -> tuple[str, str]:
        done = (
            f"closed by {self.by}, {utc_now_text()[:19]} UTC, which added {added} estimates out of "
            "the readings."
        )
        if self.live.unfinished:
            return FINISHED_LATER, f"The watch ended before all estimates were made; {done}"
        who = f"The process that watched the run (number {self.live.pid})"
        return ENDED_BADLY, f"{who} was gone without ending it; {done}"

    def _power_cut(self) -> Iterator[tuple[str, str]]:
        if self.live.machine_restarted:
            yield "power_cut", (
                "The machine was started anew meanwhile: if the power was cut, the last second "
                "of readings before that may be missing."
            )

    def _hold(self) -> Iterator[tuple[str, str]]:
        if told := left_open(self.run.path):
            yield "hold_left_open", told


def _taken_back(
    service: Service, outputs: Sequence[Output], estimates: Journal, events: Journal
) -> Iterator[tuple[str, str]]:
    """Cut back what rests on readings that are not there: after a power cut the estimates may have
    reached the disk before the readings behind them did. What people and processes said stays."""
    if service.differing:
        yield "differing", (
            f"{service.differing} rows come out otherwise than they were written, perhaps by "
            "another version of rampside; they were left as they are."
        )
        return
    lost_estimates, lost_events = (output.left() for output in outputs)
    if not lost_estimates and not lost_events:
        return
    if lost_estimates:
        estimates.cut_back(estimates.next_seq - lost_estimates)
    if lost_events:
        _cut_back_events(events, lost_events)
    yield "taken_back", (
        f"{lost_estimates} estimates and {lost_events} events rested on readings that were lost; "
        "they are kept beside, in estimates.csv.cut and events.csv.cut."
    )


def _cut_back_events(events: Journal, count: int) -> None:
    rows = list(read_rows(events.path, events.table))
    first = [row for row in rows if _determined(row)][-count][0]
    assert isinstance(first, int)
    events.cut_back(first)
    for row in rows[first:]:
        if not _determined(row):
            events.append(row[1:])


def _determined(row: Row) -> bool:
    return row[KIND] in DETERMINED


def _append(journal: Journal, row: Row) -> None:
    journal.append(row)


def _obeyed(reply: dict[str, object]) -> None:
    if not reply["ok"]:
        raise JournalError(str(reply["error"]))


def main(arguments: Sequence[str] | None = None) -> int:
    """The process. Says what it did with each run; exit status 0."""
    parser = argparse.ArgumentParser(prog="python -m dashboard.bad_end", description=__doc__)
    parser.add_argument("run_folders", nargs="+", type=Path)
    parser.add_argument("--by", default="rampside")
    parser.add_argument("--parent", type=int, metavar="PID", help="end when this process has died")
    options = parser.parse_args(arguments)
    child = Child("earlier run", options.parent)
    os.nice(10)  # the run that goes on comes first

    def work() -> None:
        for path in options.run_folders:
            if child.wanted():
                told = close_if_ended_badly(open_run(path), options.by, child.wanted)
                if told:
                    child.complain(told)

    return child.exit_status(work)


if __name__ == "__main__":
    sys.exit(main())
