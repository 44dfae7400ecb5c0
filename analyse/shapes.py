"""Shapes of the two curves inside the window, for the cautions: fall-off, rise, sweeps apart."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

from analyse.basis import HALL_LINE, HALL_SAGGING, LEVEL, SLOPING, SQUARE, regressors
from analyse.confidence import heavy_tails
from analyse.line_fit import LineFit, fit_columns
from analyse.segments import Pool, Segment
from analyse.window import TOLERANCE, is_rough

Line = tuple[float, float, float]

FAR = 3.0
"""Times the window's upper end: what is said to be far above it."""
STEADY = 0.7
"""Mean over root mean square of departures that are steady."""


@dataclass(frozen=True)
class Shapes:
    """What was seen when a segment was last closed; see the functions here."""

    along_bend: tuple[float, float] | None = None
    hall_bend: tuple[float, float] | None = None
    along_line: Line | None = None
    hall_line: Line | None = None
    sweeps_apart: SweepsApart | None = None
    square_rise: tuple[float, float] | None = None
    beyond: tuple[float, float] | None = None
    ripples: bool = False
    falls_beyond: tuple[tuple[float, float], tuple[float, float]] | None = None


@dataclass(frozen=True)
class SweepsApart:
    """Distance of two sweeps' Hall lines along the field, its standard error, and the delay in
    seconds that would explain it (None if they went at different rates)."""

    field_T: float
    error_T: float
    delay_s: float | None


def fall_off(pool: Pool, role: str, scale_T: float) -> tuple[float, float] | None:
    """(share by which a curve falls off at the window's end, standard error): for the Hall line
    the bend over the slope, for the longitudinal resistivity its slope over the level."""
    fit = fit_columns(pool, HALL_SAGGING if role == "hall" else SLOPING)
    if fit is None or fit.nu < 10:
        return None
    top, bottom = (2, 1) if role == "hall" else (1, 0)
    end = pool.high_T / scale_T
    if not fit.theta[bottom]:
        return None
    share = -fit.theta[top] / fit.theta[bottom] * end
    return share, abs(fit.standard_error(top) / fit.theta[bottom]) * end * heavy_tails(fit.nu)


def straight(pool: Pool, role: str, scale_T: float) -> Line | None:
    """(rise over the window, its standard error, value at zero field) of a straight line."""
    fit = fit_columns(pool, HALL_LINE if role == "hall" else SLOPING)
    if fit is None or fit.nu < 20:
        return None
    end = pool.high_T / scale_T
    return fit.theta[1] * end, fit.standard_error(1) * end, fit.theta[0]


def sweeps_apart(segments: list[Segment], scale_T: float) -> SweepsApart | None:
    """How far the last two sweeps' Hall lines are apart along the field.

    ``segments``: closed ones of the Hall resistivity inside the window. None unless two sweeps
    cover a common stretch of field well enough.
    """
    numbers = sorted({segment.sweep for segment in segments})[-2:]
    if len(numbers) < 2:
        return None
    groups = [[one for one in segments if one.sweep == number] for number in numbers]
    fits = [_fit(group) for group in groups]
    if any(fit is None or fit.nu < 10 for fit in fits):
        return None
    ranges = [(min(map(_field, g)), max(map(_field, g))) for g in groups]
    low, high = max(r[0] for r in ranges), min(r[1] for r in ranges)
    if high <= low:
        return None
    row = (1.0, (low + high) / 2 / scale_T)
    values = [
        (*fit.predict(row), fit.variance * heavy_tails(fit.nu) ** 2) for fit in fits if fit is not None
    ]
    slope = sum(fit.theta[1] for fit in fits if fit is not None) / 2 / scale_T
    if not slope:
        return None
    apart = (values[1][0] - values[0][0]) / slope
    error = math.sqrt(sum(variance * leverage for _, leverage, variance in values)) / abs(slope)
    return SweepsApart(apart, error, _delay(groups, apart))


def _fit(group: list[Segment]) -> LineFit | None:
    pool = Pool()
    for segment in group:
        pool.take(segment)
    return fit_columns(pool, HALL_LINE)


def _field(segment: Segment) -> float:
    return segment.mean_field_T


def _delay(groups: list[list[Segment]], apart: float) -> float | None:
    rates = []
    for group in groups:
        seconds = group[-1].start_s - group[0].start_s
        if seconds <= 0:
            return None
        rates.append((group[-1].mean_field_T - group[0].mean_field_T) / seconds)
    if not rates[0] or not 0.8 < -rates[1] / rates[0] < 1.25:
        return None
    return apart / (rates[1] - rates[0])


