"""One fit of chosen regressors to pooled segments, with correlated noise taken into account.

With kappa = 1 + 2 sum_k rho(k dt), the variance inflation by the filter's autocorrelation:
s^2 = RSS / (N - p kappa), variance of a coefficient kappa s^2 [(X'X)^-1]_jj, degrees of freedom
nu = N / kappa - p. Exact for neither small N nor irregular spacing; tests/bench shows the coverage.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from analyse.confidence import t_radius
from analyse.segments import COLUMNS, Pool

ONE, U, U2, UU = range(COLUMNS)
"""Columns: 1, u, u^2, u|u|."""


@dataclass(frozen=True)
class LineFit:
    """Coefficients (p,) in the units of resistivity, (X'X)^-1 (p, p), and the noise."""

    theta: np.ndarray
    inverse: np.ndarray
    rss: float
    count: int
    kappa: float

    @property
    def nu(self) -> float:
        """Effective degrees of freedom."""
        return self.count / self.kappa - len(self.theta)

    @property
    def s2(self) -> float:
        """Variance of one reading."""
        return self.rss / (self.count - len(self.theta) * self.kappa)

    def standard_error(self, j: int) -> float:
        """Standard error of coefficient j, for one look at the data."""
        return math.sqrt(self.kappa * self.s2 * self.inverse[j, j])

    def z2(self, j: int) -> float:
        """Effective sum of squares of regressor j after the others are taken out."""
        return 1.0 / (self.kappa * self.inverse[j, j])

    def half_width(self, j: int, phi: float, alpha: float) -> float:
        """Half-width of the confidence sequence of coefficient j."""
        return self.standard_error(j) * t_radius(self.nu, self.z2(j), phi, alpha)


def fit_columns(pool: Pool, columns: tuple[int, ...], inflation: float = 1.0) -> LineFit | None:
    """Least squares of the chosen columns; None while they are not determined.

    ``inflation`` multiplies kappa where the residuals show more than the filter explains.
    """
    p = len(columns)
    kappa = pool.kappa * inflation
    if pool.count / kappa - p <= 0.5:
        return None
    wanted = [*columns, COLUMNS]
    triangle = pool.triangle[:, wanted]
    if columns != tuple(range(p)):
        triangle = np.linalg.qr(triangle, mode="r")
    block = triangle[:p, :p]
    diagonal = np.abs(np.diag(block))
    if not np.all(diagonal > 1e-9 * np.sqrt((block**2).sum(axis=0)) + 1e-300):
        return None
    inverse = np.linalg.inv(block)
    rss = float((triangle[p:, p] ** 2).sum())
    return LineFit(inverse @ triangle[:p, p], inverse @ inverse.T, rss, pool.count, kappa)
