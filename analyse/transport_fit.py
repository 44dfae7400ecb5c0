"""The fit of one Hall bar at one moment: Hall line and zero-field resistivity, with intervals."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

from scipy.special import fdtri

from analyse.basis import (
    CUBIC,
    CURVED,
    HALL_BENT,
    HALL_LINE,
    LEVEL,
    OTHER_PARITY,
    SLOPING,
    SQUARE,
    regressors,
)
from analyse.confidence import Evidence, Mixture, best_phi
from analyse.joint import Uncertain
from analyse.line_fit import LineFit, fit_columns, lack_of_fit
from analyse.model_spread import far_level, left_by_rounding, slope_rounding
from analyse.segments import Pool
from analyse.setup import Setup

SLOPE_AT = ((0.5, 0.25), (0.5, 0.05))
"""Weights, and the shares of the ramp for which the slope's phis are made."""
LEVEL_AT = 0.1
DEFAULT_EFFECTIVE = 100.0
LACK_OF_FIT_LEVEL = 1e-5
FLOOR, SLOPE_FLOOR = 0.001, 0.0003
"""Shares of rho_0 and of the slope that structure within the window's tolerance can amount to."""
PARITY_COST = 1.3
"""Factor in variance at which the other parity is left to the model part of the uncertainty."""
TAIL_REACH = 0.5
"""Share of the field where rho_xx = rho_xy within which the tail of a peak at zero is looked for."""
RESERVE = 2.0
"""Logarithm of what the joint region costs a coefficient beside another one, about."""
BEND_SEEN = 3.5
"""Standard errors at which the next richer model of the longitudinal resistivity is taken."""


@dataclass(frozen=True)
class Coefficient:
    """A coefficient with all that is said of it, in its own unit.

    ``evidence``: of its confidence sequence, ``half_width``: of that sequence, about as it comes out
    beside another one;
    ``bend``: by how much the next richer model moves
    it, and ``bend_error`` the standard error of that difference; ``noise``: standard deviation of
    an independent reading, ``reading2``: variance of any; ``order``: 0 for the plain model, more where a richer one was needed;
    ``floor`` and ``rounding``: what the window tolerates, and what the readings' last digit may do.
    """

    value: float
    standard_error: float
    evidence: Evidence
    half_width: float
    bend: float
    bend_error: float
    effective: float
    noise: float
    order: int
    floor: float
    rounding: float = 0.0
    reading2: float = 0.0

    @property
    def uncertain(self) -> Uncertain:
        """Its magnitude, for the joint region."""
        return Uncertain(abs(self.value), self.standard_error, self.evidence)

    @property
    def spread(self) -> float:
        """Model spread, as a standard uncertainty: what of the bend is beyond its own noise, and
        what the window tolerates, and the last digit."""
        bend2 = max(0.0, self.bend**2 - self.bend_error**2)
        return math.sqrt(bend2 + self.floor**2 + self.rounding**2)

    def largest_bend(self, factor: float = 1.645) -> float:
        """A bend that the data do not rule out."""
        return abs(self.bend) + factor * self.bend_error


@dataclass(frozen=True)
class TransportFit:
    """Slope in ohm per unit of u, offset and rho_0 in ohm, noise facts of both roles."""

    slope: Coefficient | None
    offset_ohm: float | None
    offset_error_ohm: float
    rho_0: Coefficient | None
    noise_excess_hall: float
    noise_excess_longitudinal: float


@dataclass(frozen=True)
class Models:
    """Which regressors (columns of :mod:`analyse.basis`) each fit uses."""

    hall: tuple[int, ...] = HALL_LINE
    longitudinal: tuple[int, ...] = LEVEL


@dataclass(frozen=True)
class Phis:
    """Mixtures of the two confidence sequences and the scale of u in T, fixed before the data."""

    slope: Mixture
    rho_0: Mixture
    scale_T: float


