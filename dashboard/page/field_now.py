"""The field at this moment, out of its reader's rows: value, age and rate."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

from acquire.config import Rig
from acquire.readings import Reading

MEMORY_S = 6.0
LEAST_S = 2.0  # over less than that a rate is mostly noise


@dataclass(frozen=True)
class FieldNow:
    """Field in tesla at a time of the run, and its rate in tesla a minute where that is known."""

    field_T: float
    time_s: float
    rate_T_per_min: float | None


class FieldWatch:
    """Follows the readings of the rig's field."""

    def __init__(self, rig: Rig) -> None:
        source = rig.table if rig.table is not None else rig.reader(rig.field.reader)
        names = [value.name for value in source.values]
        self.reader = rig.field.reader
        self._position = names.index(rig.field.value)
        self._scale = source.values[self._position].scale
        self._recent: deque[tuple[float, float]] = deque()

    def take(self, reading: Reading) -> None:
        """Take a row of any reader."""
        if reading.reader != self.reader or reading.status != "ok":
            return
        value = reading.values[self._position]
        if value is None:
            return
        self._recent.append((reading.time_s, value * self._scale))
        while self._recent[0][0] < reading.time_s - MEMORY_S:
            self._recent.popleft()

    def now(self) -> FieldNow | None:
        """The newest field; None before the first."""
        if not self._recent:
            return None
        (first_s, first_T), (last_s, last_T) = self._recent[0], self._recent[-1]
        took_s = last_s - first_s
        rate = (last_T - first_T) / took_s * 60 if took_s >= LEAST_S else None
        return FieldNow(last_T, last_s, rate)
