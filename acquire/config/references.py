"""Names in a configuration that must refer to something; checked on the raw file, so that these
mistakes are reported together with all the others."""

from __future__ import annotations

from collections import Counter
from typing import Any

from acquire.config.hold import check_hold
from acquire.config.problems import Problem, nearest_name

FILTER_SETTINGS = ("time_constant_setting", "poles_setting")
SIGNAL_SETTINGS = ("phase_setting", "full_scale_setting", "range_setting")


def check_references(raw: dict[str, Any]) -> list[Problem]:
    """Every reference that leads nowhere and every name given twice. Never raises."""
    problems: list[Problem] = []
    readers = _tables(raw.get("readers"))
    bars = _tables(raw.get("hall_bars"))
    table = raw.get("table")
    values = {r["name"]: _units(r) for r in readers if isinstance(r.get("name"), str)}
    settings = {
        r["name"]: [s.get("name") for s in _tables(r.get("settings"))]
        for r in readers
        if isinstance(r.get("name"), str)
    }
    if isinstance(table, dict):
        values["table"] = _units(table)
        problems += _twice("table.values", _tables(table.get("values")))
        if readers:
            problems.append(Problem("table", "a configuration has either readers or a table"))
    elif not readers:
        problems.append(Problem("readers", "missing: give [[readers]] or a [table]"))
    if not bars and "hall_bars" in raw:
        problems.append(Problem("hall_bars", "needs at least one Hall bar"))
    problems += _twice("readers", readers) + _twice("hall_bars", bars)
    for index, reader in enumerate(readers):
        problems += _twice(f"readers[{index}].values", _tables(reader.get("values")))
        problems += _twice(f"readers[{index}].settings", _tables(reader.get("settings")))

    field = raw.get("field")
    if isinstance(field, dict):
        problems += _refer("field", field, "value", values, ("T",))
    for index, bar in enumerate(bars):
        place = f"hall_bars[{index}]"
        excitation = bar.get("excitation")
        for role in ("longitudinal", "hall"):
            signal = bar.get(role)
            if isinstance(signal, dict):
                where = f"{place}.{role}"
                problems += _signal(where, signal, values, settings, ("V", "Ohm"))
                unit = values.get(_text(signal, "reader"), {}).get(_text(signal, "x"))
                if unit == "V" and "excitation" not in bar:
                    problems.append(Problem(f"{place}.excitation", "missing: voltages need it"))
        if isinstance(excitation, dict) and isinstance(excitation.get("measured"), dict):
            measured = excitation["measured"]
            units = ("V",) if "shunt_ohm" in measured else ("A",)
            where = f"{place}.excitation.measured"
            problems += _signal(where, measured, values, settings, units)
    return problems + check_hold(raw)


def _signal(
    place: str,
    signal: dict[str, Any],
    values: dict[str, dict[str, str]],
    settings: dict[str, list[Any]],
    units: tuple[str, ...],
) -> list[Problem]:
    problems = _refer(place, signal, "x", values, units)
    if "y" in signal:
        problems += [p for p in _refer(place, signal, "y", values, units) if ".reader" not in p.path]
    known = settings.get(_text(signal, "reader"), [])
    named = [(key, signal.get(key)) for key in SIGNAL_SETTINGS]
    stages = signal.get("filter")
    if isinstance(stages, dict):
        named += [(f"filter.{key}", stages.get(key)) for key in FILTER_SETTINGS]
    for key, name in named:
        if isinstance(name, str) and name not in known:
            rule = f"reader {signal.get('reader')!r} has no such setting"
            nearest = nearest_name(name, [str(one) for one in known])
            problems.append(Problem(f"{place}.{key}", rule, repr(name), nearest))
    return problems


def _refer(
    place: str,
    section: dict[str, Any],
    key: str,
    values: dict[str, dict[str, str]],
    units: tuple[str, ...],
) -> list[Problem]:
    reader, value = section.get("reader"), section.get(key)
    if not isinstance(reader, str) or not isinstance(value, str):
        return []
    if reader not in values:
        nearest = nearest_name(reader, list(values))
        return [Problem(f"{place}.reader", "no reader has this name", repr(reader), nearest)]
    if value not in values[reader]:
        nearest = nearest_name(value, list(values[reader]))
        return [Problem(f"{place}.{key}", f"{reader!r} has no such value", repr(value), nearest)]
    if values[reader][value] not in units:
        rule = f"the value's unit must be {' or '.join(units)}"
        return [Problem(f"{place}.{key}", rule, repr(values[reader][value]))]
    return []


def _text(section: dict[str, Any], key: str) -> str:
    """The text under a key; empty, which is no name, where something else is."""
    value = section.get(key)
    return value if isinstance(value, str) else ""


def _tables(node: object) -> list[dict[str, Any]]:
    return [item for item in node if isinstance(item, dict)] if isinstance(node, list) else []


def _units(reader: dict[str, Any]) -> dict[str, str]:
    return {
        value["name"]: value.get("unit", "V")
        for value in _tables(reader.get("values"))
        if isinstance(value.get("name"), str)
    }


def _twice(place: str, items: list[dict[str, Any]]) -> list[Problem]:
    counts = Counter(str(item["name"]) for item in items if "name" in item)
    return [Problem(place, "name given twice", repr(n)) for n, count in counts.items() if count > 1]
