"""A reader that runs elsewhere, in the terms of this run.

The reader there has a run of its own, with its own start. Its rows become rows of this run: their
times are moved by the difference of the two starts, as the clocks of both computers had it in UTC.

From which run and row on was listened stands in the journal of this run, in a row of its own, and
from there on each row there is one row here. So a relay that was killed knows from its journal
alone where to go on.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from dataclasses import dataclass, replace
from datetime import datetime

from acquire.errors import RunError
from acquire.tables import Cell, Row

ENDED = "the reader elsewhere has ended; waiting for another run of it"
_ADOPTED = re.compile(r'listens to run (".*"), started (\S+), from its row (\d+) on')
_OLDER = '"from_before_row": '
STATUS, DETAIL = 3, 4
"""Columns of a reader's table."""


@dataclass(frozen=True)
class Standing:
    """How far a relay has come: the run that it listened to, None before the first; the number of
    the next row there; the latest time so far; whether the last row said that the run has ended.
    """

    run: str | None = None
    next_seq: int = 0
    latest_s: float = 0.0
    ended: bool = False

    def after(self, row: Row) -> Standing:
        """The standing after one more row of the relay's own journal."""
        time_s, status, detail = row[1], row[STATUS], str(row[DETAIL] or "")
        if status == "end":
            return self  # the relay's own; rows there that say so are relayed otherwise
        assert isinstance(time_s, float)
        latest_s = max(self.latest_s, time_s)
        if status == "settings" and _OLDER in detail:
            return replace(self, latest_s=latest_s)
        found = _ADOPTED.search(detail) if status == "no_answer" else None
        if found is not None:
            return Standing(json.loads(found[1]), int(found[3]), latest_s)
        return Standing(self.run, self.next_seq + 1, latest_s, detail == ENDED)


def standing_of(rows: Iterable[Row]) -> Standing:
    """The standing after all rows of a relay's journal."""
    standing = Standing()
    for row in rows:
        standing = standing.after(row)
    return standing


class Translation:
    """Rows of the reader elsewhere in, cells of this run's rows (after ``seq``) out.

    What was read there before this run began is left out, but for the last settings: the filters
    are known by them.

    Parameters
    ----------
    started_utc : the start of this run.
    standing : how far its journal has come.
    """

    def __init__(self, started_utc: str, standing: Standing) -> None:
        self._started = _moment(started_utc, "this run")
        self._standing = standing
        self._offset_s = 0.0
        self._there: tuple[str, str] = ("", "")
        self._seeking = False
        self._settings: Row | None = None

    @property
    def run(self) -> str | None:
        """The run that is listened to."""
        return self._there[0] or None

    def adopt(self, run: str, started_utc: str) -> int:
        """Listen to a run from now on; returns the number of the row that is wanted first.

        Raises RunError if its start is not known.
        """
        there = _moment(started_utc, f"the run {run!r} elsewhere")
        self._offset_s = (there - self._started).total_seconds()
        self._there = run, started_utc
        self._settings = None
        self._seeking = run != self._standing.run
        return 0 if self._seeking else self._standing.next_seq

    def take(self, row: Row) -> list[Row]:
        """The rows that one of the run's rows gives here, none or several."""
        time_s, took_s, status, *rest = row[1:]
        assert isinstance(time_s, float)
        here_s = time_s + self._offset_s
        before: list[Row] = []
        if self._seeking:
            if here_s < 0.0:
                if status == "settings":
                    self._settings = row
                return []
            before = self._beginning(row)
        if status == "end":
            status, rest[0] = "no_answer", ENDED
        return [*before, self._counted((here_s, took_s, status, *rest))]

    def _beginning(self, row: Row) -> list[Row]:
        """The settings that hold, and the row that says from where on is listened."""
        self._seeking = False
        standing, (run, started_utc) = self._standing, self._there
        why = f"listens to run {json.dumps(run)}, started {started_utc}, from its row {row[0]} on"
        if standing.run is not None and not standing.ended:
            last = standing.next_seq - 1
            why = f"run {standing.run!r} was heard up to its row {last}, not to its end; {why}"
        nothing: list[Cell] = [None] * (len(row) - DETAIL - 1)
        cells: list[Row] = [(standing.latest_s, None, "no_answer", why, *nothing)]
        settings = _older(self._settings, row[0])
        if settings is not None:
            cells.insert(0, (standing.latest_s, None, "settings", settings, *nothing))
        return [self._counted(one) for one in cells]

    def _counted(self, cells: Row) -> Row:
        self._standing = self._standing.after((0, *cells))
        return cells


def _older(row: Row | None, before: Cell) -> str | None:
    """The detail of a settings row, marked as older than the row that is the first to be relayed;
    so it counts for none of those. None if there are no settings."""
    try:
        known = json.loads(str(row[DETAIL])) if row is not None else {}
        return json.dumps({**known, "from_before_row": before}) if known else None
    except (ValueError, TypeError):
        return None


def _moment(text: str, whose: str) -> datetime:
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        moment = None
    if moment is None or moment.tzinfo is None:
        raise RunError(f"the start of {whose} is not known ({text!r}): is it the same rampside?")
    return moment
