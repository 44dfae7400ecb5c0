"""Which sweep a field point belongs to: the ramp is cut where the field turns back."""

from __future__ import annotations

import math
import statistics
from collections import deque
from dataclasses import dataclass

from analyse.scatter import scatter_about_line

BLOCK = 8
"""Fields about whose straight line their noise is judged."""
CLEAR = 8.0
"""Standard deviations of the field's noise by which it must have come back to have turned."""

KEPT = 100
"""Sweeps that are remembered, beside the present one."""


@dataclass(frozen=True)
class Sweep:
    """One way of the ramp between two turns.

    ``direction``: 1 up, -1 down, 0 while the field has not moved. Fields in tesla, times in seconds.
    """

    number: int
    direction: int
    from_T: float
    to_T: float
    from_s: float
    to_s: float


class Sweeps:
    """Counts sweeps. A turn counts when the field came back by ``threshold_T`` from its extreme,
    and by more than its own noise explains, which the first few fields tell.
    """

    def __init__(self, threshold_T: float) -> None:
        self.threshold_T = threshold_T
        self.number = 0
        self.direction = 0
        self._done: deque[Sweep] = deque(maxlen=KEPT)
        self._start: tuple[float, float] | None = None
        self._extreme = self._last = (0.0, 0.0)
        self._block: list[tuple[float, float]] = []
        self._noises_T: deque[float] = deque(maxlen=7)

    def add(self, time_s: float, field_T: float) -> int:
        """Take a field; returns the number of the sweep that it belongs to, from 0."""
        here = self._last = (time_s, field_T)
        if self._start is None:
            self._start = self._extreme = here
            return self.number
        self._judge_noise(here)
        away = field_T - self._extreme[1]
        if self.direction == 0:
            if abs(away) > self._clear_T():
                self.direction = 1 if away > 0 else -1
                self._extreme = here
        elif away * self.direction > 0:
            self._extreme = here
        elif abs(away) > self._clear_T():
            self._done.append(self._sweep(self._extreme))
            self.number += 1
            self.direction = -self.direction
            self._start, self._extreme = self._extreme, here
        return self.number

    def all(self) -> tuple[Sweep, ...]:
        """The last sweeps, the present one at the end; empty before the first field."""
        return () if self._start is None else (*self._done, self._sweep(self._last))

    def _sweep(self, end: tuple[float, float]) -> Sweep:
        assert self._start is not None
        return Sweep(self.number, self.direction, self._start[1], end[1], self._start[0], end[0])

    def _judge_noise(self, here: tuple[float, float]) -> None:
        self._block.append(here)
        if len(self._block) == BLOCK:
            self._noises_T.append(scatter_about_line(self._block))
            self._block.clear()

    def _clear_T(self) -> float:
        """A turn inside a block looks like noise there; the median of the last ones has none."""
        if not self._noises_T:
            return math.inf
        return max(self.threshold_T, CLEAR * statistics.median_low(self._noises_T))
