"""The uncertainty budget: which source enters which number, after the GUM (JCGM 100:2008).

Relative sensitivities are 1 or 0 here: with n = I B / (e V_xy), mu = V_xy squares / (V_xx B) and
tau = mu m / e the density needs current and field but not the geometry, the mobility geometry and
field but not the current, and only the scattering time needs the mass.
"""

from __future__ import annotations

import math

from analyse.estimate import BudgetLine
from analyse.hall_bar import HallBar
from analyse.setup import Setup


def systematic_lines(bar: HallBar, setup: Setup) -> tuple[BudgetLine, ...]:
    """The systematic part of the budget, lines without effect left out."""
    excitation = setup.excitation
    current = 0.0 if excitation is None else excitation.relative_uncertainty
    if excitation is not None and excitation.measured is not None:
        current = math.hypot(current, excitation.measured.relative_uncertainty)
    ratio = not (setup.hall.resistance or setup.longitudinal.resistance)
    mobility_current = 0.0 if ratio else current
    hall, along = setup.hall.relative_uncertainty, setup.longitudinal.relative_uncertainty
    field, squares = setup.field.relative_uncertainty, bar.squares_relative_uncertainty
    mass = bar.mass_relative_uncertainty
    lines = (
        BudgetLine("current", "systematic", current, mobility_current, mobility_current),
        BudgetLine("Hall voltage gain", "systematic", hall, hall, hall),
        BudgetLine("longitudinal voltage gain", "systematic", 0.0, along, along),
        BudgetLine("field calibration", "systematic", field, field, field),
        BudgetLine("length over width", "systematic", 0.0, squares, squares),
        BudgetLine("effective mass", "systematic", 0.0, 0.0, mass),
    )
    return tuple(
        line for line in lines if line.sheet_density or line.mobility or line.scattering_time
    )


def combined(lines: tuple[BudgetLine, ...]) -> tuple[float, float, float]:
    """Relative standard uncertainties of the three numbers, lines added in quadrature."""
    return (
        math.sqrt(sum(line.sheet_density**2 for line in lines)),
        math.sqrt(sum(line.mobility**2 for line in lines)),
        math.sqrt(sum(line.scattering_time**2 for line in lines)),
    )