def fixed_phis(setup: Setup, scale_T: float) -> Phis:
    """Phis that suit a ramp which reaches its answer after some share of its way, or a default.

    Default without a planned ramp: 100 effective readings over a quarter of the scale of field.
    Coverage does not depend on them, only the width does. The slope's sum of squares grows as the
    cube of the field, so that one phi can't serve the whole of a ramp; rho_0's grows with it.
    """
    alpha = 1.0 - setup.target.confidence
    span_T, effective = scale_T, 4 * DEFAULT_EFFECTIVE
    stages = setup.hall.filter
    if setup.ramp is not None:
        span_T = setup.ramp.span_T
        if stages is not None:
            effective = span_T / setup.ramp.rate_T_per_s / stages.integral_time_s
    width = span_T / scale_T

    def phi(share: float, squares: float) -> float:
        return best_phi(max(effective * share, 10.0) * squares, alpha)

    slope = tuple((weight, phi(at, (at * width) ** 2 / 12)) for weight, at in SLOPE_AT)
    return Phis(slope, ((1.0, phi(LEVEL_AT, 1.0)),), scale_T)


def hall_columns(pool: Pool) -> tuple[int, ...]:
    """The Hall line, with the even part where both directions tell it apart at little cost."""
    return HALL_LINE + _other_parity(pool, HALL_LINE, 1)


def longitudinal_columns(pool: Pool) -> tuple[int, ...]:
    """The plainest model that shows no significant bend, with the odd part likewise."""
    odd = _other_parity(pool, LEVEL, 0)
    for plain, richer in ((LEVEL, SLOPING), (SLOPING, CURVED)):
        one, two = fit_columns(pool, plain + odd), fit_columns(pool, richer + odd)
        if one is None or two is None or not _bend_seen(one, two):
            return plain + odd
    return CURVED + odd


def _other_parity(pool: Pool, columns: tuple[int, ...], j: int) -> tuple[int, ...]:
    """The regressor of the other parity, if it costs coefficient j less than PARITY_COST."""
    if not pool.both_directions:
        return ()
    one, two = fit_columns(pool, columns), fit_columns(pool, (*columns, OTHER_PARITY))
    if one is None or two is None or two.inverse(j) > PARITY_COST * one.inverse(j):
        return ()
    return (OTHER_PARITY,)


def _bend_seen(plain: LineFit, richer: LineFit) -> bool:
    bend, error = _bend(plain, richer, 0)
    return abs(bend) > BEND_SEEN * error


def noise_excess(pool: Pool, columns: tuple[int, ...]) -> float:
    """Factor in variance by which segments scatter about the fit more than their readings
    explain; 1 while that is not significant (F test at a level that many looks do not exhaust)."""
    known = lack_of_fit(pool, columns)
    if known is None:
        return 1.0
    ratio, between, within = known
    return ratio if ratio > _f_limit(int(between), int(within)) else 1.0


@lru_cache(maxsize=65536)
def _f_limit(between: int, within: int) -> float:
    return float(fdtri(between, within, 1.0 - LACK_OF_FIT_LEVEL))


def choose_models(hall: Pool, along: Pool) -> Models:
    """The models that suit two pools."""
    return Models(hall_columns(hall), longitudinal_columns(along))


def best_inner(inner: Sequence[Pool], excess: bool, phis: Phis, alpha: float) -> Coefficient | None:
    """rho_0 from that part of the window, of several ever smaller ones, which makes it most
    certain; None if there are none."""
    parts = []
    for pool in inner:
        columns = longitudinal_columns(pool)
        part_excess = excess and noise_excess(pool, columns) > 1
        parts.append(zero_field(pool, columns, part_excess, phis, alpha))
    return min((part for part in parts if part is not None), key=_total, default=None)


