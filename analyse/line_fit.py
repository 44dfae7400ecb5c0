"""One fit of chosen regressors to pooled segments, with correlated noise taken into account.

With kappa = 1 + 2 sum_k rho(k dt), the variance inflation by the filter's autocorrelation:
s^2 = RSS / (N - p kappa), variance of a coefficient kappa s^2 [(X'X)^-1]_jj, degrees of freedom
nu = N / kappa - p. Where the segments scatter about the fit more than the readings inside them
explain, the segments themselves are the observations: kappa s^2 is then taken from the lack of
fit, with its degrees of freedom. tests/bench shows the coverage.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from analyse.basis import COLUMNS
from analyse.confidence import t_radius
from analyse.segments import OWN, Pool


@dataclass(frozen=True)
class LineFit:
    """Coefficients (p,) in ohm, (X'X)^-1 (p, p), ``variance`` of an independent reading (kappa
    s^2), its degrees of freedom ``nu``, and ``kappa``."""

    columns: tuple[int, ...]
    theta: np.ndarray
    inverse: np.ndarray
    variance: float
    nu: float
    kappa: float

    @property
    def s2(self) -> float:
        """Variance of one reading."""
        return self.variance / self.kappa

    def standard_error(self, j: int) -> float:
        """Standard error of coefficient j, for one look at the data."""
        return math.sqrt(self.variance * float(self.inverse[j, j]))

    def z2(self, j: int) -> float:
        """Effective sum of squares of regressor j after the others are taken out."""
        return 1.0 / (self.kappa * float(self.inverse[j, j]))

    def half_width(self, j: int, phi: float, alpha: float) -> float:
        """Half-width of the confidence sequence of coefficient j."""
        return self.standard_error(j) * t_radius(self.nu, self.z2(j), phi, alpha)


def fit_columns(pool: Pool, columns: tuple[int, ...], excess: bool = False) -> LineFit | None:
    """Least squares of the chosen columns; None while they are not determined.

    ``excess``: take the noise from the scatter of the segments instead of the readings.
    """
    p = len(columns)
    kappa = pool.kappa
    nu = pool.count / kappa - p
    if nu <= 0.5:
        return None
    triangle = pool.triangle[:, [*columns, COLUMNS]]
    if columns != tuple(range(p)):
        triangle = np.linalg.qr(triangle, mode="r")
    block = triangle[:p, :p]
    diagonal = np.abs(np.diag(block))
    if not np.all(diagonal > 1e-9 * np.sqrt((block**2).sum(axis=0)) + 1e-300):
        return None
    inverse = np.linalg.inv(block)
    rss = float((triangle[p:, p] ** 2).sum())
    variance = kappa * rss / (pool.count - p * kappa)
    if excess:
        between = OWN * pool.groups - p
        if between < 3:
            return None
        variance = max(variance, (rss - pool.own_rss) / between)
        nu = min(nu, float(between))
    return LineFit(columns, inverse @ triangle[:p, p], inverse @ inverse.T, variance, nu, kappa)


def lack_of_fit(pool: Pool, columns: tuple[int, ...]) -> tuple[float, float, float] | None:
    """(ratio, degrees of freedom between, and within): scatter of the segments about the fit over
    what the readings inside them explain; 1 on average for white noise. None if not known yet."""
    fit = fit_columns(pool, columns)
    between = OWN * pool.groups - len(columns)
    within = pool.own_dof / pool.kappa
    if fit is None or pool.groups < 4 or within < 8 or pool.own_rss <= 0:
        return None
    rss = fit.s2 * (pool.count - len(columns) * fit.kappa)
    ratio = max(0.0, rss - pool.own_rss) / (fit.kappa * between)
    return ratio / (pool.own_rss / pool.own_dof), float(between), within
