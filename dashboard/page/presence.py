"""Whether a stream is alive: its state in a word, and how old its last usable row is."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

from acquire.readings import Reading
from acquire.tables import Row

Level = Literal["good", "waiting", "warning", "ended"]

LEAST_SILENCE_S = 3.0
PERIODS = 5.0
FIRST_ROW_S = 10.0
"""How long after the start of a run a stream may take to say anything."""

_TROUBLE = {
    "no_answer": "no answer",
    "bad_reply": "reply not understood",
    "overload": "overload",
    "range": "out of range",
    "unheard": "not heard",
}


_CLOCK = re.compile(r"to within ([0-9.e-]+) s")


@dataclass(frozen=True)
class StreamLine:
    """A stream as the page shows it. ``age_s`` is None where there is nothing to be old.

    ``identity`` and ``note`` are what instruments and processes said: text, never markup.
    """

    name: str
    level: Level
    state: str
    age_s: float | None
    rows: int
    identity: str = ""
    note: str = ""


class Presence:
    """What is known of one stream, by its rows. Times are seconds of the run.

    ``period_s``: how often a row is due. ``own_clock``: its times are not of this run's clock
    (a reader of another computer), so that the time of arrival stands for them.
    """

    def __init__(self, name: str, period_s: float, own_clock: bool = False) -> None:
        self.name = name
        self.identity = ""
        self.rows = 0
        self.silence_s = max(LEAST_SILENCE_S, PERIODS * period_s)
        self.ended = False
        self.unrecorded = ""  # why its publisher can't record, and so not publish, what it has
        self._own_clock = own_clock
        self._usable_s: float | None = None
        self._any_s: float | None = None
        self._trouble = self._note = ""
        self._clock = ""  # of a reader elsewhere: how well it is known

    def take(self, row: Row, now_s: float | None) -> None:
        """Take a row of estimates or events, or one that only shows that the stream lives."""
        self.rows = int(row[0] or 0) + 1
        time_s = float(row[1] or 0.0)
        self._any_s = now_s if self._own_clock and now_s is not None else time_s
        self._usable_s = self._any_s
        self._trouble = self._note = ""
        self.ended = False

    def take_reading(self, reading: Reading, now_s: float | None) -> None:
        """Take a row of a reader."""
        usable_s = self._usable_s
        self.take((reading.seq, reading.time_s), now_s)
        self.ended = reading.status == "end"
        if reading.status != "ok":
            self._usable_s = usable_s
        if reading.status in _TROUBLE:
            self._trouble, self._note = _TROUBLE[reading.status], reading.detail
        known = _CLOCK.search(reading.detail) if reading.status == "relay" else None
        if known is not None:
            self._clock = f"its clock is known to within {1e3 * float(known[1]):.2g} ms"

    def heard(self, time_s: float) -> None:
        """Its publisher has proved that it lives, though it has nothing new to say."""
        self._usable_s = self._any_s = max(time_s, self._any_s or 0.0)

    def line(self, now_s: float | None) -> StreamLine:
        """Its state at a time of the run; None for a run that goes on no more."""
        level, state = self._state(now_s)
        age_s = None
        if now_s is not None and self._usable_s is not None and level != "ended":
            age_s = max(now_s - self._usable_s, 0.0)
        note = self._note or self._clock
        return StreamLine(self.name, level, state, age_s, self.rows, self.identity, note)

    def _state(self, now_s: float | None) -> tuple[Level, str]:
        if now_s is None or self.ended:
            return "ended", "ended"
        if self.unrecorded:
            return "warning", f"cannot record: {self.unrecorded}"
        if self._any_s is None:
            late = now_s > max(self.silence_s, FIRST_ROW_S)
            return ("warning" if late else "waiting"), "nothing yet"
        if self._trouble == _TROUBLE["unheard"]:
            return "warning", self._trouble  # which is why nothing comes
        if now_s - self._any_s > self.silence_s:
            return "warning", "stopped"
        if self._trouble:
            return "warning", self._trouble
        if self._usable_s is None:
            return "waiting", "no reading yet"
        return "good", "running"
