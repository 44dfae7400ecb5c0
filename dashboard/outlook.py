"""What can be expected of a ramp before it begins: the filters' lag, the field of the target."""

from __future__ import annotations

import json
import math
import statistics
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass

from scipy.constants import elementary_charge

from acquire.config import Rig
from acquire.config.hall_bar import HallBarSection, Signal
from acquire.errors import InstrumentError
from acquire.probe import Probe
from acquire.readings import Reading
from analyse.estimate_table import ESTIMATES
from analyse.forecast import expected_field
from analyse.lockin import LockinFilter
from analyse.replay import RowMaker, replay_readings
from analyse.setup import Ramp, Target
from dashboard.sampling import sample

LONGEST_LOOK_S = 8.0  # as long as a person waits for a check
MOST_ROUNDS, FEWEST_POINTS = 40, 8
FIELD_FOR_DENSITY_T = 0.05  # below it offset and misalignment may be more than the Hall voltage
DENSITIES_PER_M2 = (1e15, 3e15, 1e16)  # to reckon with while the sample's own is not known


def lag_lines(rig: Rig, probes: Mapping[str, Probe]) -> Iterator[str]:
    """What the field does during each filter's delay at the planned rate, in words."""
    if rig.ramp is None:
        yield "No [ramp] is planned: what the field does during the filters' delay is not known."
        return
    if not any(_filtered(rig)):
        yield "No filter is configured, so no lag behind the field is taken into account."
    for role, signal in _filtered(rig):
        stages = stages_of(signal, probes.get(signal.reader))
        if stages is None:
            yield f"{role}: time constant or poles come from settings that were not answered."
            continue
        lag_mT = 1000 * stages.delay_s * rig.ramp.rate_T_per_min / 60
        yield (
            f"{role}: {stages.poles} poles of {stages.time_constant_s:g} s lag "
            f"{stages.delay_s:g} s behind; meanwhile, at {rig.ramp.rate_T_per_min:g} T/min, "
            f"the field moves {lag_mT:.3g} mT. This is taken into account."
        )


def target_lines(rig: Rig, probes: Mapping[str, Probe]) -> Iterator[str]:
    """At which field each Hall bar is expected to reach the target, or why that can't be said.

    Takes readings for some seconds: at a standing field they show the noise.
    """
    why_not = _why_not(rig, probes)
    if why_not is not None:
        yield f"At which field the target will be reached can't be said: {why_not}."
        return
    period_s = max(reader.period_s for reader in rig.readers)
    rounds = min(MOST_ROUNDS, int(LONGEST_LOOK_S / period_s))
    try:
        readings = [*_settings(probes), *sample(rig.readers, rounds, period_s)]
    except InstrumentError as error:
        yield f"At which field the target will be reached can't be said: {error}."
        return
    looks = looks_at(rig, readings)
    for bar in rig.hall_bars:
        stages = stages_of(bar.hall, probes.get(bar.hall.reader))
        yield f"{bar.name}: {_target_words(rig, bar, looks[bar.name], stages, period_s)}"


def _settings(probes: Mapping[str, Probe]) -> Iterator[Reading]:
    """What the instruments told of their settings, as rows before the readings."""
    for name, probe in probes.items():
        told = {key: {"raw": None, "value": value} for key, value in probe.settings.items()}
        yield Reading(name, 0, 0.0, None, "settings", json.dumps({"settings": told}), ())


def stages_of(signal: Signal, probe: Probe | None) -> LockinFilter | None:
    """A signal's filter in numbers, some of which the instrument may have told; None if not."""
    if signal.filter is None:
        return None
    told = {} if probe is None else probe.settings
    time_constant_s: object = signal.filter.time_constant_s
    if signal.filter.time_constant_setting is not None:
        time_constant_s = told.get(signal.filter.time_constant_setting)
    poles: object = signal.filter.poles
    if signal.filter.poles_setting is not None:
        poles = told.get(signal.filter.poles_setting)
    if not isinstance(time_constant_s, int | float) or not isinstance(poles, int | float):
        return None
    try:
        return LockinFilter(float(time_constant_s), int(poles))
    except ValueError:
        return None


@dataclass(frozen=True)
class Look:
    """A Hall bar at a standing field: means, and standard deviations of one reading."""

    field_T: float
    field_spread_T: float
    rho_xx_ohm: float
    rho_xy_ohm: float
    noise_xx_ohm: float
    noise_xy_ohm: float
    points: int


