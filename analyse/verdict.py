"""Converging or stable: the rule, and what is still in the way of it.

Stable means: all three intervals (which hold however often one looks) are within their targets,
the data rule out a bend that would matter, zero field is in reach of the extrapolation, the ramp
has passed the field where rho_xx = rho_xy, a second kind of carrier is ruled out, and no open caution
touches the answer.
"""

from __future__ import annotations

from dataclasses import dataclass

from analyse.estimate import Caution
from analyse.numbers import Number
from analyse.setup import Target
from analyse.transport_fit import TransportFit

MIN_EFFECTIVE = 12.0


@dataclass(frozen=True)
class Facts:
    """What the rule looks at."""

    numbers: tuple[Number | None, Number | None, Number | None]
    fit: TransportFit
    window_low_T: float
    window_high_T: float
    zero_in_reach: bool
    cautions: tuple[Caution, ...]
    square_rise: tuple[float, float] | None = None


FAR_ENOUGH = 2.0
"""Times the field where rho_xx = rho_xy from which on a second kind of carrier bends the Hall line."""


def _one_carrier(facts: Facts, mobility: float, target: Target) -> bool:
    """Whether a second kind of carrier that matters is ruled out: by the Hall line, straight up to far
    enough, or by rho_xx, which would rise as B^2 (see :func:`analyse.shapes.square_rise`)."""
    if facts.window_high_T * mobility >= FAR_ENOUGH:
        return True
    if facts.square_rise is None:
        return False
    rise, error = facts.square_rise
    return 2 * (max(rise, 0.0) + 1.645 * error) <= target.sheet_density


def what_is_missing(facts: Facts, target: Target) -> tuple[str, ...]:
    """Everything between these facts and stable, one short sentence each; empty means stable."""
    density, mobility, tau = facts.numbers
    slope, rho_0 = facts.fit.slope, facts.fit.rho_0
    if density is None or mobility is None or tau is None or slope is None or rho_0 is None:
        return ("the numbers are not known yet",)
    missing = []
    wanted = (
        ("sheet density", density, target.sheet_density),
        ("mobility", mobility, target.mobility),
        ("scattering time", tau, target.scattering_time or target.mobility),
    )
    for name, number, limit in wanted:
        width = number.relative_half_width
        if width > limit:
            missing.append(f"{name} known to {100 * width:.3g} %, wanted {100 * limit:.3g} %")
    if min(slope.effective, rho_0.effective) < MIN_EFFECTIVE:
        missing.append("too few independent readings")
    if slope.largest_bend() > target.sheet_density * abs(slope.value):
        missing.append("the Hall line is not yet shown to be straight")
    if rho_0.largest_bend() > target.mobility * abs(rho_0.value):
        missing.append("the longitudinal resistivity is not yet shown to be level")
    if not facts.zero_in_reach:
        missing.append("readings near zero field are missing")
    if target.cross_crossing_field and facts.window_high_T * mobility.value < 1.0:
        missing.append(
            f"the field where rho_xx = rho_xy ({1e3 / mobility.value:.3g} mT) is not passed"
        )
    if target.cross_crossing_field and not _one_carrier(facts, mobility.value, target):
        missing.append("a second kind of carrier is not yet ruled out")
    open_codes = [caution.code for caution in facts.cautions if caution.touches_answer]
    if open_codes:
        missing.append(f"open caution: {', '.join(open_codes)}")
    return tuple(missing)
