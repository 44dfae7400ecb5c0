"""Whether the field stands, told from its readings alone."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from statistics import linear_regression

from acquire.config.hold import LEAST_READINGS, HoldSection

Readings = Sequence[tuple[float, float]]


class Standing:
    """Takes field readings (time in s, field in T) in their order.

    It stands when the last ``standing_for_s`` are covered by at least six readings, three in
    either half, and these fulfil the configured criterion. The slope is looked at in both halves:
    over the whole, a field that turns round in the middle would look as if it stood.
    """

    def __init__(self, section: HoldSection) -> None:
        self._section = section
        self._recent: deque[tuple[float, float]] = deque()

    def add(self, time_s: float, field_T: float) -> None:
        """Take a reading; one that is not later than the one before is passed over."""
        if self._recent and time_s <= self._recent[-1][0]:
            return
        self._recent.append((time_s, field_T))
        while len(self._recent) > 1 and self._recent[1][0] <= time_s - self._section.standing_for_s:
            self._recent.popleft()

    @property
    def field_T(self) -> float | None:
        """The mean over the time looked at; None before any reading."""
        fields = [field for _, field in self._recent]
        return sum(fields) / len(fields) if fields else None

    @property
    def stands(self) -> bool:
        """Whether it stands by now."""
        if len(self._recent) < LEAST_READINGS:
            return False
        begin, end = self._recent[0][0], self._recent[-1][0]
        if end - begin < self._section.standing_for_s:
            return False
        middle = (begin + end) / 2
        halves = ([r for r in self._recent if r[0] < middle],
                  [r for r in self._recent if r[0] >= middle])  # fmt: skip
        if min(map(len, halves)) < LEAST_READINGS // 2:
            return False
        if self._section.standing_T is not None:
            fields = [field for _, field in self._recent]
            return max(fields) - min(fields) <= self._section.standing_T
        limit = self._section.standing_T_per_min
        assert limit is not None
        return all(abs(_slope_T_per_min(half)) <= limit for half in halves)


def _slope_T_per_min(readings: Readings) -> float:
    times, fields = zip(*readings)
    return 60.0 * float(linear_regression(times, fields).slope)
