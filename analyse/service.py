"""The estimator as a process of a run: readings from the bus in, estimates and events out.

    python -m analyse.service RUN_FOLDER [--parent PID]

Started anew, it takes all readings from the first on, computes what it had computed before, finds
those rows in its journals already, and goes on after them: its output depends on the readers'
journals alone. A row that comes out otherwise than it was written is said loudly, never mended.

What can't be recorded is not published. It waits, and while it does no more readings are taken: the
bus keeps them in the readers' journals, so that nothing is lost and memory stays bounded.
"""

from __future__ import annotations

import faulthandler
import sys
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from typing import Any

from acquire.bus import Inbox, Publisher, Subscriber
from acquire.cells import RowCodec
from acquire.child_process import Child, child_parser
from acquire.clock import RunClock
from acquire.errors import JournalError, RowError, RunError
from acquire.journal import Journal
from acquire.readings import Reading, reading_table, stream_of
from acquire.run_folder import LiveRun, RunFolder, open_run
from acquire.tables import Row, Table
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.row_maker import DETERMINED, Record, RowMaker

LONGEST_WAIT_S = 0.1
RETRY_S = 1.0  # after a row could not be recorded
REQUEST_KINDS = ("note", "process", "run")
KIND, ID = 2, 7
"""Columns of the events table."""


class Output:
    """One table of the estimator: passes over the rows that its journal has already.

    ``determined`` tells which of the written rows follow from the readings.
    """

    def __init__(
        self,
        written: Iterator[Row],
        publish: Callable[[Row], None],
        table: Table,
        determined: Callable[[Row], bool] = lambda row: True,
    ) -> None:
        self._written = (row for row in written if determined(row))
        self._publish = publish
        self._codec = RowCodec(table)
        self._repeating = True
        self.differing = 0

    def left(self) -> int:
        """How many of the written rows did not come out again, once all have been put."""
        return sum(1 for _ in self._written) if self._repeating else 0

    def put(self, cells: Row) -> None:
        """Write a row, or check that it stands as it is."""
        if self._repeating:
            known = next(self._written, None)
            if known is not None:
                if known[1:] != self._codec.canonical(cells):
                    self.differing += 1
                return
            self._repeating = False
        self._publish(cells)


class Service:
    """Decides what the estimator does with each message; knows no sockets.

    Parameters
    ----------
    publish_event : takes the cells of an event after seq; raises JournalError.
    now_s : the run's clock, in seconds.
    written_events : the rows that stand in the table of events already.
    complain : takes a sentence for a person who looks at the terminal.
    """

    def __init__(
        self,
        maker: RowMaker,
        estimates: Output,
        events: Output,
        publish_event: Callable[[Row], None],
        now_s: Callable[[], float],
        written_events: Sequence[Row] = (),
        complain: Callable[[str], None] = lambda text: None,
    ) -> None:
        self._maker = maker
        self._outputs = {"estimates": estimates, "events": events}
        self._publish_event = publish_event
        self._now_s = now_s
        self._complain = complain
        self._waiting: deque[Record] = deque()
        self._retry_at = float("-inf")
        self._why = ""  # why rows wait; empty while they are recorded
        self._next = dict.fromkeys(maker.readers, 0)
        self._seen_ids = {row[ID] for row in written_events if row[ID] is not None}
        self._estimates = 0

    @property
    def next_seq(self) -> dict[str, int]:
        """By reader: the number of the next row wanted."""
        return dict(self._next)

    @property
    def behind(self) -> bool:
        """Whether there are rows that could not be recorded yet; nothing is to be taken then."""
        return bool(self._waiting)

    @property
    def differing(self) -> int:
        """How many rows came out otherwise than they had been written."""
        return sum(output.differing for output in self._outputs.values())

    def take(self, reading: Reading) -> None:
        """Take a reader's row; one that was taken already is passed over."""
        if reading.seq != self._next.get(reading.reader):
            return
        self._next[reading.reader] += 1
        self._waiting.extend(self._maker.take(reading))
        self._record()

    def step(self) -> None:
        """Record what waits, if it is time to try again."""
        if self._now_s() >= self._retry_at:
            self._record()

    def finish(self) -> None:
        """No more readings come: work up what still waits for them."""
        self._waiting.extend(self._maker.finish())
        self._record()

    def _record(self) -> None:
        while self._waiting:
            record = self._waiting[0]
            try:
                self._outputs[record.stream].put(record.cells)
            except RowError:
                raise  # no disk will ever take it: a fault of ours
            except JournalError as error:
                self._wait(error)
                return
            self._waiting.popleft()
            self._estimates += record.stream == "estimates"
        if self._why:
            self._why = ""
            self._complain("estimates and events are recorded again")

    def _wait(self, error: JournalError) -> None:
        self._retry_at = self._now_s() + RETRY_S
        if not self._why:
            self._complain(f"nothing can be recorded, so nothing is published; it waits: {error}")
        self._why = str(error)

    def request(self, message: dict[str, Any], catch_up: Callable[[], None]) -> dict[str, Any]:
        """Answer a request; ``catch_up`` takes everything that the readers' journals have."""
        kind, code, text = (message.get(key) for key in ("kind", "code", "text"))
        if kind not in REQUEST_KINDS or not isinstance(code, str):
            return {"ok": False, "error": f"unknown request {kind!r}"}
        if kind == "run" and code == "finish":
            return self._finished(catch_up)
        key = str(message.get("id") or "") or None
        if key is None or key not in self._seen_ids:
            shown = str(text or "")[:500]
            try:
                self._publish_event((self._now_s(), kind, None, code, shown, self._estimates, key))
            except RowError:
                raise
            except JournalError as error:
                return {"ok": False, "error": str(error), "again": True}
            self._seen_ids.add(key)
        return {"ok": True, "estimates": self._estimates}

    def _finished(self, catch_up: Callable[[], None]) -> dict[str, Any]:
        catch_up()
        if not self.behind:
            self.finish()
        if self.behind:
            return {"ok": False, "error": self._why, "again": True}
        return {"ok": True, "estimates": self._estimates, "differing": self.differing}


