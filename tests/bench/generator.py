"""Simulated ramps: what two lock-ins and a field meter would have read, as streams of readings.

The noise-free voltages pass the lock-ins' stages exactly where they are linear in field (the
response to each knot of the field's profile is known in closed form); what is left (peak, bend,
oscillations, drift) goes through on a fine grid of straight pieces. The noise is exact as well.
Nothing is settled beforehand but at the start's field.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np

from bench.noise import draw_noise, flicker
from bench.profile import Profile
from bench.rc_stages import Array, RCStages
from bench.sample import Sample

FINE_S = 0.05
"""Longest piece of the fine grid, in s."""


@dataclass(frozen=True)
class LockIn:
    """One lock-in: filter, reading times, noise. ``offset_s``: time of its first reading."""

    stages: RCStages
    period_s: float
    offset_s: float = 0.0
    density_V_per_rtHz: float = 0.0
    corner_Hz: float = 0.0
    resolution_V: float = 0.0


@dataclass(frozen=True)
class FieldMeter:
    """What reports the field: reading times, noise, resolution, lag, and its error at zero.

    ``zero_T``: field at the sample when the reading is zero (remanence).
    """

    period_s: float
    offset_s: float = 0.0
    noise_T: float = 0.0
    resolution_T: float = 0.0
    delay_s: float = 0.0
    zero_T: float = 0.0


@dataclass(frozen=True)
class Rig:
    """The bar in its circuit.

    Parameters
    ----------
    current_A
        The current, if ``series_ohm`` is 0; else the nominal one, source voltage / series_ohm.
    squares
        Length over width between the longitudinal contacts.
    misaligned_squares
        Of rho_xx in the Hall voltage, in squares.
    series_ohm, contact_ohm, source_to_drain_squares
        What stands in series with the sample; the current sags as the sample's own resistance
        rho_xx * squares + |rho_xy| grows.
    gain_drift_per_s, hall_drift_V_per_s
        Drift of the current with time, relative, and of the Hall voltage's offset.
    warming_per_s
        Drift of rho_xx with time, relative.
    common_noise
        Share of the noise's variance that both voltages have in common; negative: with opposite
        signs. Both lock-ins must be alike then.
    phase_deg
        Angle by which both lock-ins are off.
    """

    current_A: float
    squares: float
    hall: LockIn
    longitudinal: LockIn
    meter: FieldMeter
    misaligned_squares: float = 0.0
    series_ohm: float = 0.0
    contact_ohm: float = 0.0
    source_to_drain_squares: float = 0.0
    gain_drift_per_s: float = 0.0
    warming_per_s: float = 0.0
    common_noise: float = 0.0
    hall_drift_V_per_s: float = 0.0
    phase_deg: float = 0.0
    reads_current: bool = False
    shunt_ohm: float = 100.0

    def sagging(self, rho_xx: Array, rho_xy: Array) -> Array:
        """The current in A at resistivities."""
        if self.series_ohm == 0.0:
            return np.full_like(rho_xx, self.current_A)
        own = rho_xx * (self.source_to_drain_squares or self.squares) + np.abs(rho_xy)
        return self.current_A * self.series_ohm / (self.series_ohm + self.contact_ohm + own)


@dataclass
class Stream:
    """Readings of one channel; ``status`` "ok", or why a reading is none (then x is nan)."""

    time_s: Array
    x: Array
    y: Array | None = None
    status: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.time_s, self.x = np.asarray(self.time_s, float), np.array(self.x, float)
        self.status = list(self.status) or ["ok"] * len(self.x)

    def spoil(self, where: Array, status: str) -> None:
        """Make readings at indices unusable with a status that says so."""
        for index in np.atleast_1d(where):
            self.status[int(index)] = status
            self.x[int(index)] = math.nan

    def keep(self, where: Array) -> Stream:
        """Only the readings of a boolean mask."""
        chosen = [one for one, kept in zip(self.status, where) if kept]
        return Stream(
            self.time_s[where], self.x[where], None if self.y is None else self.y[where], chosen
        )


Streams = dict[str, Stream]


def simulate(
    sample: Sample, rig: Rig, profile: Profile, rng: np.random.Generator
) -> Streams:
    """One ramp: streams "field" (T), "longitudinal" and "hall" (V), and "current" if it is read."""
    streams = {"field": _field(rig.meter, profile, rng)}
    shared: Array | None = None
    for channel, lockin in (("longitudinal", rig.longitudinal), ("hall", rig.hall)):
        times = reading_times(lockin, profile)
        clean = noise_free(channel, sample, rig, profile, times)
        noise = draw_lockin_noise(lockin, len(times), rng)
        if rig.common_noise:
            sign = math.copysign(1.0, rig.common_noise) if channel == "hall" else 1.0
            if shared is None:
                shared = draw_lockin_noise(lockin, len(times), rng)
            common = abs(rig.common_noise)
            noise = math.sqrt(1.0 - common) * noise + sign * math.sqrt(common) * shared
        turn = math.radians(rig.phase_deg)
        x = _rounded(clean * math.cos(turn) + noise, lockin.resolution_V)
        y = None
        if rig.phase_deg:
            across = draw_lockin_noise(lockin, len(times), rng)
            y = _rounded(clean * math.sin(turn) + across, lockin.resolution_V)
        streams[channel] = Stream(times, x, y)
    if rig.reads_current:
        lockin = rig.longitudinal
        times = reading_times(replace(lockin, offset_s=lockin.period_s * 0.3), profile)
        clean = noise_free("current", sample, rig, profile, times)
        noise = draw_lockin_noise(lockin, len(times), rng)
        streams["current"] = Stream(times, _rounded(clean + noise, lockin.resolution_V))
    return streams


def reading_times(lockin: LockIn, profile: Profile) -> Array:
    """Times of a lock-in's readings over a profile."""
    count = int((profile.end_s - lockin.offset_s) / lockin.period_s) + 1
    return np.asarray(lockin.offset_s + lockin.period_s * np.arange(count))


