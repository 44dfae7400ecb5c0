"""The sweeps of a ramp, as the estimator tells them apart: which way, from where to where."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

from acquire.config import Rig
from analyse.sweeps import Sweeps
from dashboard.page.html import Html, div, span
from dashboard.words import signed

KEPT = 100
SHOWN = 4
_ARROWS = {1: "↑", -1: "↓", 0: "·"}
_WORDS = {1: "up", -1: "down", 0: "standing"}


@dataclass(frozen=True)
class Sweep:
    """One sweep. ``direction``: 1 up, -1 down, 0 while the field has not moved yet.

    ``from_T`` is where it turned or began, ``to_T`` the farthest field that it has come to.
    """

    number: int
    direction: int
    from_T: float
    to_T: float
    points: int


class SweepList:
    """Brought up to date field point by field point; the last sweeps are kept."""

    def __init__(self, threshold_T: float) -> None:
        self._sweeps = Sweeps(threshold_T)
        self._kept: deque[Sweep] = deque(maxlen=KEPT)
        self._low = self._high = 0.0

    def add(self, field_T: float) -> int:
        """Take the field of the next field point; the number of its sweep, from 0."""
        number, direction = self._sweeps.add(field_T), self._sweeps.direction
        last = self._kept[-1] if self._kept else None
        if last is None or number != last.number:
            begin = field_T if last is None else last.to_T
            self._low, self._high = min(begin, field_T), max(begin, field_T)
            self._kept.append(Sweep(number, direction, begin, field_T, 1))
            return number
        self._low, self._high = min(self._low, field_T), max(self._high, field_T)
        begin, end = last.from_T, field_T
        if direction:
            ends = (self._low, self._high)[::direction]
            begin, end = (ends[0] if number == 0 else begin), ends[1]
        self._kept[-1] = Sweep(number, direction, begin, end, last.points + 1)
        return number

    def sweeps(self) -> tuple[Sweep, ...]:
        """The last sweeps, in order."""
        return tuple(self._kept)


def threshold_T(rig: Rig) -> float:
    """By how much the field must come back for a turn; the same as the estimator's."""
    largest_T = max(map(abs, rig.ramp.path_T)) if rig.ramp is not None else 1.0
    return max(2e-3, 0.01 * largest_T)


def sweep_panel(sweeps: tuple[Sweep, ...], live: bool) -> Html:
    """The sweeps that were recognised, the last ones."""
    moved = [sweep for sweep in sweeps if sweep.direction]
    if not moved:
        return div("sweeps", span("soft", "No sweep yet: the field has not moved."))
    pieces = [span("soft", "Sweeps")]
    if len(moved) > SHOWN:
        pieces.append(span("soft", f"… of {moved[-1].number + 1}, the last"))
    for sweep in moved[-SHOWN:]:
        goes_on = live and sweep is moved[-1]
        pieces.append(
            span(
                "sweep now" if goes_on else "sweep",
                span("arrow", f"{_ARROWS[sweep.direction]} {_WORDS[sweep.direction]}"),
                f" {signed(sweep.from_T, 3)} to {signed(sweep.to_T, 3)} T",
            )
        )
    return div("sweeps", *pieces)
