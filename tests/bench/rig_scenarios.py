"""Scenarios by what is wrong with the rig or with the readings."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from bench import faults
from bench.case import Case, moment, scenario
from bench.generator import Rig
from bench.profile import path
from bench.setting import Ranges, Setting, draw, log_uniform


def _stretch(case: Case, rng: np.random.Generator) -> tuple[float, float]:
    size = case.setting.largest_T
    start = rng.uniform(0.1, 0.6) * size
    return moment(case, start), moment(case, start + rng.uniform(0.05, 0.3) * size)


def _overloaded(case: Case, rng: np.random.Generator) -> None:
    stretch = _stretch(case, rng)
    for channel in (("hall",), ("longitudinal",), ("hall", "longitudinal"))[rng.integers(3)]:
        faults.overload(case.streams, channel, *stretch)


@scenario
def overload_in_mid_ramp(rng: np.random.Generator) -> dict[str, object]:
    """One or both lock-ins say overload for a stretch."""
    return {"clean": False, "setting": draw(rng, Ranges()), "spoil": _overloaded, "required": ("overload",),
            "allowed": ("unusable_readings", "clipped", "stream_silent")}


def _clipped(case: Case, rng: np.random.Generator) -> None:
    faults.clip(case.streams, "hall", _stretch(case, rng)[0])


@scenario
def clipped_without_a_word(rng: np.random.Generator) -> dict[str, object]:
    """The Hall reading stays at the end of its range for the rest of the ramp."""
    return {"clean": False, "setting": draw(rng, Ranges()), "spoil": _clipped, "required": ("clipped",),
            "allowed": ("overload", "unusable_readings", "oscillations", "quick_readings_apart",
                        "not_straight")}


def _glitches(case: Case, rng: np.random.Generator) -> None:
    for _ in range(int(rng.integers(1, 4))):
        channel = str(rng.choice(("hall", "longitudinal")))
        at = moment(case, rng.uniform(0.02, 0.9) * case.setting.largest_T)
        stages = (case.rig.hall if channel == "hall" else case.rig.longitudinal).stages
        faults.range_glitch(case.streams, channel, at, stages, rng)


@scenario
def range_glitch(rng: np.random.Generator) -> dict[str, object]:
    """One to three changes of range."""
    return {"clean": False, "setting": draw(rng, Ranges()), "spoil": _glitches, "allowed": ("noise_high",)}


@scenario
def drift_1_percent(rng: np.random.Generator) -> dict[str, object]:
    """The current drifts by 1 % in ten minutes; minutes of hold before the ramp that show it."""
    wait, drift = float(rng.uniform(120.0, 300.0)), 0.01 / 600.0
    while True:
        setting = draw(rng, Ranges(noise_share=(0.01, 0.06)))
        level = setting.rig.current_A * setting.sample.rho_0 * setting.rig.squares
        error = setting.rig.hall.density_V_per_rtHz * np.sqrt(6.0 / wait**3) / level
        if drift > 8.0 * error:
            break
    rig = replace(setting.rig, gain_drift_per_s=drift * float(rng.choice((1.0, -1.0))))
    start = setting.largest_T * float(rng.uniform(0.1, 0.3))
    profile = path([start, -setting.largest_T], setting.rate_T_per_s, wait_s=wait)
    return {"setting": setting, "rig": rig, "profile": profile, "covered": False,
            "forbidden": True, "required": ("drift",),
            "allowed": ("not_straight", "noise_high", "field_stuck", "contacts_misaligned",
                        "field_offset", "current_sag", "heating")}


@scenario
def heating(rng: np.random.Generator) -> dict[str, object]:
    """The sample warms up: rho_xx alone moves by 2 to 10 % in ten minutes; a hold shows it."""
    wait, drift = float(rng.uniform(120.0, 300.0)), log_uniform(rng, (0.02, 0.1)) / 600.0
    while True:
        setting = draw(rng, Ranges(noise_share=(0.01, 0.06), crossing_share=(0.0, 0.1)))
        start = setting.largest_T * float(rng.uniform(0.1, 0.3))
        rho_0, slope = setting.sample.rho_0, abs(setting.sample.hall_slope)
        level = setting.rig.current_A * min(rho_0 * setting.rig.squares, slope * start)
        error = setting.rig.hall.density_V_per_rtHz * np.sqrt(6.0 / wait**3) / level
        if drift > 20.0 * error:
            break
    rig = replace(setting.rig, warming_per_s=drift * float(rng.choice((1.0, -1.0))))
    profile = path([start, -setting.largest_T], setting.rate_T_per_s, wait_s=wait)
    return {"setting": setting, "rig": rig, "profile": profile, "covered": False,
            "forbidden": True, "required": ("heating",),
            "allowed": ("drift", "not_straight", "noise_high", "oscillations",
                        "contacts_misaligned", "field_offset")}


@scenario
def channels_exchanged(rng: np.random.Generator) -> dict[str, object]:
    """The leads of the two voltages are exchanged."""
    return {"setting": draw(rng, Ranges()), "covered": False, "forbidden": True,
            "spoil": lambda case, _: faults.exchange(case.streams),
            "required": ("channels_exchanged",),
            "allowed": ("not_straight", "noise_high", "oscillations", "quick_readings_apart",
                        "contacts_misaligned", "field_offset")}


def _stuck(case: Case, rng: np.random.Generator) -> None:
    early = min(case.setting.earliest_T(), 0.5 * case.setting.largest_T)
    faults.stuck_field(case.streams, moment(case, rng.uniform(0.2, 0.7) * early))


@scenario
def field_stuck(rng: np.random.Generator) -> dict[str, object]:
    """The field reading stays where it was before an honest answer could be there."""
    return {"setting": draw(rng, Ranges(noise_share=(0.02, 0.15))), "spoil": _stuck,
            "covered": False, "forbidden": True, "required": ("field_stuck",),
            "allowed": ("drift", "not_straight", "noise_high", "heating", "unusable_readings")}


def _wild(case: Case, rng: np.random.Generator) -> None:
    for channel in ("hall", "longitudinal", "field"):
        faults.wild_points(case.streams, channel, 0.01, rng)


@scenario
def wild_points_1_percent(rng: np.random.Generator) -> dict[str, object]:
    """1 % of the readings of each channel, the field's too, are far off."""
    return {"setting": draw(rng, Ranges()), "spoil": _wild}


