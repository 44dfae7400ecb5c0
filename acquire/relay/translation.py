"""A reader that runs elsewhere, in the terms of this run.

The reader there has a run of its own, with its own start and clock. Its rows become rows of this
run: their times are moved by the difference of the two clocks.

From which run and row on was listened, and by how much times are moved from there on, stands in
the journal of this run, in rows of its own before those for which it holds; and for each row there
is one row here. So a relay that was killed knows from its journal alone how to go on.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from dataclasses import dataclass, replace
from datetime import datetime

from acquire.cells import LONGEST_LINE
from acquire.errors import RunError
from acquire.relay.clocks import Difference
from acquire.tables import Cell, Row

ENDED = "the reader elsewhere has ended; waiting for another run of it"
_ADOPTED = re.compile(r'listens to run (".*"), started (.+?), from its row (\d+) on')
_CLOCK = re.compile(r"its 0 s are (\S+) s here, to within (\S+) s")
_OLDER = '"from_before_row": '
STATUS, DETAIL = 3, 4
"""Columns of a reader's table."""

OWN = ("relay", "unheard")
"""What a relay says by itself."""


@dataclass(frozen=True)
class Standing:
    """How far a relay has come: the run that it listened to, None before the first; the number of
    the next row there; the latest time so far; whether the last row said that the run has ended;
    the difference of the clocks that holds.
    """

    run: str | None = None
    next_seq: int = 0
    latest_s: float = 0.0
    ended: bool = False
    clocks: Difference | None = None

    def after(self, row: Row) -> Standing:
        """The standing after one more row of the relay's own journal."""
        time_s, status, detail = row[1], row[STATUS], str(row[DETAIL] or "")
        if status == "end":
            return self  # the relay's own; rows there that say so are relayed otherwise
        assert isinstance(time_s, float)
        standing = replace(self, latest_s=max(self.latest_s, time_s))
        if status in OWN:
            adopted, clock = _ADOPTED.search(detail), _CLOCK.search(detail)
            if adopted is not None:
                standing = replace(
                    standing, run=json.loads(adopted[1]), next_seq=int(adopted[3]), ended=False
                )
            if clock is not None:
                found = Difference(float(clock[1]), float(clock[2]))
                standing = replace(standing, clocks=found)
            return standing
        if status == "settings" and _OLDER in detail:
            return standing
        return replace(standing, next_seq=self.next_seq + 1, ended=detail == ENDED)


def standing_of(rows: Iterable[Row]) -> Standing:
    """The standing after all rows of a relay's journal."""
    standing = Standing()
    for row in rows:
        standing = standing.after(row)
    return standing


class Translation:
    """Rows of the reader elsewhere in, cells of this run's rows (after ``seq``) out.

    What was read there before this run began is left out, but for the last settings: the filters
    are known by them. No row comes out earlier than the one before it, also where the clocks were
    found to be closer than was thought.

    Parameters
    ----------
    started_utc : the start of this run.
    standing : how far its journal has come.
    width : how many values a row has.
    """

    def __init__(self, started_utc: str, standing: Standing, width: int) -> None:
        self._started = _moment(started_utc, "this run")
        self._standing = standing
        self._nothing: list[Cell] = [None] * width
        self._clocks = standing.clocks or Difference(0.0, float("inf"))
        self._there: tuple[str, str] = ("", "")
        self._seeking = False
        self._settings: Row | None = None

    @property
    def clocks(self) -> Difference:
        """By how much times are moved now."""
        return self._clocks

    def adopt(self, run: str, started_utc: str, clocks: Difference) -> int:
        """Listen to a run from now on; returns the number of the row that is wanted first.

        ``clocks`` holds for a run that was not listened to before, and is written with its first
        row; for another, what stands in the journal goes on to hold. Raises RunError if the start
        is not known.
        """
        _moment(started_utc, f"the run {run!r} elsewhere")
        self._there = run, started_utc
        self._settings = None
        self._seeking = run != self._standing.run
        if self._seeking or self._standing.clocks is None:
            self._clocks = clocks
        return 0 if self._seeking else self._standing.next_seq

    def wall_clocks_apart_s(self, started_utc: str) -> float:
        """By how much the wall clock there is ahead of ours, by the start of a run there."""
        there = _moment(started_utc, "the run elsewhere")
        return (there - self._started).total_seconds() - self._clocks.offset_s

    def correct(self, found: Difference) -> list[Row]:
        """What to write where the clocks have been compared again: nothing, or the correction."""
        if self._seeking or not self._clocks.step_to(found):
            return []
        before_s, self._clocks = self._clocks.offset_s, found
        return [self._say("relay", f"{_clock_words(found)} (before: {before_s!r} s)")]

    def unheard(self, why: str) -> list[Row]:
        """What to write where the reader elsewhere can't be heard."""
        return [self._say("unheard", why)]

    def take(self, row: Row) -> list[Row]:
        """The rows that one of the run's rows gives here, none or several."""
        time_s, took_s, status, *rest = row[1:]
        assert isinstance(time_s, float)
        here_s = time_s + self._clocks.offset_s
        before: list[Row] = []
        if self._seeking:
            if here_s < 0.0:
                if status == "settings":
                    self._settings = row
                return []
            before = self._beginning(row)
        if status == "end":
            status, rest[0] = "no_answer", ENDED
        elif status in OWN:  # of another relay, if somebody has put two in a row
            status = "no_answer"
        return [*before, self._counted((max(here_s, self._standing.latest_s), took_s, status, *rest))]

    def _beginning(self, row: Row) -> list[Row]:
        """The settings that hold, and the row that says from where on is listened."""
        self._seeking = False
        standing, (run, started_utc) = self._standing, self._there
        why = (
            f"listens to run {json.dumps(run)}, started {started_utc}, from its row {row[0]} on; "
            f"{_clock_words(self._clocks)}"
        )
        if standing.run is not None and not standing.ended:
            last = standing.next_seq - 1
            why = f"run {standing.run!r} was heard up to its row {last}, not to its end; {why}"
        cells = [self._say("relay", why)]
        settings = _older(self._settings, row[0])
        if settings is not None:
            cells.insert(0, self._counted(self._cells("settings", settings)))
        return cells

    def _say(self, status: str, detail: str) -> Row:
        return self._counted(self._cells(status, detail))

    def _cells(self, status: str, detail: str) -> Row:
        """At the latest time so far: rows of an earlier time than now may still come."""
        return (self._standing.latest_s, None, status, detail, *self._nothing)

    def _counted(self, cells: Row) -> Row:
        self._standing = self._standing.after((0, *cells))
        return cells


def _clock_words(clocks: Difference) -> str:
    return f"its 0 s are {clocks.offset_s!r} s here, to within {clocks.uncertainty_s!r} s"


def _older(row: Row | None, before: Cell) -> str | None:
    """The detail of a settings row, marked as older than the row that is the first to be relayed;
    so it counts for none of those. None if there are no settings."""
    try:
        known = json.loads(str(row[DETAIL])) if row is not None else {}
        marked = json.dumps({**known, "from_before_row": before}) if known else ""
    except (ValueError, TypeError):
        return None
    return marked if 0 < len(marked) < LONGEST_LINE // 4 else None  # what a row can take for sure


def _moment(text: str, whose: str) -> datetime:
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        moment = None
    if moment is None or moment.tzinfo is None:
        raise RunError(f"the start of {whose} is not known ({text!r}): is it the same rampside?")
    return moment
