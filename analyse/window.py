"""The field window in which the curves are Drude's: found from the segments, from both ends.

Segments are sorted by the magnitude of field. Beginning with those next to zero, each further one
must agree with the fit to the ones before: its mean within the noise or within a tolerance, and
its scatter no more than theirs. The window ends below the first one that does not (oscillations,
plateaus, a bend). If what lies next to zero is itself apart (a peak or dip around zero field), a
later beginning that leads further is taken, and what then still lies below and does not agree with
what lies above is left out; for the longitudinal resistivity alone, since the Hall line holds there,
and only far below the field where rho_xx = rho_xy.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

from scipy.special import fdtri, stdtrit

from analyse.basis import CURVED, HALL_LINE, LEVEL, regressors
from analyse.line_fit import LineFit, fit_columns
from analyse.segments import Pool, Segment
from analyse.setup import Window

CORE_EFFECTIVE = 16.0        # effective readings before a segment is compared with them
ODD_LEVEL = 1e-7             # chance of calling a good segment odd; many are looked at, often
TOLERANCE = 0.003
"""Departures smaller than this share of rho_0, or of the Hall resistivity, do not end the window;
what they can do to the numbers is in the model part of the uncertainty (transport_fit.FLOOR)."""
MODEL = {"longitudinal": CURVED, "hall": HALL_LINE}
PEAK_SHARE = 0.3
"""A peak or dip around zero field is left out up to this share of the field where rho_xx =
rho_xy: weak localisation is narrower, what a second kind of carrier does is wider."""
WANTED = {"longitudinal": 0, "hall": 1}
"""The coefficient that the window is for: rho at zero field, and the slope."""


@dataclass(frozen=True)
class Bounds:
    """Magnitudes of field; ``high_T`` is inf while no end was found."""

    low_T: float
    high_T: float

    def holds(self, segment: Segment) -> bool:
        """Whether a segment lies in the window."""
        return segment.low_T >= self.low_T and segment.high_T <= self.high_T


def agrees(segment: Segment, pool: Pool, role: str, scale_T: float) -> bool:
    """Whether a segment agrees with the fit to a pool. True while that can't be told."""
    columns = MODEL[role]
    fit = fit_columns(pool, columns)
    if fit is None or fit.nu < 4:
        return True
    u = segment.mean_field_T / scale_T
    predicted, leverage = fit.predict(regressors(role, u))
    limit = TOLERANCE * _size(fit, role, u)
    variance = fit.variance * (1.0 / segment.count + leverage)
    departure = abs(segment.mean() - predicted)
    if departure > limit and departure > _t_limit(int(fit.nu)) * math.sqrt(variance):
        return False
    return not is_rough(segment, fit, limit)


def is_rough(segment: Segment, fit: LineFit, limit: float) -> bool:
    """Whether a segment scatters about its own line more than a fit's readings do, beyond
    ``limit``: a ripple inside it."""
    dof = segment.own_dof() / segment.kappa
    if dof <= 2:
        return False
    own = segment.own_rss() / segment.own_dof()
    return own - fit.s2 > limit**2 and own > _f_limit(int(dof), int(fit.nu)) * fit.s2


@lru_cache(maxsize=4096)
def _t_limit(nu: int) -> float:
    return float(stdtrit(nu, 1.0 - ODD_LEVEL / 2))


@lru_cache(maxsize=4096)
def _f_limit(one: int, two: int) -> float:
    return float(fdtri(one, two, 1.0 - ODD_LEVEL))


def _size(fit: LineFit, role: str, u: float) -> float:
    return abs(fit.theta[0]) if role == "longitudinal" else abs(fit.theta[1] * u)


def homogeneous_run(
    segments: list[Segment], role: str, scale_T: float, lowest_T: float = 0.0
) -> Bounds:
    """The window that one role's segments (any order) allow; it begins at ``lowest_T`` at most."""
    ordered = sorted(segments, key=lambda one: one.low_T)
    if not ordered:
        return Bounds(0.0, math.inf)
    best, best_information = Bounds(0.0, math.inf), -1.0
    for start in (0, 1, 2, 3, 5, 8, 12, 17):
        if start and (start >= len(ordered) - 2 or ordered[start].low_T > lowest_T):
            break
        stop, information = _grow(ordered, start, role, scale_T)
        low = 0.0 if start == 0 else ordered[start].low_T
        high = math.inf if stop == len(ordered) else ordered[stop].low_T
        if information > 1.5 * best_information:
            best, best_information = Bounds(low, high), information
        if stop == len(ordered) and start == 0:
            break
    if lowest_T > 0:
        best = _without_peak(ordered, best, role, scale_T, lowest_T)
    return best


def _without_peak(
    ordered: list[Segment], bounds: Bounds, role: str, scale_T: float, lowest_T: float
) -> Bounds:
    """Leave out all up to the uppermost segment below ``lowest_T`` that does not agree with what
    lies above it (where the field reading has an offset, a peak is not at its zero)."""
    inside = [one for one in ordered if bounds.holds(one)]
    below = [one for one in inside if one.low_T <= lowest_T]
    pool = Pool()
    for one in inside[len(below) :]:
        pool.take(one)
    while below and pool.effective < CORE_EFFECTIVE:
        pool.take(below.pop())
    odd = [one.high_T for one in below if not agrees(one, pool, role, scale_T)]
    if not odd:
        return bounds
    above = [one.low_T for one in inside if one.low_T > max(odd)]
    return Bounds(min(above), bounds.high_T) if above else bounds


def _grow(
    ordered: list[Segment], start: int, role: str, scale_T: float
) -> tuple[int, float]:
    pool = Pool()
    for index in range(start, len(ordered)):
        segment = ordered[index]
        ready = pool.effective >= CORE_EFFECTIVE and pool.groups >= 2
        if ready and not agrees(segment, pool, role, scale_T):
            return index, _information(pool, role)
        pool.take(segment)
    return len(ordered), _information(pool, role)


def _information(pool: Pool, role: str) -> float:
    fit = fit_columns(pool, MODEL[role])
    return 0.0 if fit is None else fit.z2(WANTED[role])


def find_bounds(
    given: Window, longitudinal: list[Segment], hall: list[Segment], scale_T: float
) -> Bounds:
    """The window for both roles: what was given, and for the rest what both allow."""
    if given.low_T is not None and given.high_T is not None:
        return Bounds(given.low_T, given.high_T)
    two = homogeneous_run(hall, "hall", scale_T)
    pools = Pool(), Pool()
    for pool, segments in zip(pools, (hall, longitudinal), strict=True):
        for segment in segments:
            if two.holds(segment):
                pool.take(segment)
    crossing_T = crossing(*pools, scale_T)
    one = homogeneous_run(longitudinal, "longitudinal", scale_T, PEAK_SHARE * crossing_T)
    low = max(one.low_T, two.low_T) if given.low_T is None else given.low_T
    high = min(one.high_T, two.high_T) if given.high_T is None else given.high_T
    return Bounds(low, max(high, low))


def crossing(hall: Pool, along: Pool, scale_T: float) -> float:
    """About where rho_xx = rho_xy, in T; 0 while it is not known."""
    line, level = fit_columns(hall, HALL_LINE), fit_columns(along, LEVEL)
    if line is None or level is None or not line.theta[1]:
        return 0.0
    return abs(level.theta[0] / line.theta[1]) * scale_T
