"""Drawing a sample, a rig and a ramp at random, wide but such that the ramp has sense."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bench.generator import FieldMeter, LockIn, Rig
from bench.profile import Profile, path
from bench.rc_stages import RCStages
from bench.sample import Sample

TARGET = 0.01
TWO_SIDED_95 = 1.959963984540054

Span = tuple[float, float]


@dataclass(frozen=True)
class Ranges:
    """What is drawn from: uniform in the logarithm between the ends."""

    density_per_m2: Span = (1e15, 2e16)
    mobility_m2_per_V_s: Span = (0.5, 100.0)
    current_A: Span = (1e-8, 1e-6)
    noise_V_per_rtHz: Span = (2e-9, 5e-8)
    time_constant_s: Span = (0.03, 1.0)
    period_s: Span = (0.05, 1.0)
    readings: Span = (600.0, 3000.0)
    rate_T_per_min: Span = (0.05, 1.0)
    squares: Span = (1.0, 10.0)
    poles: tuple[int, ...] = (1, 2, 3, 4)
    largest_T: Span = (0.2, 9.0)
    noise_share: Span = (0.01, 0.15)
    """Share of the ramp after which a fit that knows the noise is good to the target."""
    crossing_share: Span = (0.0, 0.4)
    """Field where rho_xx = rho_xy over the largest field."""


@dataclass(frozen=True)
class Setting:
    """One draw. ``needed_T``: field to sweep for the target, by the noise alone, roughly."""

    sample: Sample
    rig: Rig
    rate_T_per_s: float
    largest_T: float
    needed_T: float

    @property
    def duration_s(self) -> float:
        """Of one sweep from zero."""
        return self.largest_T / self.rate_T_per_s

    def earliest_T(self) -> float:
        """Field below which no honest answer can be there: the noise's or the crossing's."""
        return max(self.needed_T, self.sample.crossing_T)


def draw(rng: np.random.Generator, ranges: Ranges, sign: int = -1) -> Setting:
    """A sample, a rig and a ramp from zero to ``largest_T`` within the ranges."""
    for _ in range(200_000):
        setting = _try(rng, ranges, sign)
        if setting is not None:
            return setting
    raise RuntimeError("these ranges leave nothing")


def log_uniform(rng: np.random.Generator, span: Span) -> float:
    """Uniform in the logarithm."""
    return float(np.exp(rng.uniform(np.log(span[0]), np.log(span[1]))))


def _try(rng: np.random.Generator, r: Ranges, sign: int) -> Setting | None:
    rate = log_uniform(rng, r.rate_T_per_min) / 60.0
    period = log_uniform(rng, r.period_s)
    largest = rate * period * log_uniform(rng, r.readings)
    mobility = log_uniform(rng, r.mobility_m2_per_V_s)
    if not r.largest_T[0] <= largest <= r.largest_T[1]:
        return None
    if not r.crossing_share[0] <= 1.0 / mobility / largest <= r.crossing_share[1]:
        return None
    sample = Sample(log_uniform(rng, r.density_per_m2), mobility, sign)
    stages = RCStages(log_uniform(rng, r.time_constant_s), int(rng.choice(r.poles)))
    density = log_uniform(rng, r.noise_V_per_rtHz)
    current, squares = log_uniform(rng, r.current_A), log_uniform(rng, r.squares)
    meter = draw_meter(rng, period)
    needed = needed_field(sample, current, squares, density, meter, rate)
    if not r.noise_share[0] <= needed / largest <= r.noise_share[1]:
        return None
    hall, along = (draw_lockin(rng, stages, period, density) for _ in range(2))
    return Setting(sample, Rig(current, squares, hall, along, meter), rate, largest, needed)


def draw_meter(rng: np.random.Generator, period_s: float) -> FieldMeter:
    """A field meter read about as often as the lock-ins."""
    own_period = period_s * rng.uniform(0.5, 2.0)
    delay = log_uniform(rng, (0.01, 0.5)) if rng.random() < 0.5 else 0.0
    return FieldMeter(
        own_period, own_period * rng.uniform(0.0, 1.0), log_uniform(rng, (1e-6, 5e-5)),
        float(rng.choice((0.0, 1e-6, 1e-5, 1e-4))), delay,
    )


def draw_lockin(
    rng: np.random.Generator, stages: RCStages, period_s: float, density: float
) -> LockIn:
    """One of the two lock-ins; the resolution stays below its noise."""
    scatter = float(np.sqrt(stages.covariance(density)[-1, -1]))
    return LockIn(
        stages, period_s, period_s * rng.uniform(0.0, 1.0), density,
        resolution_V=scatter * log_uniform(rng, (0.01, 0.3)),
    )


def needed_field(
    sample: Sample, current_A: float, squares: float, density: float, meter: FieldMeter,
    rate_T_per_s: float,
) -> float:
    """Field to sweep until slope and zero-field resistivity are known to the target, with white
    noise of two-sided density S: slope variance 12 S / (rate^2 t^3), level variance S / t."""
    slope = abs(sample.hall_slope) * current_A
    power = density**2 / 2.0 + (slope * meter.noise_T) ** 2 * meter.period_s
    wanted = TARGET / TWO_SIDED_95
    for_slope = (12.0 * power / (wanted * slope * rate_T_per_s) ** 2) ** (1 / 3)
    level = sample.rho_0 * squares * current_A
    for_level = density**2 / 2.0 / (wanted * level) ** 2
    return float(max(for_slope, for_level) * rate_T_per_s)


def one_way(setting: Setting, rng: np.random.Generator) -> Profile:
    """From zero up or down, at once or after a wait of up to half a minute."""
    wait = 0.0 if rng.random() < 0.4 else float(rng.uniform(2.0, 30.0))
    end = setting.largest_T * float(rng.choice((1.0, -1.0)))
    return path([0.0, end], setting.rate_T_per_s, wait_s=wait)


def through_zero(setting: Setting, rng: np.random.Generator) -> Profile:
    """From one side to the other, at twice the rate."""
    wait = 0.0 if rng.random() < 0.4 else float(rng.uniform(2.0, 30.0))
    end = setting.largest_T * float(rng.choice((1.0, -1.0)))
    return path([-end, end], 2.0 * setting.rate_T_per_s, wait_s=wait)
