"""The one thread that listens for the whole server and fills the store.

A run that has ended is read from its folder. One that goes on is read from its folder first and
then followed on the bus; when it ends, the rest is taken from the folder. Whatever fails is
counted, shown on the page and tried again.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from pathlib import Path

from acquire.bus import Subscriber
from acquire.cells import LONGEST_LINE, RowCodec
from acquire.clock import RunClock
from acquire.errors import RampsideError, RunError
from acquire.run_folder import LiveRun, RunFolder
from acquire.tables import Row, Table
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard.page.store import RunStore
from dashboard.streams import run_tables

LOOK_S = 0.2
FOLDER_EVERY_S = 1.0
AFTER_FAILURE_S = 2.0


class Feed:
    """Fills ``store`` from a run, in a thread of its own, until it is closed."""

    def __init__(self, run: RunFolder, store: RunStore) -> None:
        self._run = run
        self._store = store
        self._tables = run_tables(run.rig)
        self._identities_at = 0
        self._closing = threading.Event()
        self._thread = threading.Thread(target=self._go_on, name="feed", daemon=True)

    def start(self) -> None:
        """Begin."""
        self._thread.start()

    def close(self, within_s: float = 1.0) -> None:
        """End the thread."""
        self._closing.set()
        self._thread.join(within_s)

    def _go_on(self) -> None:
        done = False
        while not done and not self._closing.is_set():
            try:
                self._read_folder()
                done = self._follow()
            except Exception as error:  # noqa: BLE001  shown, counted, tried again
                told = str(error) if isinstance(error, RampsideError) else repr(error)
                self._store.fail(f"Following the run: {told}")
                self._closing.wait(AFTER_FAILURE_S)

    def _follow(self) -> bool:
        """Follow a run while it goes on. True once nothing more will come."""
        live = self._run.live()
        if live is None or not live.alive:
            self._read_folder()
            self._store.begin("ended" if live is None else "crashed", None)
            return live is None or self._closing.wait(AFTER_FAILURE_S)
        self._store.begin("live", RunClock(live.monotonic_start).now_s)
        with self._subscribe(live) as subscriber:
            look_again = 0.0
            while not self._closing.is_set():
                for stream, row in subscriber.receive(LOOK_S):
                    self._store.take(stream, row)
                now = time.monotonic()
                self._store.hear(subscriber.health(), now)
                if now >= look_again:
                    look_again = now + FOLDER_EVERY_S
                    self._read_identities()
                    known = self._run.live()
                    if known is None or not known.alive:
                        return False
        return True

    def _subscribe(self, live: LiveRun) -> Subscriber:
        start = {
            stream: self._store.next_seq(stream) or (0 if stream in _WHOLE else -1)
            for stream in live.endpoints
        }
        tables = {stream: self._tables[stream] for stream in live.endpoints}
        folder = self._run.path
        return Subscriber(self._run.run_id, live.endpoints, tables, start, folder=folder)

    def _read_folder(self) -> None:
        """Take the rows that are on disk: all estimates and events, of readings the last ones."""
        for stream, table in self._tables.items():
            first = self._store.next_seq(stream)
            path = self._run.journal_path(table)
            rows = self._run.rows(table, first) if stream in _WHOLE else last_rows(path, table)
            for row in rows:
                if self._closing.is_set():
                    return
                if int(row[0] or 0) >= first:
                    self._store.take(stream, row)
        self._read_identities()

    def _read_identities(self) -> None:
        path = self._run.path / "instruments.json"
        if not path.resolve().is_relative_to(self._run.path.resolve()):
            raise RunError(f"instruments.json: is outside the run {self._run.path}.")
        changed_at = path.stat().st_mtime_ns
        if changed_at == self._identities_at:
            return
        self._identities_at = changed_at
        self._store.identify(
            {
                str(entry.get("reader")): str(entry.get("identity") or "")
                for entry in self._run.instruments()
                if isinstance(entry, dict)
            }
        )


_WHOLE = (ESTIMATES.stream, EVENTS.stream)


def last_rows(path: Path, table: Table) -> Iterator[Row]:
    """The last rows of a table, at least one if it has any, however long it is.

    Raises JournalError if they are not rows of this table, OSError if it can't be read.
    """
    with open(path, "rb") as file:
        header = len(file.readline())
        end = file.seek(0, 2)
        begin = file.seek(max(header, end - 2 * LONGEST_LINE))
        if begin > header:
            file.readline()  # the rest of a row
        lines = [line for line in file if line.endswith(b"\n") and b"\0" not in line]
    if lines:
        first = int(lines[0].partition(b",")[0])
        yield from RowCodec(table).rows_in(b"".join(lines), first)