def square_rise(pool: Pool, crossing_T: float, scale_T: float) -> tuple[float, float] | None:
    """(share by which rho_xx has risen as B^2 at the field where rho_xx = rho_xy, its error).

    Two kinds of carriers, the second slow and with a small share s of the conductivity, give
    s (mu B)^2, that is s at this field, and a Hall slope that is wrong by about 2 s.
    """
    fit = fit_columns(pool, SQUARE)
    if fit is None or fit.nu < 10 or not fit.theta[0]:
        return None
    at = (crossing_T / scale_T) ** 2
    error = abs(fit.standard_error(1) / fit.theta[0]) * at
    return fit.theta[1] / fit.theta[0] * at, error * heavy_tails(fit.nu)


def beyond_window(
    hall: Pool, segments: list[Segment], high_T: float, scale_T: float
) -> tuple[float, float] | None:
    """(mean relative departure from the Hall line above the window, its error), if it is steady.

    Looks at segments between the window's end and twice that field. Oscillations and plateaus
    depart to both sides; a second kind of carrier, or a sagging current, to one. None if fewer
    than four segments lie there or their departures are not of one sign and kind.
    """
    fit = fit_columns(hall, HALL_LINE)
    outside = [one for one in segments if high_T <= one.low_T and one.high_T <= 2 * high_T]
    if fit is None or fit.nu < 10 or len(outside) < 4 or not fit.theta[1]:
        return None
    departures, errors = [], []
    for one in outside:
        u = one.mean_field_T / scale_T
        value, leverage = fit.predict(regressors("hall", u))
        size = abs(fit.theta[1] * u)
        departures.append((one.mean() - value) * math.copysign(1.0, fit.theta[1] * u) / size)
        errors.append(math.sqrt(fit.variance * (leverage + 1.0 / one.count)) / size)
    mean = sum(departures) / len(departures)
    rms = math.sqrt(sum(d * d for d in departures) / len(departures))
    if abs(mean) < STEADY * rms:
        return None
    return mean, max(errors)


def falls_beyond(
    pools: tuple[Pool, Pool], segments: tuple[list[Segment], list[Segment]], high_T: float,
    scale_T: float,
) -> tuple[tuple[float, float], tuple[float, float]] | None:
    """(share by which it falls short of the window's fit, error), of the longitudinal and the Hall
    resistivity, far above the window; None if little was measured there.

    ``pools``, ``segments``: (hall, longitudinal). A current that sags takes the same share of both.
    """
    found = []
    models = (("hall", HALL_LINE), ("longitudinal", LEVEL))
    for pool, closed, (role, columns) in zip(pools, segments, models, strict=True):
        fit = fit_columns(pool, columns)
        far = [one for one in closed if one.low_T >= FAR * high_T]
        if fit is None or len(far) < 3:
            return None
        shares, errors = [], []
        for one in far:
            value, leverage = fit.predict(regressors(role, one.mean_field_T / scale_T))
            if not value:
                return None
            shares.append(1.0 - one.mean() / value)
            errors.append(math.sqrt(fit.variance * (leverage + 1.0 / one.effective)) / abs(value))
        found.append((sum(shares) / len(shares), max(errors) * heavy_tails(fit.nu)))
    return found[1], found[0]


def ripples(along: Pool, segments: list[Segment], high_T: float, scale_T: float) -> bool:
    """Whether the longitudinal resistivity oscillates above the window: it scatters inside
    segments, or departs from the fit now to one side and now to the other."""
    fit = fit_columns(along, SLOPING)
    outside = sorted(
        (one for one in segments if high_T <= one.low_T <= 4 * high_T), key=lambda one: one.low_T
    )
    if fit is None or fit.nu < 10 or not outside:
        return False
    limit = TOLERANCE * abs(fit.theta[0])
    if any(is_rough(one, fit, limit) for one in outside):
        return True
    sides = []
    for one in outside:
        value, leverage = fit.predict(regressors("longitudinal", one.mean_field_T / scale_T))
        error = math.sqrt(fit.variance * (leverage + 1.0 / one.count))
        if abs(one.mean() - value) > max(limit, 4.5 * error):
            sides.append(one.mean() > value)
    return sum(a != b for a, b in itertools.pairwise(sides)) >= 2
