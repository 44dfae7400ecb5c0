"""The oracle: what could be known at best, by somebody who knows noise, filter and model.

With readings y = X theta + noise of known covariance R the information on theta is X' R^-1 X,
and its inverse is the Cramer-Rao bound, met by generalised least squares. R is a Toeplitz matrix
(the noise is stationary); it is undone by the Durbin-Levinson recursion, whose one-step
predictors turn the readings into independent ones in the order of time. So the bound is there
after each reading, not only at the end.

Nobody knows the field before the first reading, hence nobody knows what the filters held then:
the oracle, too, begins when they have settled.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from bench.case import Case
from bench.generator import LockIn, reading_times
from bench.noise import autocovariance, flicker, interpolated_readings
from bench.profile import Profile
from bench.rc_stages import Array
from bench.setting import TARGET, TWO_SIDED_95

STRAIGHT = 1.6448536269514722
"""Standard errors of a bend that must lie within the target (one-sided 95 %)."""

NOISE_KNOWN = 10
"""Independent readings that tell two coefficients and the noise to 1 / sqrt(2 * 8) = 25 %."""

UNDETERMINED = 1e8
"""Inflation of a variance by the other columns beyond which a coefficient is not determined."""


def whiten(covariances: Array, columns: Array) -> Array:
    """Columns (N, p) in units of independent noise, for autocovariances (N,) at lags 0..N-1."""
    count = len(columns)
    predictor = np.zeros(0)
    left = float(covariances[0])
    out = np.empty_like(columns, dtype=float)
    out[0] = columns[0] / np.sqrt(left)
    small = 0
    for k in range(1, count):
        part = (covariances[k] - predictor @ covariances[k - 1 : 0 : -1]) / left
        predictor = np.append(predictor - part * predictor[::-1], part)
        left *= 1.0 - part * part
        out[k] = (columns[k] - predictor @ columns[k - 1 :: -1][:k]) / np.sqrt(left)
        small = small + 1 if abs(part) < 1e-7 else 0
        if small == 8 and k + 1 < count:
            taps = np.concatenate(([1.0], -predictor))
            out[k + 1 :] = (lfilter(taps, [1.0], columns, axis=0) / np.sqrt(left))[k + 1 :]
            break
    return out


def noise_autocovariance(lockin: LockIn, count: int) -> Array:
    """Of a lock-in's readings: white and 1/f noise behind the filter, rounding as white."""
    spacing, density = lockin.period_s, lockin.density_V_per_rtHz
    known = lockin.stages.white_autocovariance(density, count, spacing)
    if lockin.corner_Hz > 0:
        spectrum = flicker(density, lockin.corner_Hz, lockin.stages)
        known = known + autocovariance(spectrum, count, spacing)
    known[0] += lockin.resolution_V**2 / 12.0
    return known


def field_autocovariance(case: Case, count: int) -> Array:
    """Of what the field meter's noise looks like in the Hall voltage."""
    meter, lockin = case.rig.meter, case.rig.hall
    variance = meter.noise_T**2 + meter.resolution_T**2 / 12.0
    spectrum = interpolated_readings(variance, meter.period_s, lockin.stages)
    per_T = case.rig.current_A * case.sample.hall_slope
    return per_T**2 * autocovariance(spectrum, count, lockin.period_s)


@dataclass(frozen=True)
class Bound:
    """Variances of one coefficient after each reading, (N,): with the model that is true, and
    the variance of the difference that the next richer model makes."""

    times_s: Array
    variance: Array
    bend_variance: Array


def _bound(whitened: Array, j: int, plain: list[int], richer: list[int], times_s: Array) -> Bound:
    information = np.cumsum(whitened[:, :, None] * whitened[:, None, :], axis=0)
    one, two = (_variances(information, columns, j) for columns in (plain, richer))
    known = np.isfinite(one) & np.isfinite(two)
    bend = np.where(known, two, np.inf) - np.where(known, one, 0.0)
    return Bound(times_s, one, np.maximum(bend, 0.0))


