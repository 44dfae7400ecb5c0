"""Where the rows of one reader go in a live run, whichever process has them."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager

from acquire.bus import Publisher
from acquire.clock import RunClock
from acquire.errors import RunError
from acquire.journal import Journal
from acquire.readings import stream_of
from acquire.run_folder import LiveRun, RunFolder
from acquire.tables import Table


def live_run_for(run: RunFolder, reader: str) -> LiveRun:
    """The run as it is live. Raises RunError if it does not wait for rows of that reader."""
    live = run.live()
    if live is None or stream_of(reader) not in live.endpoints:
        raise RunError(f"{run.path}: does not wait for {reader!r}; start it by rampside watch.")
    return live


@contextmanager
def reader_output(
    run: RunFolder, live: LiveRun, table: Table, complain: Callable[[str], None]
) -> Iterator[Publisher]:
    """The publisher of a reader's rows, with its journal open meanwhile.

    Raises JournalError or BusError if another process has them, RunError if the run has been
    closed before its journal was ours; says what was cut away.
    """
    with ExitStack() as stack:
        journal = stack.enter_context(Journal(run.journal_path(table), table))
        if run.live() is None:
            raise RunError(f"{run.path}: has been closed meanwhile; start a new run.")
        if journal.torn:
            complain(f"{journal.torn} bytes of a torn last line were cut away")
        publisher = Publisher(
            run.run_id,
            table,
            journal,
            live.endpoints[table.stream],
            started_utc=run.started_utc,
            now_s=RunClock(live.monotonic_start).now_s,
            tell=complain,
        )
        yield stack.enter_context(publisher)
