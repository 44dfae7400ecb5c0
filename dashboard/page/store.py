"""All that the page knows of a run. One thread fills it, the sessions read it; any number of them."""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Literal

from acquire.bus import StreamHealth
from acquire.config import Rig
from acquire.readings import Reading, stream_of
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard.bad_end import ENDED_BADLY
from dashboard.page.budget_panel import systematic_by_bar
from dashboard.page.curves import CurveKeeper, Curves
from dashboard.page.field_now import FieldNow, FieldWatch
from dashboard.page.presence import Presence, StreamLine
from dashboard.page.sweeps import threshold_T
from dashboard.summary import Summary

EVENTS_KEPT = 200
TROUBLE_S = 5.0
"""Who can't record says so when asked, once a second; who says nothing has stopped."""
ESTIMATES_PERIODS = 2.0
"""A field point takes readings of all instruments, so estimates may come half as often."""

Phase = Literal["opening", "live", "ended", "crashed"]
_BAR = ESTIMATES.names.index("hall_bar")
_EVENT = {name: index for index, name in enumerate(EVENTS.names)}


@dataclass(frozen=True)
class Event:
    """Something that happened; all strings are as they came, to be shown as text."""

    seq: int
    time_s: float
    kind: str
    hall_bar: str
    code: str
    text: str


@dataclass(frozen=True)
class BarFacts:
    """One Hall bar: its curves, since when (time in s, field in T) it is stable, open cautions."""

    name: str
    curves: Curves
    stable_at: tuple[float, float] | None
    cautions: Mapping[str, str]


@dataclass(frozen=True)
class RunFacts:
    """The run as a whole at one moment. ``now_s`` is None once it goes on no more."""

    phase: Phase
    now_s: float | None
    last_s: float
    field: FieldNow | None
    streams: tuple[StreamLine, ...]
    events: tuple[Event, ...]
    failures: int
    failure: str
    bad_end: str = ""  # how the run ended badly and was closed later; empty if it did not


@dataclass
class _State:
    phase: Phase = "opening"
    clock: Callable[[], float] | None = None
    last_s: float = 0.0
    failures: int = 0
    failure: str = ""
    bad_end: str = ""
    next_seq: dict[str, int] = field(default_factory=dict)


class RunStore:
    """Facts of one run, brought up to date row by row, each stream's rows in order."""

    def __init__(self, run_id: str, rig: Rig) -> None:
        self.run_id = run_id
        self.rig = rig
        self.bars = tuple(bar.name for bar in rig.hall_bars)
        self.systematic = systematic_by_bar(rig)
        self._lock = threading.Lock()
        self._state = _State()
        self._summary = Summary(run_id, self.bars, rig.target.confidence)
        self._curves = {name: CurveKeeper(threshold_T(rig)) for name in self.bars}
        self._field = FieldWatch(rig)
        self._readers = {stream_of(name): name for name in _reader_names(rig)}
        self._presence = _presences(rig)
        self._events: deque[Event] = deque(maxlen=EVENTS_KEPT)

    # For the thread that fills it.

    def take(self, stream: str, row: Row) -> None:
        """Take the next row of a stream of the run."""
        with self._lock:
            self._state.next_seq[stream] = int(row[0] or 0) + 1
            self._state.last_s = max(self._state.last_s, float(row[1] or 0.0))
            now_s = self._now_s()
            if stream in self._readers:
                reading = Reading.from_row(self._readers[stream], row)
                self._presence[stream].take_reading(reading, now_s)
                self._field.take(reading)
                return
            self._presence[stream].take(row, now_s)
            if stream == ESTIMATES.stream and row[_BAR] in self._curves:
                self._summary.add_estimate(row)
                self._curves[str(row[_BAR])].add(row)
            elif stream == EVENTS.stream:
                self._take_event(row)

    def next_seq(self, stream: str) -> int:
        """The number of the row that comes next in a stream."""
        with self._lock:
            return self._state.next_seq.get(stream, 0)

    def begin(self, phase: Phase, clock: Callable[[], float] | None) -> None:
        """Say how the run stands; ``clock`` tells the seconds since its start while it goes on."""
        with self._lock:
            self._state.phase, self._state.clock = phase, clock

    def hear(self, health: Mapping[str, StreamHealth], monotonic_s: float) -> None:
        """Take note of who can't record, and that the publisher of events lives: it may have
        nothing new for hours."""
        with self._lock:
            for stream, one in health.items():
                silent_s = monotonic_s - (one.last_heard_monotonic or 0.0)
                self._presence[stream].unrecorded = one.trouble if silent_s < TROUBLE_S else ""
            now_s, heard = self._now_s(), health[EVENTS.stream].last_heard_monotonic
            if now_s is not None and heard is not None:
                self._presence[EVENTS.stream].heard(now_s - (monotonic_s - heard))

    def identify(self, identities: Mapping[str, str]) -> None:
        """Take what the instruments said of themselves, by reader."""
        with self._lock:
            for stream, name in self._readers.items():
                self._presence[stream].identity = identities.get(name, "")

    def fail(self, text: str) -> None:
        """Count something that went wrong in the page itself, in whatever thread."""
        with self._lock:
            self._state.failures += 1
            self._state.failure = text

    # For the sessions.

    def bar(self, name: str) -> BarFacts:
        """What is known of a Hall bar."""
        with self._lock:
            bar = self._summary.bars[name]
            curves = self._curves[name].curves()
            return BarFacts(name, curves, bar.stable_at, dict(bar.cautions))

    def all_stable(self) -> bool:
        """Whether every Hall bar is stable now."""
        with self._lock:
            return all(bar.stable_at is not None for bar in self._summary.bars.values())

    def run(self) -> RunFacts:
        """How the run stands now."""
        with self._lock:
            state, now_s = self._state, self._now_s()
            return RunFacts(
                state.phase,
                now_s,
                state.last_s,
                self._field.now(),
                tuple(presence.line(now_s) for presence in self._presence.values()),
                tuple(reversed(self._events)),
                state.failures,
                state.failure,
                state.bad_end,
            )

    def _now_s(self) -> float | None:
        return None if self._state.clock is None else self._state.clock()

    def _take_event(self, row: Row) -> None:
        name = row[_EVENT["hall_bar"]]
        if name is None or name in self._summary.bars:
            self._summary.add_event(row)
        if (row[_EVENT["kind"]], row[_EVENT["code"]]) == ("run", ENDED_BADLY):
            self._state.bad_end = str(row[_EVENT["text"]] or "")
        texts = (str(row[_EVENT[column]] or "") for column in ("kind", "hall_bar", "code", "text"))
        self._events.append(Event(int(row[0] or 0), float(row[1] or 0.0), *texts))


def _reader_names(rig: Rig) -> tuple[str, ...]:
    return ("table",) if rig.table is not None else tuple(reader.name for reader in rig.readers)


def _presences(rig: Rig) -> dict[str, Presence]:
    slowest_s = max((reader.period_s for reader in rig.readers), default=1.0)
    found = {
        stream_of(reader.name): Presence(
            reader.name, reader.period_s, own_clock=reader.elsewhere is not None
        )
        for reader in rig.readers
    }
    if rig.table is not None:
        found[stream_of("table")] = Presence("table", 1.0)
    found[ESTIMATES.stream] = Presence(ESTIMATES.stream, ESTIMATES_PERIODS * slowest_s)
    found[EVENTS.stream] = Presence(EVENTS.stream, slowest_s)
    return found
