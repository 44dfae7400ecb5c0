"""A relay as a process of a run::

python -m acquire.relay RUN_FOLDER READER [--parent PID]
"""

from __future__ import annotations

import faulthandler
import sys
import time
from collections.abc import Callable, Sequence
from contextlib import suppress
from typing import Any

from acquire.bus import Endpoint
from acquire.child_process import Child, child_parser
from acquire.clock import RunClock
from acquire.config.reader import ReaderSection
from acquire.errors import RunError
from acquire.reader_output import live_run_for, reader_output
from acquire.readings import reading_table, stream_of
from acquire.relay.clock_words import ClockWords, tolerable_s
from acquire.relay.clocks import Difference
from acquire.relay.far_side import FarSide, endpoint_elsewhere
from acquire.relay.relaying import Relaying
from acquire.relay.translation import STATUS, Translation, standing_of
from acquire.run_folder import LiveRun, RunFolder, open_run
from acquire.stop import Stopped
from acquire.tables import Row, Table

LONGEST_WAIT_S = 0.1
LAST_ROWS_S = 0.4  # how long it may take at the end to have the last rows


def main(arguments: Sequence[str] | None = None) -> int:
    """The process. Returns its exit status: 0 ended in order, 1 failed (one sentence says why)."""
    parser = child_parser("acquire.relay", "Have a reader elsewhere on record in a run.")
    parser.add_argument("reader")
    options = parser.parse_args(arguments)
    child = Child(f"reader {options.reader}", options.parent)
    return child.exit_status(lambda: _relay(open_run(options.run_folder), options.reader, child))


def _relay(run: RunFolder, name: str, child: Child) -> None:
    section, far, live = _elsewhere(run, name)
    table = reading_table(name, section)

    def note(known: dict[str, Any]) -> None:
        run.note_instrument({"reader": name, "resource": far.publish, **known})

    with reader_output(run, live, table, child.complain) as publisher:
        width, now_s = len(section.values), RunClock(live.monotonic_start).now_s
        translation = Translation(run.started_utc, standing_of(run.rows(table)), width)
        relaying = Relaying(
            translation, run.started_utc, width, publisher.publish, note, child.complain, now_s
        )
        relaying.note_later(_unnoted(run, table, name))
        words = ClockWords(tolerable_s(run.rig, section), child.complain)

        def adopt(there: str, started_utc: str, clocks: Difference) -> int:
            first = translation.adopt(there, started_utc, clocks)
            words.met(translation.wall_clocks_apart_s(started_utc))
            print(
                f"listens to run {there!r}; its clock is known to within "
                f"{1e3 * clocks.uncertainty_s:.2g} ms",
                flush=True,
            )
            return first

        def compare(found: Difference) -> None:
            words.compared(now_s(), found)
            relaying.say(translation.correct(found))

        with FarSide(table, far, adopt, now_s, child.stop.wait) as far_side:
            _listen(far_side, relaying, compare, child.wanted)


def _listen(
    far_side: FarSide,
    relaying: Relaying,
    compare: Callable[[Difference], None],
    wanted: Callable[[], bool],
) -> None:
    """Take rows until it is not wanted any more, then those that are there by then."""
    with suppress(Stopped):
        while wanted():
            if relaying.behind:
                time.sleep(LONGEST_WAIT_S)  # what the bus loses meanwhile is asked for again
            else:
                relaying.take(far_side.receive(LONGEST_WAIT_S))
                relaying.heed(far_side.trouble)
                found = far_side.compare_clocks()
                if found is not None:
                    compare(found)
            relaying.step()
    if not relaying.behind:
        relaying.take(far_side.last_rows(LAST_ROWS_S))
    relaying.end()


def _unnoted(run: RunFolder, table: Table, name: str) -> list[Row]:
    """Settings rows that a relay before this one has published and not noted."""
    noted = {entry.get("seq") for entry in run.instruments() if entry.get("reader") == name}
    return [row for row in run.rows(table) if row[STATUS] == "settings" and row[0] not in noted]


def _elsewhere(run: RunFolder, name: str) -> tuple[ReaderSection, Endpoint, LiveRun]:
    """The reader, where it is, and where its rows are to go. Raises RunError."""
    sections = {reader.name: reader for reader in run.rig.readers}
    section = sections.get(name)
    if section is None or section.elsewhere is None:
        names = ", ".join(one.name for one in run.rig.readers if one.elsewhere is not None)
        raise RunError(f"{run.path}: has no reader {name!r} elsewhere; it has {names or 'none'}.")
    live = live_run_for(run, name)
    far = endpoint_elsewhere(run.rig, section)
    if {far.publish, far.answer} & {*vars(live.endpoints[stream_of(name)]).values()}:
        raise RunError(f"{run.path}: listens to {name!r} itself, so that no relay is needed.")
    return section, far, live


if __name__ == "__main__":
    faulthandler.enable()
    sys.exit(main())
