"""Pairs kept as a short list of segments: stretches of the ramp, each with its own QR triangle.

A segment is contiguous in time and short in field, so that the window of the fit can be moved
afterwards by taking segments in or leaving them out, and so that what happens between segments
can be compared with what happens inside them. The regressors are those of :mod:`analyse.basis`.
"""

from __future__ import annotations

import itertools
import math

import numpy as np

from analyse.basis import COLUMNS, regressors
from analyse.square_root import SquareRootInformation, triangle_of

MIN_EFFECTIVE = 6.0      # effective readings before a segment may be closed
MAX_EFFECTIVE = 40.0     # and at which it is closed in any case
BINS_PER_OCTAVE = 6.0
MAX_SEGMENTS = 400       # beyond it, neighbours in time are joined
OWN = 2                  # coefficients of a segment's own straight line


class Segment:
    """Readings of one role from a stretch of one sweep."""

    __slots__ = (
        "end_s",
        "first_bin",
        "high_T",
        "kappa_sum",
        "low_T",
        "mean_T_sum",
        "qr",
        "sign",
        "start_s",
        "sweep",
    )

    def __init__(self, sweep: int, time_s: float, field_T: float, bin_number: int) -> None:
        self.sweep = sweep
        self.start_s = self.end_s = time_s
        self.low_T = self.high_T = abs(field_T)
        self.sign = 1 if field_T >= 0 else -1
        self.first_bin = bin_number
        self.kappa_sum = 0.0
        self.mean_T_sum = 0.0
        self.qr = SquareRootInformation(COLUMNS)

    @property
    def count(self) -> int:
        """Number of readings."""
        return self.qr.count

    @property
    def kappa(self) -> float:
        """Variance inflation by the filter's correlation, mean over the readings."""
        return self.kappa_sum / self.qr.count

    @property
    def effective(self) -> float:
        """Effective number of readings."""
        return self.qr.count / self.kappa

    @property
    def mean_field_T(self) -> float:
        """Mean field, signed."""
        return self.mean_T_sum / self.qr.count

    def own_rss(self) -> float:
        """Residual sum of squares about the segment's own straight line."""
        return sum(row[COLUMNS] ** 2 for row in self.qr.rows[OWN:])

    def own_dof(self) -> float:
        """What :meth:`own_rss` is divided by to give the variance of a reading."""
        return max(0.0, self.qr.count - OWN * self.kappa)

    def mean(self) -> float:
        """Mean resistivity."""
        first = self.qr.rows[0]
        return first[COLUMNS] / first[0]

    def add(
        self, time_s: float, field_T: float, row: tuple[float, ...], rho: float, kappa: float
    ) -> None:
        """Take one reading with its row of regressors."""
        size = abs(field_T)
        self.end_s = time_s
        self.low_T = min(self.low_T, size)
        self.high_T = max(self.high_T, size)
        self.kappa_sum += kappa
        self.mean_T_sum += field_T
        self.qr.update(row, rho)

    def join(self, other: Segment) -> None:
        """Take all of a segment that follows in time."""
        self.end_s = other.end_s
        self.low_T = min(self.low_T, other.low_T)
        self.high_T = max(self.high_T, other.high_T)
        self.kappa_sum += other.kappa_sum
        self.mean_T_sum += other.mean_T_sum
        self.qr.merge(other.qr)


