"""Scenarios by the sample and by the way of the ramp; the readings themselves are sound."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from bench.case import scenario
from bench.profile import path, staircase
from bench.sample import Sample
from bench.setting import Ranges, Setting, draw, log_uniform, through_zero


@scenario
def textbook(rng: np.random.Generator) -> dict[str, object]:
    """One carrier, white noise, one way."""
    return {"setting": draw(rng, Ranges())}


@scenario
def holes(rng: np.random.Generator) -> dict[str, object]:
    """As the textbook, with the other sign."""
    return {"setting": draw(rng, Ranges(), sign=1)}


@scenario
def fixed_ramp(rng: np.random.Generator) -> dict[str, object]:
    """A ramp of sense for its noise, to its end, against the best that can be had."""
    setting = draw(rng, Ranges(noise_share=(0.05, 0.25)))
    wait = setting.rig.hall.stages.settling_s * rng.uniform(1.1, 2.0)
    profile = path([0.0, setting.largest_T], setting.rate_T_per_s, wait_s=wait)
    return {"setting": setting, "profile": profile, "exact_line": True}


@scenario
def very_high_mobility(rng: np.random.Generator) -> dict[str, object]:
    """Oscillations from about 0.1 T on, plateaus later."""
    ranges = Ranges(
        density_per_m2=(8e14, 4e15), mobility_m2_per_V_s=(100.0, 2000.0),
        largest_T=(0.3, 3.0), rate_T_per_min=(0.05, 0.4), noise_share=(0.01, 0.06),
        crossing_share=(0.0, 0.05), time_constant_s=(0.03, 0.5), readings=(1000.0, 3000.0),
    )
    setting = draw(rng, ranges)
    sample = replace(
        setting.sample, quantum_lifetime_s=log_uniform(rng, (1e-12, 3e-12)),
        temperature_K=log_uniform(rng, (0.02, 0.4)),
    )
    return {"setting": setting, "sample": sample, "allowed": ("oscillations",)}


@scenario
def film_to_9_T(rng: np.random.Generator) -> dict[str, object]:
    """Low mobility, high density, a peak around zero field."""
    ranges = Ranges(
        density_per_m2=(5e15, 1e17), mobility_m2_per_V_s=(0.25, 1.5), rate_T_per_min=(0.3, 1.0),
        largest_T=(8.9, 9.0), crossing_share=(0.05, 0.45),
    )
    setting = draw(rng, ranges)
    sample = replace(
        setting.sample, peak=log_uniform(rng, (0.01, 0.08)), peak_T=log_uniform(rng, (0.005, 0.05))
    )
    profile = None
    if rng.random() < 0.3:
        profile = path([-3.0, setting.largest_T], setting.rate_T_per_s)
    return {"setting": setting, "sample": sample, "profile": profile, "always": False}


def _magnetoresistive(rng: np.random.Generator, setting: Setting, span: tuple[float, float]
                      ) -> Sample:
    size = log_uniform(rng, span) * float(rng.choice((1.0, 1.0, -1.0)))
    scale = setting.largest_T * log_uniform(rng, (0.7, 3.0))
    x = (setting.largest_T / scale) ** 2
    return replace(
        setting.sample, magnetoresistance=size * (1 + x / 4) / x, magnetoresistance_T=scale
    )


@scenario
def smooth_magnetoresistance(rng: np.random.Generator) -> dict[str, object]:
    """rho_xx rises or falls by 0.3 to 3 % over the ramp; the Hall line is straight."""
    setting = draw(rng, Ranges())
    return {
        "setting": setting, "sample": _magnetoresistive(rng, setting, (0.003, 0.03)),
        "allowed": ("not_straight",), "level_bends": True,
    }


@scenario
def parallel_conduction(rng: np.random.Generator) -> dict[str, object]:
    """Two sheets; the Hall slope changes by 5 % or more over the ramp."""
    while True:
        setting = draw(rng, Ranges(mobility_m2_per_V_s=(3.0, 100.0), noise_share=(0.01, 0.06),
                                   crossing_share=(0.0, 0.15)))
        first = setting.sample
        sample = replace(
            first, second_density_per_m2=first.density_per_m2 * log_uniform(rng, (0.1, 4.0)),
            second_mobility_m2_per_V_s=first.mobility_m2_per_V_s * log_uniform(rng, (0.02, 0.4)),
        )
        near, far = np.array([1e-3, 1.0]) * setting.largest_T
        slopes = [float(sample.rho(np.array([b]))[1][0]) / b for b in (near, far)]
        if abs(slopes[1] / slopes[0] - 1.0) >= 0.05:
            break
    return {"setting": setting, "sample": sample, "covered": False, "forbidden": True,
            "required": ("not_straight",), "allowed": ("oscillations", "quick_readings_apart")}


@scenario
def contacts_misaligned(rng: np.random.Generator) -> dict[str, object]:
    """5 % of a square of rho_xx stands in the Hall voltage; some magnetoresistance."""
    setting = draw(rng, Ranges())
    sample = _magnetoresistive(rng, setting, (0.001, 0.01))
    share = 0.05 * float(rng.choice((1.0, -1.0)))
    return {
        "setting": setting, "sample": sample, "profile": through_zero(setting, rng),
        "rig": replace(setting.rig, misaligned_squares=share), "level_bends": True,
        "required": ("contacts_misaligned", "field_offset"),
        "allowed": ("not_straight", "quick_readings_apart"),
    }


@scenario
def remanent_field(rng: np.random.Generator) -> dict[str, object]:
    """The sample sees 2 to 20 mT more or less than the meter says; a peak shows where zero is."""
    ranges = Ranges(density_per_m2=(2e15, 2e16), mobility_m2_per_V_s=(1.0, 20.0),
                    largest_T=(0.3, 3.0), noise_share=(0.01, 0.06), rate_T_per_min=(0.05, 0.5))
    setting = draw(rng, ranges)
    zero = log_uniform(rng, (2e-3, 2e-2)) * float(rng.choice((1.0, -1.0)))
    sample = replace(setting.sample, peak=log_uniform(rng, (0.01, 0.05)),
                     peak_T=log_uniform(rng, (0.003, 0.01)))
    rig = replace(setting.rig, meter=replace(setting.rig.meter, zero_T=zero))
    return {"setting": setting, "sample": sample, "rig": rig,
            "profile": through_zero(setting, rng), "required": ("field_offset",),
            "always": False,
            "allowed": ("contacts_misaligned", "quick_readings_apart")}


@scenario
def slow_filter_fast_ramp(rng: np.random.Generator) -> dict[str, object]:
    """Time constants of 1 to 3 s, three or four stages, half a tesla a minute and more."""
    ranges = Ranges(time_constant_s=(1.0, 3.0), poles=(3, 4), rate_T_per_min=(0.5, 1.0),
                    largest_T=(1.0, 9.0), noise_share=(0.01, 0.25))
    return {"setting": draw(rng, ranges), "allowed": ("ramp_too_fast",)}


@scenario
def up_and_down(rng: np.random.Generator) -> dict[str, object]:
    """There and back, on one side or through zero."""
    setting = draw(rng, Ranges())
    b = setting.largest_T * float(rng.choice((1.0, -1.0)))
    fields = [0.0, b, 0.0] if rng.random() < 0.5 else [-b, b, -b]
    rate = setting.rate_T_per_s * (4.0 if fields[0] else 2.0)
    return {"setting": setting, "profile": path(
        fields, rate, wait_s=float(rng.choice((0.0, 10.0))), holds_s=[float(rng.choice((0, 15)))]
    )}


@scenario
def common_noise(rng: np.random.Generator) -> dict[str, object]:
    """Half of the noise of both voltages is the same, with equal or opposite signs."""
    setting = draw(rng, Ranges())
    rig = replace(setting.rig, longitudinal=setting.rig.hall,
                  common_noise=0.5 * float(rng.choice((1.0, -1.0))))
    return {"setting": setting, "rig": rig}


@scenario
def ramps_as_they_are(rng: np.random.Generator) -> dict[str, object]:
    """Holds, changes of rate, steps."""
    setting = draw(rng, Ranges())
    b, rate = setting.largest_T, setting.rate_T_per_s
    kind = rng.integers(3)
    if kind == 0:
        profile = path([0.0, 0.3 * b, b], [rate * 0.4, rate])
    elif kind == 1:
        profile = path([0.0, 0.2 * b, b], rate, holds_s=[float(rng.uniform(10.0, 60.0))])
    else:
        steps = int(rng.integers(20, 60))
        profile = staircase(0.0, b, steps, rate * 3, 0.6 * setting.duration_s / steps)
    return {"setting": setting, "profile": profile, "allowed": ("field_stuck", "field_steps")}
