"""Confidence sequences: intervals that hold at every moment of a ramp at once.

``t_radius``: Lindon, Ham, Tingley, Bojinov, "Anytime-Valid Linear Models and Regression Adjusted
Causal Inference in Randomized Experiments", arXiv 2210.08589, for one coefficient of a linear
model, in the form with phi fixed before the data (prior variance sigma^2 / phi).
``normal_mixture``: Howard, Ramdas, McAuliffe, Sekhon, Ann. Statist. 49, 1055 (2021).
"""

from __future__ import annotations

import math


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
    if not (nu > 0 and z2 > 0 and phi > 0 and 0 < alpha < 1):
        return math.inf
    r = phi / (phi + z2)
    a = (r * alpha * alpha) ** (1.0 / (nu + 1.0))
    if a <= r:
        return math.inf
    return math.sqrt(nu * (1.0 - a) / (a - r))


def t_evidence(t: float, nu: float, z2: float, phi: float) -> float:
    """The e-process against a hypothetical value ``t`` standard errors away."""
    r = phi / (phi + z2)
    return math.sqrt(r) * ((1 + t * t / nu) / (1 + r * t * t / nu)) ** ((nu + 1) / 2)


def best_phi(z2: float, alpha: float) -> float:
    """The phi whose sequence is narrowest about where the regressor's sum of squares is z2."""
    log2 = 2.0 * math.log(1.0 / alpha)
    return z2 / (log2 + math.log1p(log2))


def normal_mixture(v: float, rho: float, alpha: float) -> float:
    """Two-sided boundary u(v) for a sum of variance v: |S| < u for all time with 1 - alpha."""
    return math.sqrt((v + rho) * math.log((v + rho) / (rho * alpha * alpha)))