class Segments:
    """All segments of one role, in the order of time; the last one still grows."""

    def __init__(self, role: str, scale_T: float) -> None:
        self.role = role
        self.scale_T = scale_T
        self.closed: list[Segment] = []
        self.active: Segment | None = None

    def add(self, sweep: int, time_s: float, field_T: float, rho: float, kappa: float) -> bool:
        """Take one reading; True if a segment was closed before it."""
        bin_number = field_bin(field_T)
        closed = False
        if self.active is not None and self._full(sweep, field_T, bin_number):
            self.closed.append(self.active)
            self.active = None
            closed = True
            if len(self.closed) > MAX_SEGMENTS:
                self._thin()
        if self.active is None:
            self.active = Segment(sweep, time_s, field_T, bin_number)
        row = regressors(self.role, field_T / self.scale_T)
        self.active.add(time_s, field_T, row, rho, kappa)
        return closed

    def all(self) -> list[Segment]:
        """Closed ones and the growing one."""
        return self.closed if self.active is None else [*self.closed, self.active]

    def _full(self, sweep: int, field_T: float, bin_number: int) -> bool:
        active = self.active
        assert active is not None
        if sweep != active.sweep or active.effective >= MAX_EFFECTIVE:
            return True
        if active.effective < MIN_EFFECTIVE:
            return False
        crossed_zero = field_T * active.sign < 0
        return bin_number != active.first_bin or crossed_zero

    def _thin(self) -> None:
        """Join the neighbours that together span the least field; within one sweep and direction
        of the field if there are such, else any, so that the list stays short in any case. The
        newest stays as it is: who uses the segments has not taken it yet."""
        pairs = list(enumerate(itertools.pairwise(self.closed[:-1])))
        alike = [
            pair for pair in pairs
            if pair[1][0].sweep == pair[1][1].sweep and pair[1][0].sign == pair[1][1].sign
        ]
        best = min(alike or pairs, key=lambda pair: _span(*pair[1]))[0]
        self.closed[best].join(self.closed[best + 1])
        del self.closed[best + 1]


def _span(one: Segment, two: Segment) -> float:
    """By how much field two segments together would span, as octaves, a little more if large."""
    ratio = (max(one.high_T, two.high_T) + 1e-3) / (min(one.low_T, two.low_T) + 1e-3)
    return math.log(ratio) + 1e-4 * (one.count + two.count) / 100


def field_bin(field_T: float) -> int:
    """Number of the logarithmic bin of a magnitude of field; 0 below 1 mT."""
    size = abs(field_T)
    return 0 if size < 1e-3 else 1 + int(BINS_PER_OCTAVE * math.log2(size / 1e-3))


class Pool:
    """Several segments taken together. ``positive`` and ``negative`` count effective readings."""

    __slots__ = (
        "count",
        "groups",
        "high_T",
        "kappa_sum",
        "low_T",
        "negative",
        "own_dof",
        "own_rss",
        "positive",
        "triangle",
    )

    def __init__(self) -> None:
        self.triangle = np.zeros((COLUMNS + 1, COLUMNS + 1))
        self.count = 0
        self.kappa_sum = 0.0
        self.own_rss = 0.0
        self.own_dof = 0.0
        self.groups = 0
        self.low_T = math.inf
        self.high_T = 0.0
        self.positive = 0.0
        self.negative = 0.0

    def copy(self) -> Pool:
        """An independent copy."""
        new = Pool()
        for name in Pool.__slots__:
            value = getattr(self, name)
            setattr(new, name, value.copy() if name == "triangle" else value)
        return new

    def take(self, segment: Segment) -> None:
        """Add one segment."""
        self.triangle = triangle_of(np.concatenate((self.triangle, segment.qr.rows)))
        self.count += segment.count
        self.kappa_sum += segment.kappa_sum
        self.own_rss += segment.own_rss()
        self.own_dof += segment.own_dof()
        self.groups += 1
        self.low_T = min(self.low_T, segment.low_T)
        self.high_T = max(self.high_T, segment.high_T)
        if segment.sign > 0:
            self.positive += segment.effective
        else:
            self.negative += segment.effective

    @property
    def kappa(self) -> float:
        """Variance inflation by the filter's correlation, mean over the readings."""
        return self.kappa_sum / self.count if self.count else 1.0

    @property
    def effective(self) -> float:
        """Effective number of readings."""
        return self.count / self.kappa

    @property
    def both_directions(self) -> bool:
        """Whether both directions of the field have a fair share of the readings."""
        return min(self.positive, self.negative) > max(10.0, 0.15 * self.effective)
