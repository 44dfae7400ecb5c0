"""What is known of a run while it goes on: the field, the readings, the numbers."""

from __future__ import annotations

from collections.abc import Mapping

from acquire.bus import StreamHealth
from acquire.config import Rig
from acquire.readings import NO_READING, stream_of
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard.streams import reading_tables
from dashboard.summary import Summary

_STATUS, _DETAIL, _TIME = 3, 4, 1


class Progress:
    """Brought up to date row by row, each stream's rows in order."""

    def __init__(self, run_id: str, rig: Rig) -> None:
        self.summary = Summary(run_id, [bar.name for bar in rig.hall_bars], rig.target.confidence)
        self.readings = {reader.name: 0 for reader in rig.readers}
        self.unusable = dict.fromkeys(self.readings, 0)
        self.trouble: dict[str, str] = {}
        self.unrecorded: dict[str, str] = {}  # by stream: why its publisher can't record
        self.field_T: float | None = None
        self.field_time_s: float | None = None
        self._readers = {stream_of(name): name for name in self.readings}
        self._field_stream = stream_of(rig.field.reader)
        self._field_column = reading_tables(rig)[self._field_stream].names.index(rig.field.value)
        self._field_scale = _scale_of_field(rig)

    def take(self, stream: str, row: Row) -> None:
        """Take one row of any stream of the run."""
        if stream == ESTIMATES.stream:
            self.summary.add_estimate(row)
        elif stream == EVENTS.stream:
            self.summary.add_event(row)
        else:
            self._take_reading(stream, row)

    def hear(self, health: Mapping[str, StreamHealth]) -> tuple[list[str], list[str]]:
        """Take note of who can't record. Returns the streams that no more can, and can again."""
        now = {stream: one.trouble for stream, one in health.items() if one.trouble}
        begun, over = sorted(now.keys() - self.unrecorded), sorted(self.unrecorded.keys() - now)
        self.unrecorded = now
        return begun, over

    def _take_reading(self, stream: str, row: Row) -> None:
        status, name = row[_STATUS], self._readers[stream]
        if status == "unheard":
            self.trouble[name] = str(row[_DETAIL])
        if status in NO_READING:
            return
        if status == "ok":
            self.readings[name] += 1
            self.trouble.pop(name, None)
        else:
            self.unusable[name] += 1
            self.trouble[name] = f"{status}: {row[_DETAIL] or 'no more is known'}"
        field = row[self._field_column] if stream == self._field_stream else None
        if status == "ok" and isinstance(field, float):
            self.field_T = field * self._field_scale
            self.field_time_s = row[_TIME]  # type: ignore[assignment]


def _scale_of_field(rig: Rig) -> float:
    values = rig.reader(rig.field.reader).values
    return next(value.scale for value in values if value.name == rig.field.value)
