"""The two quick readings of the trade, as a cross-check beside the fit (common practice).

The field in tesla at which the Hall resistivity reaches 6.25 kOhm is the sheet density in
1e15 m^-2 (exactly 6241.5 Ohm; the difference, 0.14 %, is part of the reading's accuracy), and the
field at which longitudinal and Hall resistivity are equal is one over the mobility. Each is read
as an eye would: from a short straight piece through the few points around the crossing.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

HALL_MARK_OHM = 6250.0
_POINTS = 9


@dataclass(frozen=True)
class QuickReading:
    """A reading off the curve: the field in T and its standard uncertainty from the scatter."""

    field_T: float
    uncertainty_T: float

    @property
    def density_per_m2(self) -> float:
        """Read as a sheet density: the field at 6.25 kOhm times 1e15."""
        return self.field_T * 1e15

    @property
    def mobility_m2_per_V_s(self) -> float:
        """Read as a mobility: one over the field of equal resistivities."""
        return 1.0 / self.field_T

    @property
    def relative_uncertainty(self) -> float:
        """Relative standard uncertainty."""
        return self.uncertainty_T / self.field_T


class Crossing:
    """The first zero of a quantity along the magnitude of field, read off nine points."""

    def __init__(self) -> None:
        self.reading: QuickReading | None = None
        self._points: deque[tuple[float, float]] = deque(maxlen=_POINTS)

    def add(self, field_T: float, difference: float) -> None:
        """Take a point: magnitude of field, and what must be zero."""
        if self.reading is not None:
            return
        self._points.append((abs(field_T), difference))
        if len(self._points) < _POINTS:
            return
        points = list(self._points)
        middle = _POINTS // 2
        before, after = points[middle - 1][1], points[middle][1]
        if (before < 0) != (after < 0):
            self.reading = _zero_of_line(points)


SLOPE_SEEN = 8.0
"""Standard errors that the piece's slope must have, or there is no crossing to be read yet; many,
since neighbouring readings share their noise."""


def _zero_of_line(points: list[tuple[float, float]]) -> QuickReading | None:
    n = len(points)
    x0 = sum(x for x, _ in points) / n
    y0 = sum(y for _, y in points) / n
    sxx = sum((x - x0) ** 2 for x, _ in points)
    if sxx <= 0.0:
        return None
    slope = sum((x - x0) * (y - y0) for x, y in points) / sxx
    rss = sum((y - y0 - slope * (x - x0)) ** 2 for x, y in points)
    scatter = math.sqrt(rss / (n - 2))
    if slope <= 0 or slope <= SLOPE_SEEN * scatter / math.sqrt(sxx):
        return None
    zero = x0 - y0 / slope
    low, high = min(x for x, _ in points), max(x for x, _ in points)
    if not (low <= zero <= high and zero > 0):
        return None
    return QuickReading(zero, scatter / slope)


class QuickReadings:
    """Both quick readings from the field points of a ramp."""

    def __init__(self) -> None:
        self._hall_mark = Crossing()
        self._equal = Crossing()

    def add(self, field_T: float, rho_xx: float, rho_xy: float) -> None:
        """Take a field point: field in T, resistivities in ohm."""
        self._hall_mark.add(field_T, abs(rho_xy) - HALL_MARK_OHM)
        self._equal.add(field_T, abs(rho_xy) - abs(rho_xx))

    @property
    def density(self) -> QuickReading | None:
        """The reading at 6.25 kOhm, None before."""
        return self._hall_mark.reading

    @property
    def mobility(self) -> QuickReading | None:
        """The reading at equal resistivities, None before."""
        return self._equal.reading