def _behind_a_resistor(rng: np.random.Generator) -> tuple[Setting, Rig]:
    """A rig whose current sags by 3 to 40 % until where an answer can be there."""
    ranges = Ranges(density_per_m2=(5e14, 1e16), largest_T=(1.0, 9.0))
    while True:
        setting = draw(rng, ranges)
        squares = setting.rig.squares
        rig = replace(setting.rig, series_ohm=log_uniform(rng, (1e4, 2e6)),
                      source_to_drain_squares=squares * rng.uniform(1.0, 2.0),
                      contact_ohm=log_uniform(rng, (10.0, 1000.0)))
        far = min(1.5 * setting.earliest_T(), setting.largest_T)
        ends = rig.sagging(*setting.sample.rho(np.array([0.0, far])))
        if 0.6 <= ends[1] / ends[0] <= 0.97:
            return setting, rig


@scenario
def current_sag(rng: np.random.Generator) -> dict[str, object]:
    """The current sags behind a resistor, and is taken to stay what it is at zero field."""
    setting, rig = _behind_a_resistor(rng)
    at_zero = float(rig.sagging(*setting.sample.rho(np.array([0.0])))[0])
    told = replace(rig, series_ohm=0.0, current_A=at_zero)
    return {"setting": setting, "rig": rig, "told": told,
            "covered": False, "forbidden": True, "required": ("current_sag", "not_straight"),
            "allowed": ("oscillations", "quick_readings_apart")}


