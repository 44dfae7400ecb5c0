"""What a fit can't know of itself: the tail of a peak at zero field, and a coarse last digit."""

from __future__ import annotations

import math

from analyse.basis import CURVED, OTHER_PARITY, SLOPING, regressors
from analyse.line_fit import fit_columns
from analyse.segments import Pool

LEVELLED = 0.4
"""Slope at the far end of the window over that at the near one, below which the curve levels off."""


def left_by_rounding(variance: float, digit: float) -> float:
    """What readings of that variance, rounded to a last digit, may be off by in their mean, however many
    they are: half a digit where their noise is nothing against it, nothing where it is more than half
    of one (noise dithers: the first Fourier component of the rounding error)."""
    scatter = math.sqrt(variance) / digit if digit else math.inf
    if scatter > 2.0:
        return 0.0
    noise2 = max(0.0, scatter * scatter - 1 / 12)
    return digit / 2 * math.exp(-2 * math.pi**2 * noise2)


def slope_rounding(
    slope: float, variance: float, pool: Pool, digit: float, scale_T: float
) -> float:
    """The same for the slope of a line: opposite at both ends, and averaged over the digits in between."""
    both = pool.positive and pool.negative
    width = (pool.high_T + (pool.high_T if both else -pool.low_T)) / scale_T
    rounding = left_by_rounding(variance, digit)
    if width <= 0 or not rounding:
        return 0.0
    passed = max(1.0, abs(slope) * width / digit)
    return 2 * rounding / width / math.sqrt(passed)


def far_level(
    pool: Pool, columns: tuple[int, ...], scale_T: float, reach: float
) -> float | None:
    """The resistivity away from zero field, where the curve looks like the tail of a peak or dip that
    stands there: steepest next to zero, or a straight line, so that it may level off farther out.

    ``reach``: within it, in units of u, the tail is looked for where the curve does not level off in
    the window, but falls on, as the sample's magnetoresistance may. None where the curve is level, or
    ever steeper, as a smooth magnetoresistance is.
    """
    fit = fit_columns(pool, columns) if columns[1:2] == SLOPING[1:] else None
    if fit is None:
        return None
    low, high = pool.low_T / scale_T, pool.high_T / scale_T
    linear, square = fit.theta[1], fit.theta[2] if CURVED[2] in columns else 0.0
    near_slope, far_slope = (linear + 2 * square * u for u in (low, high))
    if abs(far_slope) > abs(near_slope):
        return None
    at = -linear / (2 * square) if near_slope * far_slope < 0 else high
    if low < reach and near_slope * far_slope > LEVELLED * near_slope**2:
        at = min(at, reach)
    return fit.predict((*regressors("longitudinal", at)[:OTHER_PARITY], 0.0))[0]
