"""Readings through the same estimator once more, as fast as it goes."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import asdict
from typing import Any

from acquire.config.rig import Rig
from acquire.readings import Reading
from analyse.estimate import Estimate
from analyse.numbers import Number
from analyse.row_maker import Record, RowMaker, merge_by_time

__all__ = ["Record", "RowMaker", "merge_by_time", "replay_readings", "result"]


def replay_readings(maker: RowMaker, readings: Iterable[Reading]) -> Iterator[Record]:
    """Records, in order, of readings given in order per reader; rows without seq."""
    for reading in readings:
        yield from maker.take(reading)
    yield from maker.finish()


def _number(number: Number | None) -> dict[str, Any] | None:
    if number is None:
        return None
    return {
        "value": number.value,
        "standard_uncertainty": number.standard_uncertainty,
        "interval": [number.low, number.high],
        "confidence": number.confidence,
        "expanded_uncertainty": number.expanded_uncertainty,
        "degrees_of_freedom":
        number.degrees_of_freedom if math.isfinite(number.degrees_of_freedom) else None,
        "statistical": number.statistical,
        "model": number.model,
        "systematic": number.systematic,
    }


def _hall_bar(one: Estimate) -> dict[str, Any]:
    stable = one.stable_at
    seen: dict[str, str] = {}
    for caution in one.cautions:
        seen.setdefault(caution.code, caution.text)
    derived = None
    if one.transport is not None:
        derived = {
            name: getattr(one.transport, name)
            for name in one.transport.__dataclass_fields__
            if name != "sheet_density_per_m2"
        }
        if one.field_T:
            derived["filling_factor"] = one.transport.filling_factor(one.field_T)
    return {
        "sheet_density_per_m2": _number(one.sheet_density),
        "mobility_m2_per_V_s": _number(one.mobility),
        "scattering_time_s": _number(one.scattering_time),
        "carriers": one.carriers,
        "window_T": list(one.window_T) if one.window_T is not None else None,
        "field_points": one.field_points,
        "verdict": one.verdict,
        "stable_at": None if stable is None else
        {"time_s": stable.time_s, "field_T": stable.field_T},
        "cautions": [{"code": code, "text": text} for code, text in seen.items()],
        "waiting_for": list(one.waiting_for),
        "rho_0_ohm": None if one.rho_0 is None else one.rho_0.value,
        "hall_slope_ohm_per_T": None if one.hall_slope is None else one.hall_slope.value,
        "hall_offset_ohm": one.hall_offset_ohm,
        "quick_density_per_m2": one.quick_density.density_per_m2 if one.quick_density else None,
        "quick_mobility_m2_per_V_s":
        one.quick_mobility.mobility_m2_per_V_s if one.quick_mobility else None,
        "derived": derived,
        "budget": [
            {"source": line.source, "kind": line.kind,
             "sheet_density_relative": line.sheet_density,
             "mobility_relative": line.mobility,
             "scattering_time_relative": line.scattering_time}
            for line in one.budget
        ],
        "sweeps": [asdict(sweep) for sweep in one.sweeps],
    }


_NOTHING: dict[str, Any] = {
    "sheet_density_per_m2": None, "mobility_m2_per_V_s": None, "scattering_time_s": None,
    "carriers": "unknown", "window_T": None, "field_points": 0, "verdict": "converging",
    "stable_at": None, "cautions": [], "waiting_for": ["no field point is complete yet"],
    "rho_0_ohm": None, "hall_slope_ohm_per_T": None, "hall_offset_ohm": None,
    "quick_density_per_m2": None, "quick_mobility_m2_per_V_s": None, "derived": None,
    "budget": [], "sweeps": [],
}


def result(run: str, rig: Rig, latest: dict[str, Estimate]) -> dict[str, Any]:
    """The result of a run as plain data: what ``rampside replay --json`` prints."""
    bars = {
        bar.name: _hall_bar(latest[bar.name]) if bar.name in latest else dict(_NOTHING)
        for bar in rig.hall_bars
    }
    return {"run": run, "hall_bars": bars}