def fit_transport(
    setup: Setup, hall: Pool, along: Pool, models: Models, inner: Coefficient | None,
    tail: tuple[float, float] | None, phis: Phis, excess: tuple[float, float],
    digits_ohm: tuple[float, float] = (0.0, 0.0),
) -> TransportFit:
    """Both fits. ``excess``: noise factors (hall, longitudinal); above 1 they widen. ``inner``:
    rho_0 from a smaller part of the window, taken where it is more certain. ``tail``: where a peak
    around zero was left out, its mean and the level far from it. Its tail may reach into the
    window: the smaller of rho_0's distances to the two goes into the model part. ``digits_ohm``:
    last digits of the readings (hall, longitudinal)."""
    alpha = 1.0 - setup.target.confidence
    line = fit_columns(hall, models.hall)
    offset = line.theta[0] if line is not None else None
    offset_error = line.standard_error(0) if line is not None else math.inf
    slope = hall_slope(hall, models.hall, excess[0] > 1, phis, alpha)
    rho_0 = zero_field(along, models.longitudinal, excess[1] > 1, phis, alpha)
    if inner is not None and (rho_0 is None or _total(inner) < _total(rho_0)):
        rho_0 = inner
    if rho_0 is not None:
        reach = min((abs(rho_0.value - level) for level in tail), default=0.0) if tail else 0.0
        crossing = abs(rho_0.value / slope.value) if slope is not None and slope.value else math.inf
        far = far_level(along, models.longitudinal, phis.scale_T, TAIL_REACH * crossing)
        from_far = abs(rho_0.value - far) if far is not None else 0.0
        rho_0 = replace(
            rho_0, floor=math.hypot(rho_0.floor, reach, from_far),
            rounding=left_by_rounding(rho_0.reading2, digits_ohm[1]),
        )
    if slope is not None and digits_ohm[0]:
        rounding = slope_rounding(
            slope.value, slope.reading2, hall, digits_ohm[0], phis.scale_T
        )
        slope = replace(slope, rounding=rounding)
    return TransportFit(slope, offset, offset_error, rho_0, excess[0], excess[1])


def hall_slope(
    pool: Pool, columns: tuple[int, ...], excess: bool, phis: Phis, alpha: float
) -> Coefficient | None:
    """The slope of the Hall line, per unit of u, from one pool."""
    line = fit_columns(pool, columns, excess)
    if line is None:
        return None
    bent = fit_columns(pool, HALL_BENT + columns[2:], excess)
    return _coefficient(line, 1, bent, phis.slope, alpha, pool.effective, SLOPE_FLOOR)


def zero_field(
    pool: Pool, columns: tuple[int, ...], excess: bool, phis: Phis, alpha: float
) -> Coefficient | None:
    """The longitudinal resistivity at zero field from one pool.

    What the model adds between the pool's lower end and zero goes into the model part.
    """
    fit = fit_columns(pool, columns, excess)
    if fit is None:
        return None
    odd = tuple(column for column in columns if column == OTHER_PARITY)
    order = len(columns) - len(odd) - 1
    bent = fit_columns(pool, (SQUARE, CURVED, CUBIC)[order] + odd, excess)
    found = _coefficient(fit, 0, bent, phis.rho_0, alpha, pool.effective, FLOOR, order)
    lowest = regressors("longitudinal", pool.low_T / phis.scale_T)
    beyond = fit.predict((*lowest[:OTHER_PARITY], 0.0))[0] - found.value
    return replace(found, floor=math.hypot(found.floor, beyond))


def _total(part: Coefficient) -> float:
    return part.half_width + part.spread


def _bend(fit: LineFit, bent: LineFit, j: int) -> tuple[float, float]:
    """The difference that the richer model makes, and its standard error: the plain model is
    efficient, so the variance of the difference is the difference of the variances."""
    extra = bent.inverse(j) - fit.inverse(j)
    return bent.theta[j] - fit.theta[j], math.sqrt(max(0.0, bent.variance * extra))


def _coefficient(
    fit: LineFit, j: int, bent: LineFit | None, mixture: Mixture, alpha: float,
    effective: float,
    floor: float, order: int = 0,
) -> Coefficient:
    bend, bend_error = 0.0, math.inf
    if bent is not None and bent.nu > 2:
        bend, bend_error = _bend(fit, bent, j)
    return Coefficient(
        fit.theta[j], fit.standard_error(j), fit.evidence(j, mixture),
        fit.half_width(j, mixture, alpha * math.exp(-RESERVE)),
        bend, bend_error, effective, math.sqrt(fit.variance), order, floor * abs(fit.theta[j]),
        reading2=fit.s2,
    )
