"""When, and at which field, the target will be met, if the ramp goes on as it does.

The intervals narrow with the field in a known way: with readings spread evenly up to a field B the
slope's effective sum of squares grows as N (B - B_low)^2 / 12 and N with time.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from scipy.constants import e

from analyse.confidence import Evidence
from analyse.joint import Uncertain, half_width
from analyse.lockin import LockinFilter
from analyse.setup import Ramp, Setup, Signal, Target
from analyse.transport_fit import FLOOR, SLOPE_FLOOR, Phis, fixed_phis

LINE_BEND_FACTOR = math.sqrt(5.25)
"""Standard error of the bend over that of the slope: [1, u, u^3] against [1, u], evenly spread
over one polarity."""


@dataclass(frozen=True)
class State:
    """What a forecast starts from: noise per effective reading relative to the coefficients."""

    field_T: float
    low_T: float
    rate_T_per_s: float
    seconds_per_effective: float
    effective: float
    slope_noise: float
    rho_0_noise: float
    mobility_m2_per_V_s: float
    systematic: tuple[float, float, float]


def meets(state: State, field_T: float, target: Target, phis: Phis, scale_T: float) -> bool:
    """Whether the target is expected to be met when the field has grown to ``field_T``.

    ``slope_noise``: noise of an effective reading over the slope, in units of u; ``rho_0_noise``
    likewise over rho_0.
    """
    seconds = max(0.0, field_T - state.field_T) / state.rate_T_per_s
    effective = state.effective + seconds / state.seconds_per_effective
    width = (field_T - state.low_T) / scale_T
    if width <= 0 or effective < 4:
        return False
    alpha = 1.0 - target.confidence
    z2 = effective * width**2 / 12
    error = state.slope_noise / math.sqrt(z2)
    one = Uncertain(1.0, error, Evidence(effective - 2, z2, phis.slope))
    level = state.rho_0_noise / math.sqrt(effective)
    other = Uncertain(1.0, level, Evidence(effective - 1, effective, phis.rho_0))
    slope = half_width(one, other, alpha)
    straight = 1.645 * LINE_BEND_FACTOR * error <= target.sheet_density
    crossed = not target.cross_crossing_field or field_T * state.mobility_m2_per_V_s >= 1.0
    both = math.hypot(slope, half_width(other, one, alpha)) + math.hypot(FLOOR, SLOPE_FLOOR)
    widths = (slope + SLOPE_FLOOR, both, both)
    wanted = (target.sheet_density, target.mobility, target.scattering_time or target.mobility)
    reached = all(
        math.hypot(w, 2 * s) <= t for w, s, t in zip(widths, state.systematic, wanted)
    )
    return straight and crossed and reached


def field_to_target(
    state: State, target: Target, phis: Phis, scale_T: float, end_T: float
) -> float | None:
    """Magnitude of field at which the target is expected to be met; None if not before ``end_T``."""
    if not (state.rate_T_per_s > 0 and end_T > 0):
        return None
    if not meets(state, end_T, target, phis, scale_T):
        return None
    low, high = min(state.field_T, end_T), end_T
    if meets(state, low, target, phis, scale_T):
        return low
    for _ in range(30):
        middle = (low + high) / 2
        if meets(state, middle, target, phis, scale_T):
            high = middle
        else:
            low = middle
    return high


def field_range(
    state: State, nu: float, target: Target, phis: Phis, scale_T: float, end_T: float
) -> tuple[float | None, float | None]:
    """Earliest and latest magnitude of field at which the target may be met: the noise is itself
    only known to about 1 / sqrt(2 nu), taken twofold, and the estimates move by their own errors,
    for which a tenth is added. None where it is not before ``end_T``."""
    share = min(0.5, 0.1 + 2.0 / math.sqrt(2.0 * max(nu, 2.0)))
    ends = []
    for factor in (1.0 - share, 1.0 + share):
        noisy = replace(
            state, slope_noise=state.slope_noise * factor, rho_0_noise=state.rho_0_noise * factor
        )
        ends.append(field_to_target(noisy, target, phis, scale_T, end_T))
    return ends[0], ends[1]


def expected_field(
    *,
    target: Target,
    ramp: Ramp,
    stages: LockinFilter | None,
    spacing_s: float,
    rho_0_ohm: float,
    noise_hall_ohm: float,
    noise_longitudinal_ohm: float,
    density_per_m2: float,
    systematic: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> float | None:
    """Before a ramp: magnitude of field at which the answer is expected to reach the target.

    Parameters
    ----------
    stages, spacing_s
        Filter and spacing of the readings.
    rho_0_ohm
        Resistivity at zero field.
    noise_hall_ohm, noise_longitudinal_ohm
        Standard deviation of one reading of either resistivity.
    density_per_m2
        A density to reckon with.

    None if the planned ramp does not get there. Raises ValueError for numbers not positive.
    """
    if not (rho_0_ohm > 0 and density_per_m2 > 0 and spacing_s > 0):
        raise ValueError("rho_0_ohm, density_per_m2 and spacing_s must be positive")
    scale_T = ramp.largest_T
    slope = scale_T / (density_per_m2 * e)
    kappa = stages.inflation(spacing_s) if stages is not None else 1.0
    start = min(abs(field) for field in ramp.path_T)
    if min(ramp.path_T) <= 0 <= max(ramp.path_T):
        start = 0.0
    state = State(
        start, start, ramp.rate_T_per_s, spacing_s * kappa, 0.0,
        noise_hall_ohm * math.sqrt(kappa) / slope,
        noise_longitudinal_ohm * math.sqrt(kappa) / rho_0_ohm,
        slope / scale_T / rho_0_ohm, systematic,
    )
    phis = fixed_phis(Setup(hall=Signal(stages, resistance=True),
                            longitudinal=Signal(stages, resistance=True),
                            target=target, ramp=ramp), scale_T)
    return field_to_target(state, target, phis, scale_T, scale_T)