def run_service(
    run: RunFolder,
    live: LiveRun,
    wanted: Callable[[], bool],
    complain: Callable[[str], None] = lambda text: None,
) -> None:
    """The loop around :class:`Service`, until it is not ``wanted`` any more."""
    tables = {name: _table_of(run, name) for name in RowMaker(run.rig).readers}
    streams = {stream_of(name): name for name in tables}
    clock = RunClock(live.monotonic_start)
    with (
        Journal(run.journal_path(ESTIMATES), ESTIMATES) as estimate_journal,
        Journal(run.journal_path(EVENTS), EVENTS) as event_journal,
        Publisher(run.run_id, ESTIMATES, estimate_journal, live.endpoints["estimates"]) as numbers,
        Publisher(run.run_id, EVENTS, event_journal, live.endpoints["events"]) as events,
        Inbox(live.requests) as inbox,
    ):
        if run.live() is None:
            raise RunError(f"{run.path}: has been closed meanwhile; start a new run.")

        def publish_estimate(cells: Row) -> None:
            numbers.publish(*cells)

        def publish_event(cells: Row) -> None:
            events.publish(*cells)

        service = Service(
            RowMaker(run.rig),
            Output(run.rows(ESTIMATES), publish_estimate, ESTIMATES),
            Output(run.rows(EVENTS), publish_event, EVENTS, lambda row: row[KIND] in DETERMINED),
            publish_event,
            clock.now_s,
            list(run.rows(EVENTS)),
            complain,
        )

        def catch_up() -> None:
            for name, first in service.next_seq.items():
                for row in run.rows(tables[name], first):
                    if service.behind or not wanted():
                        return  # the rest comes over the bus, when there is room
                    service.take(Reading.from_row(name, row))

        catch_up()
        print("ready", flush=True)
        with Subscriber(
            run.run_id,
            {stream: live.endpoints[stream] for stream in streams},
            {stream: tables[name] for stream, name in streams.items()},
            {stream: service.next_seq[name] for stream, name in streams.items()},
        ) as subscriber:
            while wanted():
                wait_s = 0.0
                if service.behind:
                    wait_s = LONGEST_WAIT_S  # what the bus loses meanwhile is asked for again
                    service.step()
                else:
                    for stream, row in subscriber.receive(LONGEST_WAIT_S):
                        service.take(Reading.from_row(streams[stream], row))
                while (asked := inbox.receive(wait_s)) is not None:
                    message, reply = asked
                    reply(service.request(message, catch_up))


def _table_of(run: RunFolder, name: str) -> Table:
    return reading_table(name, run.rig.reader(name))


def main(arguments: Sequence[str] | None = None) -> int:
    """Entry point; 0 ended in order, 1 failed with one sentence on stderr."""
    options = child_parser("analyse.service", __doc__).parse_args(arguments)
    child = Child("estimator", options.parent)
    return child.exit_status(lambda: _serve(open_run(options.run_folder), child))


def _serve(run: RunFolder, child: Child) -> None:
    live = run.live()
    if live is None:
        raise RunError(f"{run.path}: is not live; use `rampside replay` on a finished run.")
    run_service(run, live, child.wanted, child.complain)


if __name__ == "__main__":
    faulthandler.enable()
    sys.exit(main())