def looks_at(rig: Rig, readings: Iterable[Reading]) -> dict[str, Look | None]:
    """What readings at a standing field show of each Hall bar; None where they are too few.

    The filters are left out of account: at a standing field they have no lag, and the wait
    until they have settled would take most of the readings.
    """
    names = ESTIMATES.names
    columns = [names.index(name) - 1 for name in ("field_T", "rho_xx_ohm", "rho_xy_ohm")]
    points: dict[str, list[tuple[float, ...]]] = {bar.name: [] for bar in rig.hall_bars}
    for record in replay_readings(RowMaker(_without_filters(rig)), readings):
        if record.stream == ESTIMATES.stream:
            cells = [record.cells[column] for column in columns]
            if all(isinstance(cell, float) for cell in cells):
                name = str(record.cells[names.index("hall_bar") - 1])
                points[name].append(tuple(cells))  # type: ignore[arg-type]
    return {name: _look(found) for name, found in points.items()}


def _look(points: list[tuple[float, ...]]) -> Look | None:
    if len(points) < FEWEST_POINTS:
        return None
    fields, along, across = zip(*points)
    return Look(
        statistics.fmean(fields),
        max(fields) - min(fields),
        statistics.fmean(along),
        statistics.fmean(across),
        statistics.stdev(along),
        statistics.stdev(across),
        len(points),
    )


def _target_words(
    rig: Rig, bar: HallBarSection, look: Look | None, stages: LockinFilter | None, period_s: float
) -> str:
    assert rig.ramp is not None
    if look is None:
        return f"too few good readings in {LONGEST_LOOK_S:g} s to tell the noise."
    if look.field_spread_T > 0.01 * max(abs(field) for field in rig.ramp.path_T):
        return "the field moves, so the noise can't be told; check while it stands."
    grow = _correlation_factor(look.points, stages, period_s)
    if grow is None:
        return f"the filter is too slow for its noise to be told in {LONGEST_LOOK_S:g} s."
    head = (
        f"one reading scatters by {grow * look.noise_xx_ohm:.2g} Ohm in rho_xx and "
        f"{grow * look.noise_xy_ohm:.2g} Ohm in rho_xy"
    )
    ends = []
    for density, name in _densities(look):
        field_T = expected_field(
            target=_target(rig),
            ramp=Ramp(rig.ramp.path_T, rig.ramp.rate_T_per_min),
            stages=stages,
            spacing_s=period_s,
            rho_0_ohm=abs(look.rho_xx_ohm),
            noise_hall_ohm=grow * look.noise_xy_ohm,
            noise_longitudinal_ohm=grow * look.noise_xx_ohm,
            density_per_m2=density,
        )
        where = "not within the planned ramp" if field_T is None else f"near {field_T:.2g} T"
        ends.append(f"{where} {name}")
    return f"{head}; the target is expected {', '.join(ends)}. This is a rough guess."


def _densities(look: Look) -> list[tuple[float, str]]:
    if abs(look.field_T) >= FIELD_FOR_DENSITY_T and look.rho_xy_ohm:
        density = abs(look.field_T / (look.rho_xy_ohm * elementary_charge))
        return [(density, f"with {density:.2g} m^-2 as rho_xy shows now")]
    return [(density, f"with {density:.0e} m^-2") for density in DENSITIES_PER_M2]


def _correlation_factor(
    points: int, stages: LockinFilter | None, period_s: float
) -> float | None:
    """By how much correlated readings scatter more over long times than among themselves.

    The expected sample variance of N readings, the variance of whose mean is that of N/k
    independent ones, is the true one times (N - k) / (N - 1). None if N is below 2 k.
    """
    inflation = 1.0 if stages is None else stages.inflation(period_s)
    if points < 2 * inflation:
        return None
    return math.sqrt((points - 1) / (points - inflation))


def _why_not(rig: Rig, probes: Mapping[str, Probe]) -> str | None:
    if rig.ramp is None:
        return "no [ramp] is planned"
    silent = [reader.name for reader in rig.readers if reader.name not in probes]
    if silent:
        return f"{', '.join(silent)} is read elsewhere"
    failed = [name for name, probe in probes.items() if not probe.good]
    if failed:
        return f"{', '.join(failed)} did not answer as configured"
    return None


def _target(rig: Rig) -> Target:
    target = rig.target
    return Target(
        target.confidence,
        target.sheet_density_relative,
        target.mobility_relative,
        target.scattering_time_relative,
        target.past_equal_resistivities,
    )


def _filtered(rig: Rig) -> Iterator[tuple[str, Signal]]:
    for bar in rig.hall_bars:
        signals = {"longitudinal": bar.longitudinal, "hall": bar.hall}
        if bar.excitation is not None and bar.excitation.measured is not None:
            signals["current"] = bar.excitation.measured
        for role, signal in signals.items():
            if signal.filter is not None:
                yield f"{bar.name}, {role}", signal


def _without_filters(rig: Rig) -> Rig:
    bars = tuple(
        bar.model_copy(
            update={
                "longitudinal": bar.longitudinal.model_copy(update={"filter": None}),
                "hall": bar.hall.model_copy(update={"filter": None}),
            }
        )
        for bar in rig.hall_bars
    )
    return rig.model_copy(update={"hall_bars": bars})