def draw_lockin_noise(lockin: LockIn, count: int, rng: np.random.Generator) -> Array:
    """Filtered noise of a lock-in at its readings: white, and 1/f below its corner."""
    noise = lockin.stages.white_noise(rng, lockin.density_V_per_rtHz, count, lockin.period_s)
    if lockin.corner_Hz > 0:
        spectrum = flicker(lockin.density_V_per_rtHz, lockin.corner_Hz, lockin.stages)
        noise = noise + draw_noise(rng, spectrum, count, lockin.period_s)
    return noise


def noise_free(
    channel: str, sample: Sample, rig: Rig, profile: Profile, times_s: Array
) -> Array:
    """A channel's voltage behind its filter, without noise, at evenly spaced times."""
    lockin = rig.hall if channel == "hall" else rig.longitudinal
    slope = rig.current_A * sample.hall_slope if channel == "hall" else 0.0
    line = slope * (profile.behind(lockin.stages, times_s) + rig.meter.zero_T)
    return np.asarray(line + _rest(channel, slope, sample, rig, profile, lockin, times_s))


def _rest(
    channel: str, slope: float, sample: Sample, rig: Rig, profile: Profile, lockin: LockIn,
    times_s: Array,
) -> Array:
    """What is not linear in field, through the stages on a fine grid."""
    fine = max(1, math.ceil(lockin.period_s / FINE_S))
    spacing = lockin.period_s / fine
    before = math.ceil(times_s[0] / spacing)
    grid = times_s[0] + spacing * np.arange(-before, fine * (len(times_s) - 1) + 1)
    fields = profile.at(grid) + rig.meter.zero_T
    whole = _at_sample(channel, sample, rig, fields, grid)
    rest = whole - slope * fields
    if np.ptp(rest) <= 1e-13 * np.abs(whole).max():
        return np.full(len(times_s), rest[0])
    return lockin.stages.follow(rest, spacing)[before::fine]


def _at_sample(channel: str, sample: Sample, rig: Rig, fields_T: Array, times_s: Array) -> Array:
    """A channel's voltage before its filter."""
    rho_xx, rho_xy = sample.rho(fields_T)
    after = np.maximum(times_s, 0.0)
    rho_xx = rho_xx * (1.0 + rig.warming_per_s * after)
    current = rig.sagging(rho_xx, rho_xy) * (1.0 + rig.gain_drift_per_s * after)
    if channel == "current":
        return np.asarray(current * rig.shunt_ohm)
    if channel == "longitudinal":
        return np.asarray(current * rho_xx * rig.squares)
    crossed = rho_xy + rig.misaligned_squares * rho_xx
    return np.asarray(current * crossed + rig.hall_drift_V_per_s * after)


def _field(meter: FieldMeter, profile: Profile, rng: np.random.Generator) -> Stream:
    count = int((profile.end_s - meter.offset_s) / meter.period_s) + 1
    times = meter.offset_s + meter.period_s * np.arange(count)
    true = profile.at(times - meter.delay_s)
    return Stream(times, _rounded(true + meter.noise_T * rng.standard_normal(count),
                                  meter.resolution_T))


def _rounded(values: Array, resolution: float) -> Array:
    return np.round(values / resolution) * resolution if resolution > 0 else values


def in_order(streams: Streams) -> list[tuple[str, float, float | None, float | None, str]]:
    """All readings as (channel, time, x, y, status), in the order of time."""
    rows = []
    for channel, stream in streams.items():
        ys = stream.y.tolist() if stream.y is not None else [None] * len(stream.x)
        for time_s, x, y, status in zip(stream.time_s.tolist(), stream.x.tolist(), ys,
                                        stream.status):
            lost = math.isnan(x)
            rows.append((channel, time_s, None if lost else x, None if lost else y, status))
    rows.sort(key=lambda row: row[1])
    return rows
