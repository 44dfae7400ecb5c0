"""The buffer of a simulated lock-in: samples by its own clock, handed over when they are asked for."""

from __future__ import annotations

import math
from collections import deque

import numpy as np

from acquire.laboratory.lockin import SimulatedLockin
from acquire.laboratory.scenario import Buffer

OVERLOAD = 4.0
_KINDS = {"float32": "f4", "float64": "f8"}


class SimulatedBuffer:
    """Takes a sample every period, as far as it has room.

    Nothing happens inside until it is asked; then it catches up with the time. Call
    :meth:`advance` before anything else is done to the lock-in.
    """

    def __init__(self, section: Buffer, lockin: SimulatedLockin) -> None:
        self._section = section
        self._lockin = lockin
        self._period_s = section.sample_period_s * (1.0 + section.clock_error)
        self._taken: deque[tuple[float, ...]] = deque()
        self._next = 0  # the number of the next sample, which is taken at number * period

    def advance(self, time_s: float) -> None:
        """Take the samples up to a moment."""
        last = math.floor(time_s / self._period_s)
        room = self._section.capacity
        if self._section.when_full == "stops":
            last_taken = min(last, self._next + room - len(self._taken) - 1)
        else:
            last_taken, self._next = last, max(self._next, last - room + 1)
        for number in range(self._next, last_taken + 1):
            self._taken.append(self._sample(number))
        while len(self._taken) > room:
            self._taken.popleft()
        self._next = max(self._next, last + 1)

    def emptied(self) -> str:
        """Everything that is in it, as a reply (bytes as latin-1); it is empty then."""
        taken = np.array(self._taken).reshape(len(self._taken), -1)
        self._taken.clear()
        if self._section.format == "text":
            return ",".join(f"{number:+.6E}" for number in taken.ravel())
        order = "<" if self._section.byte_order == "little" else ">"
        data = taken.astype(order + _KINDS[self._section.format]).tobytes()
        size = str(len(data))
        return f"#{len(size)}{size}" + data.decode("latin-1")

    @property
    def period_text(self) -> str:
        """The period that it claims to have."""
        return f"{self._section.sample_period_s:+.6E}"

    def _sample(self, number: int) -> tuple[float, ...]:
        shown = self._lockin.shown(number * self._period_s)
        status = OVERLOAD if shown.overload else 0.0
        counted = (float(number),) if self._section.counter else ()
        return (shown.x_V, shown.y_V, status, *counted)