@scenario
def current_sag_known(rng: np.random.Generator) -> dict[str, object]:
    """The same, with the resistor told, or the current read over a shunt."""
    setting, rig = _behind_a_resistor(rng)
    rig = replace(rig, reads_current=bool(rng.random() < 0.5),
                  shunt_ohm=rig.squares * setting.sample.rho_0)
    return {"setting": setting, "rig": rig, "required": ("current_sag",),
            "allowed": ("short_bar",)}


@scenario
def flicker_noise(rng: np.random.Generator) -> dict[str, object]:
    """1/f noise above the white one below 0.03 to 1 Hz."""
    setting = draw(rng, Ranges(noise_share=(0.01, 0.06)))
    corner = log_uniform(rng, (0.03, 1.0))
    hall, along = (replace(one, corner_Hz=corner) for one in (setting.rig.hall,
                                                              setting.rig.longitudinal))
    return {"clean": False, "setting": setting, "rig": replace(setting.rig, hall=hall, longitudinal=along),
            "allowed": ("noise_high", "drift"), "always": False}


@scenario
def lock_in_phase(rng: np.random.Generator) -> dict[str, object]:
    """Both lock-ins are 25 to 60 degrees off, X alone is used."""
    setting = draw(rng, Ranges())
    angle = float(rng.uniform(25.0, 60.0)) * float(rng.choice((1.0, -1.0)))
    return {"setting": setting, "rig": replace(setting.rig, phase_deg=angle), "covered": False,
            "forbidden": True, "required": ("phase_wrong",), "allowed": ("quick_readings_apart",)}


def _silenced(case: Case, rng: np.random.Generator) -> None:
    channel = str(rng.choice(("hall", "longitudinal")))
    faults.silence(case.streams, channel, _stretch(case, rng)[0])


@scenario
def stream_silent(rng: np.random.Generator) -> dict[str, object]:
    """One lock-in does not answer any more from mid-ramp on."""
    return {"clean": False, "setting": draw(rng, Ranges()), "spoil": _silenced, "required": ("stream_silent",),
            "allowed": ("unusable_readings",)}


@scenario
def lost_answers(rng: np.random.Generator) -> dict[str, object]:
    """5 % of the answers are lost, on every channel."""
    return {"setting": draw(rng, Ranges()), "allowed": ("unusable_readings",),
            "spoil": lambda case, later: faults.lose(case.streams, 0.05, later)}


@scenario
def coarse_digit(rng: np.random.Generator) -> dict[str, object]:
    """The lock-ins' ranges are too large: their last digit is half of their noise to five times it."""
    setting = draw(rng, Ranges())
    rig = setting.rig
    lockins = {
        name: replace(lockin, resolution_V=log_uniform(rng, (0.5, 5.0)) * float(
            np.sqrt(lockin.stages.covariance(lockin.density_V_per_rtHz)[-1, -1])))
        for name, lockin in (("hall", rig.hall), ("longitudinal", rig.longitudinal))
    }
    return {"setting": setting, "rig": replace(rig, **lockins), "clean": False,
            "allowed": ("coarse_digit", "clipped")}


@scenario
def calibration(rng: np.random.Generator) -> dict[str, object]:
    """Current, geometry and field are off by what is told as their standard uncertainties."""
    setting = draw(rng, Ranges())
    told = {name: log_uniform(rng, (5e-4, 3e-3)) for name in ("current", "squares", "field")}
    off = {name: 1.0 + u * float(rng.standard_normal()) for name, u in told.items()}
    rig = replace(setting.rig, current_A=setting.rig.current_A * off["current"],
                  squares=setting.rig.squares * off["squares"])
    sample = replace(setting.sample)
    return {"setting": setting, "rig": rig, "told": setting.rig, "sample": sample,
            "relative_uncertainty": told, "spoil": _scale_field(off["field"])}


def _scale_field(factor: float) -> Callable[[Case, np.random.Generator], None]:
    def scale(case: Case, _: np.random.Generator) -> None:
        case.streams["field"].x /= factor

    return scale
