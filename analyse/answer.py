"""From the fit to the answer: the three numbers, their budget, the carriers' sign."""

from __future__ import annotations

import math

from analyse.budget import combined
from analyse.drude import density_from_slope, mobility_from, scattering_time_from
from analyse.estimate import BudgetLine, Measured
from analyse.hall_bar import HallBar
from analyse.joint import half_width, ratio_range
from analyse.numbers import Number, make_number
from analyse.transport_fit import Coefficient, TransportFit

Numbers = tuple[Number | None, Number | None, Number | None]


def numbers_of(
    fit: TransportFit,
    scale_T: float,
    bar: HallBar,
    systematic: tuple[BudgetLine, ...],
    confidence: float,
) -> Numbers:
    """Sheet density, mobility and scattering time, each None while it is not known.

    The intervals are the extent of the joint region of slope and rho_0.
    """
    alpha = 1.0 - confidence
    width = _slope_width(fit, alpha)
    slope, rho_0 = fit.slope, fit.rho_0
    s_n, s_mu, s_tau = combined(systematic)
    if slope is None or not abs(slope.value) > width:
        return None, None, None
    a, h = abs(slope.value) / scale_T, width / scale_T
    stat_a, model_a = slope.standard_error / scale_T / a, slope.spread / scale_T / a
    fitted = [(stat_a, slope.evidence.nu)]
    density = make_number(
        density_from_slope(a), density_from_slope(a + h), density_from_slope(a - h),
        stat_a, model_a, s_n, confidence, fitted,
    )
    if density is None or rho_0 is None or rho_0.value <= 0.0:
        return density, None, None
    ends = ratio_range(slope.uncertain, rho_0.uncertain, alpha)
    if ends is None:
        return density, None, None
    r = rho_0.value
    stat = math.hypot(stat_a, rho_0.standard_error / r)
    fitted.append((rho_0.standard_error / r, rho_0.evidence.nu))
    model = math.hypot(model_a, rho_0.spread / r)
    mobilities = (mobility_from(a, r), ends[0] / scale_T, ends[1] / scale_T)
    mobility = make_number(*mobilities, stat, model, s_mu, confidence, fitted)
    mass = bar.carrier_gas.mass_kg(density.value)
    times = (scattering_time_from(mu, mass) for mu in mobilities)
    return density, mobility, make_number(*times, stat, model, s_tau, confidence, fitted)


def _slope_width(fit: TransportFit, alpha: float) -> float:
    """Half-width of the joint region along the slope."""
    slope, rho_0 = fit.slope, fit.rho_0
    if slope is None:
        return math.inf
    return half_width(slope.uncertain, rho_0.uncertain if rho_0 is not None else None, alpha)


def measured(coefficient: Coefficient | None, scale: float = 1.0) -> Measured | None:
    """A coefficient divided by ``scale``, with its statistical and model uncertainty."""
    if coefficient is None:
        return None
    parts = math.hypot(coefficient.standard_error, coefficient.spread)
    return Measured(coefficient.value / scale, parts / scale)


def fitted_lines(fit: TransportFit) -> tuple[BudgetLine, ...]:
    """The statistical and model part of the budget."""
    slope, rho_0 = fit.slope, fit.rho_0
    if slope is None or rho_0 is None or not slope.value or not rho_0.value:
        return ()
    a, r = abs(slope.value), abs(rho_0.value)
    lines = (
        ("Hall slope", "statistical", slope.standard_error / a, True),
        ("zero-field resistivity", "statistical", rho_0.standard_error / r, False),
        ("bend of the Hall line", "model", slope.spread / a, True),
        ("bend of the longitudinal resistivity", "model", rho_0.spread / r, False),
    )
    return tuple(
        BudgetLine(source, kind, u if both else 0.0, u, u) for source, kind, u, both in lines
    )


def carriers_of(fit: TransportFit, confidence: float) -> str:
    """electrons, holes, or unknown while the slope's sign is."""
    slope = fit.slope
    if slope is None or not abs(slope.value) > _slope_width(fit, 1.0 - confidence):
        return "unknown"
    return "holes" if slope.value > 0 else "electrons"
