"""One time line for a run that was measured into several files."""

from __future__ import annotations

import math
from array import array
from collections.abc import Sequence

import numpy as np

from acquire.table.rows import FileRows

FALLBACK_STEP_S = 1.0  # between files of a single row each


def join_times(files: Sequence[FileRows]) -> tuple[array[float], list[float], float]:
    """Times of all rows of timed files, in order, in seconds since the first good row.

    A file that does not begin after the one before it has ended is moved so that it does, by that
    file's median step. Returns the times, by how much each file was moved (0 where it was not),
    and the time of the first good row in its file. Each file needs a good row.
    """
    joined, moves = array("d"), list[float]()
    origin, last, step = math.nan, -math.inf, math.nan
    for rows in files:
        first = next(time_s for time_s in rows.times if not math.isnan(time_s))
        if not moves:
            origin = first
        start = first - origin
        if start <= last:
            start = max(
                last + _first_known(step, _median_step(rows)), math.nextafter(last, math.inf)
            )
        moves.append(start - (first - origin))
        joined.extend(_from(rows.times, first, start))
        last, step = joined[-1], _first_known(_median_step(rows), step)
    return joined, moves, origin


def _from(times: array[float], first: float, start: float) -> array[float]:
    """Times shifted so that ``first`` becomes ``start``, also where none is known yet."""
    shifted = np.frombuffer(times) - first + start
    shifted[np.isnan(shifted)] = start
    return array("d", shifted.tobytes())


def _median_step(rows: FileRows) -> float:
    """The median of the steps between good rows; nan if there is none."""
    good = np.ones(len(rows), dtype=bool)
    good[list(rows.refused)] = False
    steps = np.diff(np.frombuffer(rows.times)[good])
    return float(np.median(steps)) if steps.size else math.nan


def _first_known(*steps: float) -> float:
    return next((step for step in steps if not math.isnan(step)), FALLBACK_STEP_S)
