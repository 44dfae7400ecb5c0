"""What a reader has to tell, put on record; and what it does when that can't be done.

A row that can't be recorded is not published. It waits in memory in its turn, and so do those
after it, up to :data:`MOST_WAITING`; once a second the first is tried again. When there is room
again all of them are recorded and published with their own times, so that a disk that was full
for some minutes costs no reading. Only when so many wait that memory must not take more, no
readings are taken, and a row says afterwards from when to when, how many were due, and why.
"""

from __future__ import annotations

import json
import math
from collections import deque
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from acquire.clock import utc_now_text
from acquire.config.reader import ReaderSection
from acquire.errors import JournalError, RampsideError, RowError
from acquire.tables import Row

RETRY_S = 1.0
RETRY_NOTE_S = 10.0
MOST_WAITING = 10_000  # rows: 200 s of a reader at 50 Hz, some 5 MB
CONFIRM_S = 10.0  # so often it is noted that settings were answered as before

Answers = Mapping[str, tuple[float, float, int]]
"""By setting: when it was first and last answered as it stands, and how often."""


@dataclass(frozen=True)
class _Waiting:
    """The cells of a row after ``seq``; with what is known of the instrument, if it says that,
    and what a person is to be told of it."""

    cells: Row
    known: dict[str, Any] | None = None
    words: tuple[str, ...] = ()


class Recorder:
    """Publishes the rows of one reader (see :mod:`acquire.readings`), each once and in order.

    No method raises JournalError. A person is told once when rows begin to wait, and once when
    they are recorded again. Call :meth:`step` now and then, at :attr:`retry_at` at the latest.

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
        self._waiting: deque[_Waiting] = deque()
        self._retry_at = -math.inf
        self._why: str | None = None  # why rows wait; None while they are recorded
        self._full_since: float | None = None
        self._unnoted: list[dict[str, Any]] = []
        self._note_at = -math.inf
        self._told_note = False
        self._confirm_at = -math.inf
        self._entry: dict[str, Any] | None = None

    @property
    def full(self) -> bool:
        """Whether so many rows wait that no more readings are to be taken."""
        return len(self._waiting) >= MOST_WAITING

    @property
    def retry_at(self) -> float:
        """When :meth:`step` has something to do, in seconds of the run; inf if nothing waits."""
        return self._retry_at if self._waiting else math.inf

    def row(
        self,
        status: str,
        detail: str = "",
        values: Sequence[float | None] = (),
        took: tuple[float, float] | None = None,
        time_s: float | None = None,
    ) -> None:
        """Publish a row that stands for ``time_s``, for the middle of ``took`` (from, to), or, if
        neither is given, for now."""
        self._add(self._cells(status, detail, values, took, time_s))

    def settings(
        self,
        identity: str | None,
        settings: object,
        answers: Answers | None = None,
        words: tuple[str, ...] = (),
    ) -> None:
        """Publish who the instrument is and how it is set, and note it in ``instruments.json``.

        ``words`` say what has changed; a person is told with the row from which that holds.
        """
        known = {"identity": identity, "settings": settings}
        told = {"utc": utc_now_text(), "resource": self._section.resource, **known}
        self._entry = None
        cells = self._cells("settings", json.dumps(known))
        self._add(cells, {**told, "answers": _noted(answers or {})}, words)
        self._write_notes()

    def note_later(self, entries: Iterable[dict[str, Any]]) -> None:
        """Note what a predecessor has published and not noted."""
        self._unnoted.extend(entries)

    def confirm(self, answers: Answers, at_once: bool = False) -> None:
        """Note that settings were answered as before, when and how often; in the entry that is
        there, and now and then only, unless ``at_once``."""
        if self._entry is not None and (at_once or self._now() >= self._confirm_at):
            self._note_entry({**self._entry, "answers": _noted(answers)})
            self._write_notes()

    def _note_entry(self, entry: dict[str, Any]) -> None:
        """To be written next; once only if one for the same row waits yet."""
        self._entry, self._confirm_at = entry, self._now() + CONFIRM_S
        self._unnoted = [one for one in self._unnoted if one["seq"] != entry["seq"]]
        self._unnoted.append(entry)

    def step(self) -> None:
        """Record what waits, if it is time to try again, and write what is to be noted."""
        self._record()
        self._write_notes()

    def end(self) -> None:
        """Publish that nothing follows, and try a last time to record and note what waits."""
        self._retry_at = self._note_at = -math.inf
        self.row("end")
        self._write_notes()
        if self._waiting:
            self._complain(f"{len(self._waiting)} rows could never be recorded: {self._why}")

    def _cells(
        self,
        status: str,
        detail: str = "",
        values: Sequence[float | None] = (),
        took: tuple[float, float] | None = None,
        time_s: float | None = None,
    ) -> Row:
        time_s, took_s = self._now() if time_s is None else time_s, None
        if took is not None:
            time_s, took_s = (took[0] + took[1]) / 2, took[1] - took[0]
        return (time_s, took_s, status, detail, *(values or self._nothing))

    @property
    def _nothing(self) -> Row:
        return (None,) * len(self._section.values)

    def _add(
        self, cells: Row, known: dict[str, Any] | None = None, words: tuple[str, ...] = ()
    ) -> None:
        self._waiting.append(_Waiting(cells, known, words))
        if self.full and self._full_since is None:
            self._full_since = self._now()
        self._record()

    def _record(self) -> None:
        """Publish what waits, in order, as far as it goes."""
        while self._waiting and self._now() >= self._retry_at:
            one = self._waiting[0]
            try:
                seq = self._publish(*one.cells)
            except RowError as error:  # no disk will ever take it
                self._waiting[0] = self._refused(one, error)
                continue
            except JournalError as error:
                self._wait(error)
                return
            self._waiting.popleft()
            if one.known is not None:
                about = {"reader": self._section.name, "seq": seq, "time_s": one.cells[0]}
                self._note_entry({**about, **one.known})
            for text in one.words:
                self._complain(f"{text}; that holds from row {seq + 1} on")
        if self._why is not None and not self._waiting:
            self._recorded_again(self._why)

    def _refused(self, one: _Waiting, error: RowError) -> _Waiting:
        time_s, took_s, *_ = one.cells
        return _Waiting((time_s, took_s, "bad_reply", str(error)[:1000], *self._nothing))

    def _wait(self, error: JournalError) -> None:
        self._retry_at = self._now() + RETRY_S
        if self._why is None:
            self._why = str(error)
            self._complain(
                f"nothing can be recorded, so nothing is published; readings wait: {error}"
            )

    def _recorded_again(self, why: str) -> None:
        self._why, self._retry_at = None, -math.inf
        since, self._full_since = self._full_since, None
        self._complain("readings are recorded again")
        if since is not None:
            now = self._now()
            due = math.floor((now - since) / self._section.period_s)
            span = f"from {since:.3f} to {now:.3f} s"
            self.row("no_answer", f"no readings were taken {span}, {due} were due: {why}")

    def _write_notes(self) -> None:
        """It comes second to readings: what can't be written is tried again later."""
        while self._unnoted and self._now() >= self._note_at:
            try:
                self._note(self._unnoted[0])
            except RampsideError as error:
                if not self._told_note:
                    self._complain(f"tried again every {RETRY_NOTE_S:g} s: {error}")
                self._note_at, self._told_note = self._now() + RETRY_NOTE_S, True
                return
            self._told_note = False
            del self._unnoted[0]


def _noted(answers: Answers) -> dict[str, Any]:
    return {
        name: {"first_s": first, "last_s": last, "count": count}
        for name, (first, last, count) in answers.items()
    }
