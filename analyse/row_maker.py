"""From readers' rows to rows of the estimates and events tables: a function of the rows alone."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass

from acquire.config.rig import Rig
from acquire.readings import Reading
from acquire.tables import Row
from analyse.estimate import Estimate
from analyse.numbers import Number
from analyse.rig import RigEstimator

DETERMINED = ("setting", "verdict", "caution", "caution_over")
"""Kinds of events that follow from the readings; the others come from people and processes."""


@dataclass(frozen=True)
class Record:
    """A row for a table, without its seq: ``stream`` is "estimates" or "events"."""

    stream: str
    cells: Row
    estimate: Estimate | None = None


class RowMaker:
    """Feeds the estimators and turns what they say into rows, in an order the readings decide.

    With several Hall bars their field points are merged by time: a field point is written once
    every other Hall bar has come as far.

    A row that says that its reader has ended is not obeyed at once: the reader may be started
    again, and then goes on. Only :meth:`finish` works up what still waits.
    """

    def __init__(self, rig: Rig) -> None:
        self._rig = RigEstimator(rig)
        self._bars = [bar.name for bar in rig.hall_bars]
        self._pending: dict[str, deque[Estimate]] = {name: deque() for name in self._bars}
        self._open: dict[str, set[str]] = {name: set() for name in self._bars}
        self._verdict = dict.fromkeys(self._bars, "converging")
        self._last_status: dict[str, str] = {}
        self._count = 0
        self.latest: dict[str, Estimate] = {}

    @property
    def readers(self) -> tuple[str, ...]:
        """Names of the readers whose rows are needed."""
        return self._rig.readers

    @property
    def estimators(self) -> RigEstimator:
        """The estimators behind it."""
        return self._rig

    def take(self, reading: Reading) -> Iterator[Record]:
        """Take one row of a reader; yields the rows that it completes."""
        for bar, estimate in self._rig.take(reading):
            self._pending[bar].append(estimate)
        if reading.reader in self._rig.readers:
            self._last_status[reading.reader] = reading.status
        while all(self._pending.values()):
            yield from self._earliest()

    def finish(self) -> Iterator[Record]:
        """No more rows come. Yields the last rows, if every reader has ended in order."""
        ended = [self._last_status.get(name) == "end" for name in self._rig.readers]
        if not all(ended):
            return
        for bar, estimate in self._rig.end():
            self._pending[bar].append(estimate)
        while any(self._pending.values()):
            yield from self._earliest()

    def _earliest(self) -> Iterator[Record]:
        waiting = [bar for bar in self._bars if self._pending[bar]]
        bar = min(waiting, key=lambda name: self._pending[name][0].time_s)
        yield from self._rows(bar, self._pending[bar].popleft())

    def _rows(self, bar: str, estimate: Estimate) -> Iterator[Record]:
        seq = self._count
        self._count += 1
        self.latest[bar] = estimate
        yield Record("estimates", estimate_cells(bar, estimate), estimate)
        for change in self._rig.changes.before(bar, estimate.time_s):
            cells = (estimate.time_s, "setting", bar, change.name, change.text, seq, None)
            yield Record("events", cells)
        for kind, code, text in self._changes(bar, estimate):
            yield Record("events", (estimate.time_s, kind, bar, code, text, seq, None))

    def _changes(self, bar: str, estimate: Estimate) -> Iterator[tuple[str, str, str]]:
        now = {caution.code: caution.text for caution in reversed(estimate.cautions)}
        before = self._open[bar]
        for code in sorted(now.keys() - before):
            yield "caution", code, now[code]
        for code in sorted(before - now.keys()):
            yield "caution_over", code, "has passed"
        self._open[bar] = set(now)
        if estimate.verdict != self._verdict[bar]:
            self._verdict[bar] = estimate.verdict
            reasons = "; ".join(estimate.waiting_for) or "the answer is good enough"
            yield "verdict", estimate.verdict, reasons


def _number(number: Number | None) -> Row:
    if number is None:
        return (None, None, None, None)
    return (number.value, number.standard_uncertainty, number.low, number.high)


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


def estimate_cells(bar: str, one: Estimate) -> Row:
    """The row of the estimates table for one estimate, without seq."""
    quick_density, quick_mobility = one.quick_density, one.quick_mobility
    return (
        one.time_s, bar, one.field_T, one.rho_xx_ohm, one.rho_xy_ohm, one.field_points,
        int(one.used),
        *_number(one.sheet_density), *_number(one.mobility), *_number(one.scattering_time),
        one.rho_0.value if one.rho_0 else None,
        _finite(one.rho_0.standard_uncertainty) if one.rho_0 else None,
        one.hall_slope.value if one.hall_slope else None,
        _finite(one.hall_slope.standard_uncertainty) if one.hall_slope else None,
        one.hall_offset_ohm,
        None if one.carriers == "unknown" else one.carriers,
        *(one.window_T or (None, None)),
        quick_density.density_per_m2 if quick_density else None,
        quick_mobility.mobility_m2_per_V_s if quick_mobility else None,
        one.verdict, one.time_to_target_s, one.field_to_target_T, *one.field_to_target_range_T,
        " ".join(dict.fromkeys(caution.code for caution in one.cautions)) or None,
        "; ".join(one.waiting_for) or None,
    )


def merge_by_time(streams: Mapping[str, Iterable[Reading]]) -> Iterator[Reading]:
    """All readers' rows in the order of their times; any order would give the same estimates."""
    import heapq

    return heapq.merge(*streams.values(), key=lambda reading: reading.time_s)
