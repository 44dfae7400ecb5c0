"""Points along a ramp kept to a bounded number, so that what a plot shows of them stays the same.

A plot has fewer pixels than a long ramp has field points. Where many points share a pixel of
field, the outermost ones and the lowest and highest (measured from the line through the outermost)
are what can be seen, so those are kept; a single spike always survives.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class Thinned:
    """Rows of ``columns`` numbers: x, y, further ys. At most ``2 * limit`` are kept.

    Rows come in order of time, each with the number of its sweep; extremes are kept for each
    column but the first.
    """

    def __init__(self, columns: int, limit: int) -> None:
        self._limit = limit
        self._rows: Array = np.empty((2 * limit, columns))
        self._sweeps = np.empty(2 * limit, dtype=np.int64)
        self._count = 0
        self.total = 0

    def add(self, row: Sequence[float], sweep: int) -> None:
        """Take the next row."""
        if self._count == len(self._rows):
            self._thin()
        self._rows[self._count] = row
        self._sweeps[self._count] = sweep
        self._count += 1
        self.total += 1

    def columns(self) -> Array:
        """What is kept, one row of the array a column; the caller's own."""
        return self._rows[: self._count].T.copy()

    def sweeps(self) -> NDArray[np.int64]:
        """The sweep of each row that is kept; the caller's own."""
        return self._sweeps[: self._count].copy()

    def _thin(self) -> None:
        kept = seen(self._rows, self._sweeps, self._limit)
        self._count = len(kept)
        self._rows[: self._count] = self._rows[kept]
        self._sweeps[: self._count] = self._sweeps[kept]


def seen(rows: Array, sweeps: NDArray[np.int64], limit: int) -> NDArray[np.intp]:
    """Positions, ascending, of at most ``limit`` rows that show what all of them show.

    ``rows`` has x first and then one or more ys; first and last row are always among them.
    """
    x, ys = rows[:, 0], rows[:, 1:]
    groups = _groups(x, sweeps, (limit - 2) // (2 + 2 * ys.shape[1]))
    left, right = _least_and_most(x, groups)
    kept = {0, len(x) - 1, *left.tolist(), *right.tolist()}
    index = np.searchsorted(groups[left], groups)  # of each row's group among those there are
    for y in ys.T:
        dx, dy = x[right] - x[left], y[right] - y[left]
        slope = np.divide(dy, dx, out=np.zeros_like(dy), where=dx > 0)
        off_line = y - y[left][index] - slope[index] * (x - x[left][index])
        for positions in _least_and_most(off_line, groups):
            kept.update(positions.tolist())
    return np.array(sorted(kept))


def _least_and_most(
    values: Array, groups: NDArray[np.int64]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Where in each group, in the order of the groups, the least value is, and the greatest."""
    order = np.lexsort((values, groups))
    begins = np.flatnonzero(np.diff(groups[order], prepend=-1))
    return order[begins], order[np.append(begins[1:], len(order)) - 1]


def _groups(x: Array, sweeps: NDArray[np.int64], most: int) -> NDArray[np.int64]:
    """A number for each row, the same where sweep and pixel are; at most ``most`` different ones."""
    sweep = sweeps - sweeps.min()
    count = int(sweep.max()) + 1
    if count > most // 8:  # so many sweeps that they can't be told apart on a plot
        sweep, count = np.zeros_like(sweep), 1
    pixels = most // count
    span = float(np.ptp(x)) or 1.0
    pixel: NDArray[np.int64] = np.minimum(
        ((x - x.min()) / span * pixels).astype(np.int64), pixels - 1
    )
    return sweep * pixels + pixel
