"""One fit of chosen regressors to pooled segments, with correlated noise taken into account.

With kappa = 1 + 2 sum_k rho(k dt), the variance inflation by the filter's autocorrelation:
s^2 = RSS / (N - p kappa), variance of a coefficient kappa s^2 [(X'X)^-1]_jj, degrees of freedom
nu = N / kappa - p. Where the segments scatter about the fit more than the readings inside them
explain, the segments themselves are the observations: kappa s^2 is then taken from the lack of
fit, with its degrees of freedom. tests/bench shows the coverage.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from analyse.basis import COLUMNS
from analyse.confidence import Evidence, Mixture
from analyse.segments import OWN, Pool
from analyse.square_root import inverse_root, triangle_of


@dataclass(frozen=True)
class LineFit:
    """Coefficients (p,) in ohm, the inverse root of X'X (p, p), ``variance`` of an independent
    reading (kappa s^2), its degrees of freedom ``nu``, and ``kappa``."""

    columns: tuple[int, ...]
    theta: tuple[float, ...]
    root: list[list[float]]
    variance: float
    nu: float
    kappa: float

    def inverse(self, j: int) -> float:
        """[(X'X)^-1]_jj."""
        return sum(one * one for one in self.root[j])

    def predict(self, row: Sequence[float]) -> tuple[float, float]:
        """Value at a row of regressors, and x' (X'X)^-1 x."""
        chosen = [row[column] for column in self.columns]
        value = sum(x * t for x, t in zip(chosen, self.theta))
        p = len(chosen)
        along = (sum(chosen[i] * self.root[i][k] for i in range(k + 1)) for k in range(p))
        return value, sum(one * one for one in along)

    @property
    def s2(self) -> float:
        """Variance of one reading."""
        return self.variance / self.kappa

    def standard_error(self, j: int) -> float:
        """Standard error of coefficient j, for one look at the data."""
        return math.sqrt(self.variance * self.inverse(j))

    def z2(self, j: int) -> float:
        """Effective sum of squares of regressor j after the others are taken out."""
        return 1.0 / (self.kappa * self.inverse(j))

    def evidence(self, j: int, mixture: Mixture) -> Evidence:
        """The e-process of coefficient j."""
        return Evidence(self.nu, self.z2(j), mixture)

    def half_width(self, j: int, mixture: Mixture, alpha: float) -> float:
        """Half-width of the confidence sequence of coefficient j alone."""
        radius = self.evidence(j, mixture).radius(-math.log(alpha))
        return self.standard_error(j) * radius if math.isfinite(radius) else math.inf


def fit_columns(pool: Pool, columns: tuple[int, ...], excess: bool = False) -> LineFit | None:
    """Least squares of the chosen columns; None while they are not determined.

    ``excess``: take the noise from the scatter of the segments instead of the readings.
    """
    p = len(columns)
    kappa = pool.kappa
    nu = pool.count / kappa - p
    if nu <= 0.5:
        return None
    if columns == tuple(range(p)):
        rows = pool.triangle.tolist()
        y = COLUMNS
    else:
        rows = triangle_of(pool.triangle[:, [*columns, COLUMNS]]).tolist()
        y = p
    root = inverse_root(rows, p)
    if root is None:
        return None
    theta = tuple(sum(root[i][k] * rows[k][y] for k in range(i, p)) for i in range(p))
    rss = sum(row[y] ** 2 for row in rows[p:])
    variance = kappa * rss / (pool.count - p * kappa)
    if excess:
        between = OWN * pool.groups - p
        if between < 3:
            return None
        variance = max(variance, (rss - pool.own_rss) / between)
        nu = min(nu, float(between))
    return LineFit(columns, theta, root, variance, nu, kappa)


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
