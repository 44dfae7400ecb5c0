"""What a reader has to tell, put on record; and what it does when that can't be done."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from typing import Any

from acquire.clock import utc_now_text
from acquire.config.reader import ReaderSection
from acquire.errors import JournalError, RampsideError

RETRY_NOTE_S = 10.0


class Recorder:
    """Publishes the rows of one reader (see :mod:`acquire.readings`).

    When a row can't be recorded, the method that was called raises JournalError, ``lost`` is
    True, and a person is told, once. :meth:`try_again` until it has worked: the first row then
    says from when on and why nothing was recorded.

    Parameters
    ----------
    publish : takes the cells of a row after ``seq``, returns ``seq``; raises JournalError.
    now_s : the run's clock, in seconds.
    note : takes each entry for ``instruments.json``; one that raises RampsideError comes again.
    complain : takes a sentence for a person who looks at the terminal.
    """

    def __init__(
        self,
        section: ReaderSection,
        publish: Callable[..., int],
        now_s: Callable[[], float],
        note: Callable[[dict[str, Any]], None],
        complain: Callable[[str], None],
    ) -> None:
        self._section = section
        self._publish = publish
        self._now = now_s
        self._note = note
        self._complain = complain
        self._lost: str | None = None
        self._unnoted: list[dict[str, Any]] = []
        self._note_at = now_s()

    @property
    def lost(self) -> bool:
        """Whether the last row could not be recorded."""
        return self._lost is not None

    def row(
        self,
        status: str,
        detail: str = "",
        values: Sequence[float | None] = (),
        took: tuple[float, float] | None = None,
    ) -> int:
        """Publish a row that stands for the middle of ``took`` (from, to), or for now."""
        time_s, took_s = self._now(), None
        if took is not None:
            time_s, took_s = (took[0] + took[1]) / 2, took[1] - took[0]
        cells = values or (None,) * len(self._section.values)
        try:
            return self._publish(time_s, took_s, status, detail, *cells)
        except JournalError as error:
            self._lose(error)
            raise

    def settings(self, identity: str | None, settings: object) -> None:
        """Publish who the instrument is and how it is set, and note it in ``instruments.json``."""
        known = {"identity": identity, "settings": settings}
        time_s = self._now()
        seq = self.row("settings", json.dumps(known), took=None)
        entry = {"reader": self._section.name, "seq": seq, "time_s": time_s, "utc": utc_now_text()}
        self._unnoted.append({**entry, "resource": self._section.resource, **known})
        self.note()

    def note(self) -> None:
        """Write what has not been noted yet. It comes second to readings: if it can't be written,
        it is tried again later."""
        while self._unnoted and self._now() >= self._note_at:
            try:
                self._note(self._unnoted[0])
            except RampsideError as error:
                self._complain(f"tried again in {RETRY_NOTE_S:g} s: {error}")
                self._note_at = self._now() + RETRY_NOTE_S
                return
            del self._unnoted[0]

    def try_again(self) -> None:
        """Publish the row about what was lost. Raises JournalError if that can't be done yet."""
        assert self._lost is not None
        self.row("no_answer", self._lost)
        self._lost = None
        self._complain("readings are recorded again")

    def _lose(self, error: JournalError) -> None:
        if self._lost is None:
            self._lost = f"not recorded from {self._now():.3f} s on: {error}"
            self._complain(f"nothing can be recorded, so nothing is published: {error}")
