"""Three rules of today's habit, for comparison: refit the Hall line after each point, and stop.

All three get the readings in the kindest way: the field is the measured one moved by the settled
lag, and what was read within a dozen time constants of the start is left out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import t as student

from bench.case import Case
from bench.rc_stages import Array
from bench.setting import TARGET

RULES = ("still for 20 points", "standard error", "filter known, one look")
FEWEST = 10
STILL_POINTS, STILL = 20, 0.005
SETTLING = 12.0


@dataclass(frozen=True)
class Stop:
    """Where a rule stopped: field swept in T (inf: never), and whether its nominal 95 % interval
    of the density held the truth there."""

    swept_T: float
    held: bool


def naive_stops(case: Case) -> dict[str, Stop]:
    """Where each rule stopped in a ramp with a single carrier."""
    field_T, volts, swept = _pairs(case)
    if len(field_T) < FEWEST + STILL_POINTS:
        return {rule: Stop(float("inf"), False) for rule in RULES}
    slope, scatter, spread = _running_line(field_T, volts)
    count = np.arange(1, len(field_T) + 1)
    steady = _inflation(case)
    alone = np.sqrt(scatter / np.maximum(count - 2, 1) / spread)
    together = np.sqrt(steady * scatter / np.maximum(count - 2 * steady, 0.1) / spread)
    dof = np.maximum(count / steady - 2, 0.5)
    density = 1.0 / np.abs(slope)
    enough = count > FEWEST
    still = np.zeros(len(count), bool)
    windows = np.lib.stride_tricks.sliding_window_view(density, STILL_POINTS + 1)
    change = np.ptp(windows, axis=1) / density[STILL_POINTS:]
    still[STILL_POINTS:] = change < STILL
    wide = student.ppf(0.975, dof) * together
    truth = case.rig.current_A * case.sample.hall_slope
    plain = student.ppf(0.975, np.maximum(count - 2, 1)) * alone
    rules = (
        (still & enough, plain),
        ((alone / np.abs(slope) < TARGET) & enough, plain),
        ((wide / np.abs(slope) < TARGET) & enough & (count / steady > 4), wide),
    )
    return {
        rule: _stop(met, np.abs(slope - truth) <= half, swept)
        for rule, (met, half) in zip(RULES, rules)
    }


def _stop(met: Array, held: Array, swept: Array) -> Stop:
    if not met.any():
        return Stop(float("inf"), False)
    first = int(np.argmax(met))
    return Stop(float(swept[first]), bool(held[first]))


def _pairs(case: Case) -> tuple[Array, Array, Array]:
    """(field, Hall voltage, field swept), settled readings only."""
    hall, meter = case.streams["hall"], case.streams["field"]
    stages = case.rig.hall.stages
    good = np.isfinite(meter.x)
    known_s = meter.time_s[good] - case.rig.meter.delay_s
    field_T = np.interp(hall.time_s - stages.lag_s, known_s, meter.x[good])
    settled = hall.time_s > case.profile.start_s + SETTLING * stages.time_constant_s
    use = np.isfinite(hall.x) & settled & (hall.time_s - stages.lag_s >= known_s[0])
    return field_T[use], hall.x[use], case.profile.swept(hall.time_s)[use]


def _running_line(x: Array, y: Array) -> tuple[Array, Array, Array]:
    """(slope, residual sum of squares, sum of squares of x) of the line after each point."""
    x0, y0 = x[0], y[0]
    u, v = x - x0, (y - y0) / max(float(np.ptp(y)), 1e-300)
    scale = max(float(np.ptp(y)), 1e-300)
    n = np.arange(1, len(x) + 1)
    mean_u, mean_v = np.cumsum(u) / n, np.cumsum(v) / n
    spread = np.maximum(np.cumsum(u * u) - n * mean_u**2, 1e-300)
    both = np.cumsum(u * v) - n * mean_u * mean_v
    total = np.cumsum(v * v) - n * mean_v**2
    slope = both / spread
    left = np.maximum(total - slope * both, 1e-30)
    slope = np.where(np.abs(slope) < 1e-100, 1e-100, slope)
    return slope * scale, left * scale**2, spread


def _inflation(case: Case) -> float:
    """1 + 2 times the sum of the autocorrelations of the Hall readings' white noise."""
    lockin = case.rig.hall
    count = int(40 * lockin.stages.time_constant_s / lockin.period_s) + 2
    r = lockin.stages.white_autocovariance(1.0, count, lockin.period_s)
    return float(2.0 * r.sum() / r[0] - 1.0)
