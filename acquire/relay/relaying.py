"""What a relay does with each row: translate it, record and publish it, never lose it."""

from __future__ import annotations

import json
from collections import deque
from collections.abc import Callable, Iterable
from datetime import datetime, timedelta
from typing import Any

from acquire.clock import utc_text
from acquire.errors import JournalError, RampsideError, RowError
from acquire.relay.translation import DETAIL, STATUS, Translation
from acquire.tables import Row

RETRY_S = 1.0  # after a row could not be recorded
RETRY_NOTE_S = 10.0  # after instruments.json could not be written


class Relaying:
    """Decides; knows no sockets and no files.

    Parameters
    ----------
    started_utc : the start of this run.
    width : how many values a row has.
    publish : takes the cells of a row after ``seq``, returns ``seq``; raises JournalError.
    note : takes settings for ``instruments.json``; those for which it raises RampsideError come
        again.
    complain : takes a sentence for a person who looks at the terminal.
    now_s : the run's clock, in seconds.
    """

    def __init__(
        self,
        translation: Translation,
        started_utc: str,
        width: int,
        publish: Callable[..., int],
        note: Callable[[dict[str, Any]], None],
        complain: Callable[[str], None],
        now_s: Callable[[], float],
    ) -> None:
        self._translation = translation
        self._started = datetime.fromisoformat(started_utc)
        self._nothing = (None,) * width
        self._publish = publish
        self._note = note
        self._complain = complain
        self._now = now_s
        self._unpublished: deque[Row] = deque()
        self._unnoted: deque[Row] = deque()
        self._publish_at = self._note_at = float("-inf")
        self._told_lost = False
        self._troubles: set[str] = set()  # said since a row was heard

    @property
    def behind(self) -> bool:
        """Whether there are rows that could not be recorded yet; none must be taken meanwhile."""
        return bool(self._unpublished)

    def take(self, rows: Iterable[Row]) -> None:
        """Take rows of the reader elsewhere."""
        for row in rows:
            self._troubles.clear()
            self._unpublished.extend(self._translation.take(row))

    def say(self, rows: Iterable[Row]) -> None:
        """Take what is to be written beside the rows of the reader elsewhere."""
        self._unpublished.extend(rows)

    def heed(self, trouble: str) -> None:
        """Say why the reader elsewhere can't be heard, each reason once until it is heard again.

        ``trouble`` is empty where nothing is known to be wrong.
        """
        if trouble and trouble not in self._troubles:
            self._troubles.add(trouble)
            self._complain(trouble)
            self.say(self._translation.unheard(trouble))

    def note_later(self, rows: Iterable[Row]) -> None:
        """Take settings rows of the journal, with their ``seq``, that are not noted yet."""
        self._unnoted.extend(rows)

    def step(self) -> None:
        """Record and publish what has been taken, as far as that can be done now."""
        if self._now() >= self._publish_at:
            self._publish_all()
        if self._now() >= self._note_at:
            self._note_all()

    def end(self) -> None:
        """Publish what is left, and that nothing follows. Raises no JournalError."""
        self._unpublished.append((self._now(), None, "end", None, *self._nothing))
        self._publish_at = self._note_at = float("-inf")
        self.step()

    def _publish_all(self) -> None:
        while self._unpublished:
            cells = self._unpublished[0]
            try:
                seq = self._publish(*cells)
            except RowError as error:  # no disk will ever take it; each row there has one here
                refused = (*cells[: STATUS - 1], "bad_reply", str(error)[:1000], *self._nothing)
                self._unpublished[0] = refused
                continue
            except JournalError as error:
                self._lose(error)
                return
            self._unpublished.popleft()
            if cells[STATUS - 1] == "settings":
                self._unnoted.append((seq, *cells))
        if self._told_lost:
            self._told_lost = False
            self._complain("rows are recorded again")

    def _lose(self, error: JournalError) -> None:
        self._publish_at = self._now() + RETRY_S
        if not self._told_lost:
            self._told_lost = True
            self._complain(f"nothing can be recorded, so nothing is published: {error}")

    def _note_all(self) -> None:
        while self._unnoted:
            try:
                self._note(self._entry(self._unnoted[0]))
            except RampsideError as error:
                self._complain(f"tried again in {RETRY_NOTE_S:g} s: {error}")
                self._note_at = self._now() + RETRY_NOTE_S
                return
            self._unnoted.popleft()

    def _entry(self, row: Row) -> dict[str, Any]:
        seq, time_s = row[:2]
        assert isinstance(time_s, float)
        known = _known(str(row[DETAIL]))
        utc = utc_text(self._started + timedelta(seconds=time_s))
        return {"seq": seq, "time_s": time_s, "utc": utc, **known}


def _known(detail: str) -> dict[str, Any]:
    """Identity and settings out of a settings row."""
    try:
        known = json.loads(detail)
        return {"identity": known["identity"], "settings": known["settings"]}
    except (ValueError, TypeError, KeyError):
        return {"identity": None, "settings": None}
