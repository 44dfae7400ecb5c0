"""The fit of one Hall bar at one moment: Hall line and zero-field resistivity, with intervals."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.stats import f as f_distribution

from analyse.confidence import best_phi
from analyse.line_fit import ONE, U, U2, UU, LineFit, fit_columns
from analyse.segments import Pool
from analyse.setup import Setup
from analyse.window import HALL, LONGITUDINAL

SLOPE_SHARE = 0.8
"""Share of the error probability given to the Hall slope; the rest goes to rho_0, which is
commonly known far better, so that a smaller share costs it little."""
DEFAULT_EFFECTIVE = 100.0
LACK_OF_FIT_LEVEL = 1e-5


@dataclass(frozen=True)
class Coefficient:
    """A coefficient with all that is said of it, in its own unit.

    ``half_width``: of the confidence sequence; ``bend``: by how much the alternative model moves
    it, and ``bend_error`` the standard error of that difference; ``spread`` what of the bend the
    noise does not explain.
    """

    value: float
    standard_error: float
    half_width: float
    bend: float
    bend_error: float
    effective: float

    @property
    def spread(self) -> float:
        """Model spread: what of the bend is beyond its own noise, as a standard uncertainty."""
        return math.sqrt(max(0.0, self.bend**2 - self.bend_error**2))

    def largest_bend(self, factor: float = 1.645) -> float:
        """A bend that the data do not rule out."""
        return abs(self.bend) + factor * self.bend_error


@dataclass(frozen=True)
class TransportFit:
    """Slope in ohm per unit of u, offset and rho_0 in ohm, noise facts of both roles."""

    slope: Coefficient | None
    offset_ohm: float | None
    rho_0: Coefficient | None
    noise_excess_hall: float
    noise_excess_longitudinal: float


@dataclass(frozen=True)
class Phis:
    """Mixture precisions, fixed before the data."""

    slope: float
    rho_0: float


def fixed_phis(setup: Setup, scale_T: float) -> Phis:
    """Phis that suit a ramp which reaches its answer after a quarter, or a documented default.

    Default without a planned ramp: 100 effective readings spread over a quarter of the scale of
    field. Coverage does not depend on them, only the width does, and weakly: too small costs less
    than too large, hence a quarter and not a half.
    """
    alpha = 1.0 - setup.target.confidence
    width, effective = 0.25, DEFAULT_EFFECTIVE
    stages = setup.hall.filter
    if setup.ramp is not None:
        part = setup.ramp.span_T / 4
        width = part / scale_T
        if stages is not None:
            effective = part / setup.ramp.rate_T_per_s / stages.integral_time_s
    effective = max(effective, 10.0)
    return Phis(
        best_phi(effective * width**2 / 12, SLOPE_SHARE * alpha),
        best_phi(effective, (1 - SLOPE_SHARE) * alpha),
    )


def noise_excess(pool: Pool, columns: tuple[int, ...]) -> float:
    """Factor by which segments scatter about the common fit more than their own noise explains.

    1 while that is not significant (F test at a level that many looks do not exhaust).
    """
    fit = fit_columns(pool, columns)
    p = len(columns)
    between = p * (pool.groups - 1)
    if fit is None or pool.groups < 4 or pool.own_dof < 8 * pool.kappa or pool.own_rss <= 0:
        return 1.0
    within = pool.own_rss / pool.own_dof
    ratio = max(0.0, fit.rss - pool.own_rss) / (pool.kappa * between) / within
    limit = f_distribution.isf(LACK_OF_FIT_LEVEL, between, max(1.0, pool.own_dof / pool.kappa))
    return ratio if ratio > limit else 1.0


def fit_transport(
    setup: Setup, hall: Pool, along: Pool, phis: Phis, excess: tuple[float, float]
) -> TransportFit:
    """Both fits. ``excess``: noise factors (hall, longitudinal) that widen the intervals."""
    alpha = 1.0 - setup.target.confidence
    line = fit_columns(hall, HALL, excess[0])
    slope, offset = None, None
    if line is not None:
        bent = fit_columns(hall, (ONE, U, UU), excess[0])
        slope = _coefficient(line, 1, bent, phis.slope, SLOPE_SHARE * alpha)
        offset = float(line.theta[0])
    level = fit_columns(along, LONGITUDINAL, excess[1])
    rho_0 = None
    if level is not None:
        bent = fit_columns(along, (ONE, U2), excess[1])
        rho_0 = _coefficient(level, 0, bent, phis.rho_0, (1 - SLOPE_SHARE) * alpha)
    return TransportFit(slope, offset, rho_0, excess[0], excess[1])


def _coefficient(
    fit: LineFit, j: int, bent: LineFit | None, phi: float, alpha: float
) -> Coefficient:
    error = fit.standard_error(j)
    bend, bend_error = 0.0, math.inf
    if bent is not None and bent.nu > 2:
        bend = float(bent.theta[j] - fit.theta[j])
        # the smaller model is efficient, so the variance of the difference is the difference
        extra = bent.inverse[j, j] - fit.inverse[j, j]
        bend_error = math.sqrt(max(0.0, bent.kappa * bent.s2 * extra))
    return Coefficient(
        float(fit.theta[j]), error, fit.half_width(j, phi, alpha), bend, bend_error,
        fit.count / fit.kappa,
    )