def _variances(information: Array, columns: list[int], j: int) -> Array:
    """Of coefficient j, after each reading; inf while it is not determined."""
    chosen = information[:, columns][:, :, columns]
    size = np.sqrt(np.maximum(np.einsum("kii->ki", chosen), 1e-200))
    scaled = chosen / size[:, :, None] / size[:, None, :]
    scaled += 1e-11 * np.eye(len(columns))
    at = columns.index(j)
    shape = np.linalg.inv(scaled)[:, at, at]
    return np.where(shape < UNDETERMINED, shape / size[:, at] ** 2, np.inf)


def hall_bound(case: Case) -> tuple[Bound, Array]:
    """(bound on the slope in V/T, whitened columns 1, B, B|B|) for the Hall voltage."""
    times, field_T = _behind(case.rig.hall, case)
    covariances = noise_autocovariance(case.rig.hall, len(times))
    covariances = covariances + field_autocovariance(case, len(times))
    columns = np.stack([np.ones_like(field_T), field_T, field_T * np.abs(field_T)], axis=1)
    whitened = whiten(covariances, columns)
    return _bound(whitened, 1, [0, 1], [0, 1, 2], times), whitened


def level_bound(case: Case) -> tuple[Bound, Array]:
    """(bound on the level in V, whitened columns 1, B^2, |B|) for the longitudinal voltage."""
    times, field_T = _behind(case.rig.longitudinal, case)
    columns = np.stack([np.ones_like(field_T), field_T**2, np.abs(field_T)], axis=1)
    whitened = whiten(noise_autocovariance(case.rig.longitudinal, len(times)), columns)
    plain = [0, 1] if case.level_bends else [0]
    return _bound(whitened, 0, plain, [*plain, 2], times), whitened


def _behind(lockin: LockIn, case: Case) -> tuple[Array, Array]:
    """(times of the settled readings, the field behind the filter at them)."""
    times = reading_times(lockin, case.profile)
    times = times[times >= times[0] + lockin.stages.settling_s]
    return times, case.profile.behind(lockin.stages, times)


@dataclass(frozen=True)
class Reference:
    """Fields swept, in T, at which each demand can first be met; inf if never in the ramp.

    ``precise``: the oracle's fixed-sample 95 % intervals of density and mobility are within the
    target; ``straight``: it could rule out bends that matter; ``crossed``: |B| has passed the
    field where rho_xx = rho_xy; ``near_zero``: some |B| is below half of the largest;
    ``noise_known``: as many independent settled readings as tell the noise to a quarter.
    ``density_error``, ``mobility_error``: relative standard errors at the end of the ramp.
    """

    precise: float
    straight: float
    crossed: float
    near_zero: float
    noise_known: float
    density_error: float
    mobility_error: float

    @property
    def fair(self) -> float:
        """The largest of all: no rule as demanded could stop before."""
        return max(
            self.precise, self.straight, self.crossed, self.near_zero, self.noise_known
        )


