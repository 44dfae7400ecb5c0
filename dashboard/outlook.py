"""What a configuration lets expect of a ramp: the filters' lag, and the field of the target."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from acquire.config import Rig
from acquire.config.hall_bar import Signal
from acquire.probe import Probe
from analyse.lockin import LockinFilter


def lag_lines(rig: Rig, probes: Mapping[str, Probe]) -> Iterator[str]:
    """What the field does during each filter's delay at the planned rate, in words."""
    if rig.ramp is None:
        yield "No [ramp] is planned, so what the field does during the filters' delay is not known."
        return
    rate_T_per_s = rig.ramp.rate_T_per_min / 60
    for role, signal in _filtered(rig):
        stages = _stages(signal, probes.get(signal.reader))
        if stages is None:
            yield f"{role}: time constant or poles come from settings that were not answered."
            continue
        lag_mT = 1000 * stages.delay_s * rate_T_per_s
        yield (
            f"{role}: {stages.poles} poles of {stages.time_constant_s:g} s lag {stages.delay_s:g} s "
            f"behind; meanwhile the field moves {lag_mT:.3g} mT "
            f"at {rig.ramp.rate_T_per_min:g} T/min. That is taken into account."
        )


def _filtered(rig: Rig) -> Iterator[tuple[str, Signal]]:
    for bar in rig.hall_bars:
        signals = {"longitudinal": bar.longitudinal, "hall": bar.hall}
        if bar.excitation is not None and bar.excitation.measured is not None:
            signals["current"] = bar.excitation.measured
        for role, signal in signals.items():
            if signal.filter is not None:
                yield f"{bar.name}, {role}", signal


def _stages(signal: Signal, probe: Probe | None) -> LockinFilter | None:
    """The filter with numbers, some of which the instrument may have told; None if it has not."""
    assert signal.filter is not None
    settings = {} if probe is None else probe.settings
    time_constant_s = _given(signal.filter.time_constant_s, signal.filter.time_constant_setting, settings)
    poles = _given(signal.filter.poles, signal.filter.poles_setting, settings)
    if time_constant_s is None or poles is None:
        return None
    try:
        return LockinFilter(time_constant_s, int(poles))
    except ValueError:
        return None


def _given(
    number: float | None, setting: str | None, settings: Mapping[str, float | int | str | None]
) -> float | None:
    if number is not None or setting is None:
        return number
    value = settings.get(setting)
    return float(value) if isinstance(value, int | float) else None
