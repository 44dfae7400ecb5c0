"""Confidence sequences: intervals that hold at every moment of a ramp at once.

``t_radius``: Lindon, Ham, Tingley, Bojinov, "Anytime-Valid Linear Models and Regression Adjusted
Causal Inference in Randomized Experiments", arXiv 2210.08589, for one coefficient of a linear
model, in the form with phi fixed before the data (prior variance sigma^2 / phi).
``normal_mixture``: Howard, Ramdas, McAuliffe, Sekhon, Ann. Statist. 49, 1055 (2021).
"""

from __future__ import annotations

import math
from functools import lru_cache

from scipy.special import ndtr, stdtrit

Mixture = tuple[tuple[float, float], ...]
"""Weights, of sum 1, and values of phi; both fixed before the data."""


class Evidence:
    """The e-process of one coefficient at one moment: ``nu`` and ``z2`` as in :func:`t_radius`.

    With several phis it is the weighted mean of their e-processes, which is one again, taken as its
    largest term: hardly less, and easy to turn round. Its logarithm grows with the distance ``t``
    (in standard errors) of a hypothetical value from the estimate. Values within a limit hold the truth,
    at all moments at once, but for a share exp(-limit). ``at_estimate`` is the logarithm where t is
    zero, not above zero itself.
    """

    __slots__ = ("_terms", "at_estimate", "nu", "z2")

    def __init__(self, nu: float, z2: float, mixture: Mixture) -> None:
        self.nu = nu
        self.z2 = z2
        shares = ((weight, phi / (phi + z2)) for weight, phi in mixture) if z2 > 0 else ()
        self._terms = [(math.log(weight) + 0.5 * math.log(r), r) for weight, r in shares if r > 0]
        self.at_estimate = max((start for start, _ in self._terms), default=0.0)

    def against(self, t: float) -> float:
        """The logarithm at a distance of ``t`` standard errors."""
        share, half = t * t / self.nu, 0.5 * (self.nu + 1.0)
        return half * math.log1p(share) + max(
            [start - half * math.log1p(r * share) for start, r in self._terms]
        )

    def radius(self, limit: float) -> float:
        """The distance at which the logarithm reaches ``limit``; infinite if it never does."""
        nearest = math.inf
        for start, r in self._terms if self.nu > 0 else ():
            a = math.exp(2.0 * (start - limit) / (self.nu + 1.0))
            if a >= 1.0:
                return 0.0
            if a > r:
                nearest = min(nearest, self.nu * (1.0 - a) / (a - r))
        return math.sqrt(nearest)


def t_radius(nu: float, z2: float, phi: float, alpha: float) -> float:
    """Half-width of the confidence sequence in units of the standard error.

    Parameters
    ----------
    nu
        Degrees of freedom of the residual variance, > 0.
    z2
        Sum of squares of the coefficient's regressor after the others are taken out.
    phi
        Mixture precision, in the units of ``z2``; fixed before the data.
    alpha
        One minus the confidence.

    Returns infinity while the interval has no bound yet.
    """
    if not (0 < alpha < 1 and phi > 0):
        return math.inf
    return Evidence(nu, z2, ((1.0, phi),)).radius(-math.log(alpha))


def best_phi(z2: float, alpha: float) -> float:
    """The phi whose sequence is narrowest about where the regressor's sum of squares is z2."""
    log2 = 2.0 * math.log(1.0 / alpha)
    return z2 / (log2 + math.log1p(log2))


def normal_mixture(v: float, rho: float, alpha: float) -> float:
    """Two-sided boundary u(v) for a sum of variance v: |S| < u for all time with 1 - alpha."""
    return math.sqrt((v + rho) * math.log((v + rho) / (rho * alpha * alpha)))


RARE = 4.5
"""Standard deviations at which :func:`heavy_tails` makes Student's t as rare as a normal deviate."""


def heavy_tails(nu: float) -> float:
    """By how much a standard error with ``nu`` degrees of freedom has to be enlarged, so that 4.5 of it
    are passed by chance as seldom as 4.5 standard deviations of a normal deviate."""
    return _heavy_tails(max(1, int(nu)))


@lru_cache(maxsize=4096)
def _heavy_tails(nu: int) -> float:
    return max(1.0, float(-stdtrit(nu, ndtr(-RARE))) / RARE)