def reference(case: Case) -> Reference:
    """The oracle's stopping fields for a case."""
    hall, _ = hall_bound(case)
    level, _ = level_bound(case)
    slope = abs(case.rig.current_A * case.sample.hall_slope)
    base = case.rig.current_A * case.sample.rho_0 * case.rig.squares
    times = hall.times_s

    def at_hall(values: Array) -> Array:
        return np.interp(times, level.times_s, values, left=np.inf)

    n_error = np.sqrt(hall.variance) / slope
    mu_error = np.sqrt(n_error**2 + at_hall(level.variance) / base**2)
    precise = np.maximum(n_error, mu_error) * TWO_SIDED_95 <= TARGET
    straight = (np.sqrt(hall.bend_variance) / slope * STRAIGHT <= TARGET) & (
        np.sqrt(at_hall(level.bend_variance)) / base * STRAIGHT <= TARGET
    )
    size = np.abs(case.profile.at(times))
    largest, smallest = np.maximum.accumulate(size), np.minimum.accumulate(size)
    # a second kind of carrier: rho_xx rises as B^2, by half of what it does to the Hall slope at
    # the crossing; a third of the rise at the end is what a bend moves the level by
    rise = 3.0 * np.sqrt(at_hall(level.bend_variance)) / base
    rise = rise * (case.sample.crossing_T / np.maximum(largest, 1e-12)) ** 2
    straight &= (2.0 * STRAIGHT * rise <= TARGET) | (largest >= 2.0 * case.sample.crossing_T)
    swept = case.profile.swept(times)
    lockin = case.rig.hall
    each_s = max(lockin.stages.integral_time_s, lockin.period_s)
    return Reference(
        _first(precise, swept), _first(straight, swept),
        _first(largest >= case.sample.crossing_T, swept),
        _first(smallest <= 0.5 * largest, swept),
        _first(times - times[0] >= NOISE_KNOWN * each_s, swept),
        float(n_error[-1]), float(mu_error[-1]),
    )


def _first(met: Array, swept: Array) -> float:
    return float(swept[np.argmax(met)]) if met.any() else float("inf")


def best_estimate(case: Case) -> tuple[float, float]:
    """(density, mobility) by generalised least squares from the whole ramp.

    The field's readings, joined by straight lines and passed through the filter, are taken as
    the field. For ramps of a single carrier whose readings are all there.
    """
    slope = _solve(case, "hall", [0, 1], 1)
    level = _solve(case, "longitudinal", [0], 0)
    density = case.rig.current_A / (1.602176634e-19 * abs(slope))
    return density, abs(slope) * case.rig.squares / level


def _solve(case: Case, channel: str, columns: list[int], j: int) -> float:
    hall = channel == "hall"
    lockin = case.rig.hall if hall else case.rig.longitudinal
    stream = case.streams[channel]
    last_s = case.streams["field"].time_s[-1] - case.rig.meter.delay_s
    first_s = stream.time_s[0] + lockin.stages.settling_s
    stream = stream.keep((stream.time_s >= first_s) & (stream.time_s <= last_s))
    covariances = noise_autocovariance(lockin, len(stream.x))
    if hall:
        covariances = covariances + field_autocovariance(case, len(stream.x))
    field_T = measured_field(case, lockin, stream.time_s)
    rows = np.stack([np.ones_like(field_T), field_T, stream.x], axis=1)
    whitened = whiten(covariances, rows)
    return float(np.linalg.lstsq(whitened[:, columns], whitened[:, 2], rcond=None)[0][j])


def measured_field(case: Case, lockin: LockIn, times_s: Array) -> Array:
    """The field meter's readings, moved by its delay and joined by straight lines, behind the
    lock-in's filter; before the first reading the field is taken as what it is set to."""
    meter, stream = case.rig.meter, case.streams["field"]
    fine = max(1, int(np.ceil(lockin.period_s / min(lockin.stages.time_constant_s / 4,
                                                    meter.period_s / 6))))
    spacing = lockin.period_s / fine
    before = int(np.ceil(times_s[0] / spacing)) + 1
    grid = times_s[0] + spacing * np.arange(-before, fine * (len(times_s) - 1) + 1)
    known_s = stream.time_s - meter.delay_s
    joined = np.interp(grid, known_s, stream.x)
    joined = np.where(grid < known_s[0], case.profile.at(grid), joined)
    return lockin.stages.follow(joined, spacing)[before::fine]


def ramp_of(profile: Profile) -> tuple[tuple[float, ...], float]:
    """(fields of the path, largest rate in T/min), as a person would plan it."""
    times, fields = np.array(profile.times_s), np.array(profile.fields_T)
    steps = np.diff(times) > 0
    rates = np.abs(np.diff(fields))[steps] / np.diff(times)[steps]
    return profile.turning_fields_T, float(rates.max()) * 60.0
