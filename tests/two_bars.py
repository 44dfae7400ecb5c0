"""A configuration with two Hall bars that share field and current, and rows of its readers."""

from __future__ import annotations

import json
import random
from collections.abc import Iterable

from simulated_bar import Sample

from acquire.config import Rig, parse
from acquire.readings import Reading

_READER = """
[[readers]]
name = "{name}"
resource = "TCPIP::127.0.0.1::5025::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["{query}?"]
fields = {fields}
period_s = 0.2
{values}
"""

CONFIG = (
    """
[run]
title = "two-bars"
[ramp]
path_T = [0.0, 1.0]
rate_T_per_min = 1.5
[target]
sheet_density_relative = 0.02
mobility_relative = 0.02
[field]
reader = "magnet"
value = "B"
[[hall_bars]]
name = "left"
squares = 4.0
material = "GaAs"
longitudinal = { reader = "lockin_1", x = "X", filter = { time_constant_setting = "T", poles = 2 } }
hall = { reader = "lockin_2", x = "X", y = "Y", detection = "XY", filter = { time_constant_setting = "T", poles = 2 } }
excitation = { measured = { reader = "meter", x = "I", shunt_ohm = 1e4 } }
[[hall_bars]]
name = "right"
length_m = 2e-4
width_m = 1e-4
material = "InAs"
expected_carriers = "electrons"
longitudinal = { reader = "lockin_1", x = "aux", gain = 10.0 }
hall = { reader = "lockin_2", x = "aux", gain = 10.0, sign = -1 }
excitation = { measured = { reader = "meter", x = "I", shunt_ohm = 1e4 } }
"""
    + "".join(
        _READER.format(name=name, query=query, fields=fields, values=values)
        for name, query, fields, values in (
            ("magnet", "B", 1, 'values = [{ name = "B", position = 1, unit = "T", scale = 1e-3 }]'),
            (
                "lockin_1", "XA", 2,
                ('values = [{ name = "X", position = 1 }, { name = "aux", position = 2 }]\n'
                'settings = [{ name = "T", query = "OFLT?" }]'),
            ),
            (
                "lockin_2", "XYA", 3,
                ('values = [{ name = "X", position = 1, scale = 1e-3 }, { name = "Y", position = 2 },'
                ' { name = "aux", position = 3 }]\nsettings = [{ name = "T", query = "OFLT?" }]'),
            ),
            ("meter", "I", 1, 'values = [{ name = "I", position = 1 }]'),
        )
    )
).encode()  # fmt: skip

LEFT = Sample(3e15, 20.0, corners=((0.0, 0.0), (40.0, 1.0)), filter=(0.1, 2), noise_V=1e-6)
RIGHT = Sample(-8e15, 8.0, 2.0, corners=LEFT.corners, filter=None, noise_V=1e-6)


def rig() -> Rig:
    """The configuration, validated."""
    return parse(CONFIG)


def settings_row(reader: str, seq: int, time_s: float, time_constant_s: object) -> Reading:
    """A row that tells the lock-in's time constant."""
    detail = {"identity": "", "settings": {"T": {"raw": "8", "value": time_constant_s}}}
    nothing = (None,) * {"lockin_1": 2, "lockin_2": 3}.get(reader, 1)
    return Reading(reader, seq, time_s, None, "settings", json.dumps(detail), nothing)


def rows(seed: int = 1, end: bool = True) -> dict[str, list[Reading]]:
    """By reader; the lock-ins' values for both bars, now and then a row without an answer."""
    rng = random.Random(seed)
    left, right = LEFT.streams(seed), RIGHT.streams(seed + 1000)
    found: dict[str, list[Reading]] = {"magnet": [], "lockin_1": [], "lockin_2": [], "meter": []}
    for reader in ("lockin_1", "lockin_2"):
        found[reader].append(settings_row(reader, 0, 0.0, 0.1))
    for _, t, field_T, _, _ in left["field"]:
        _add(found["magnet"], rng, "magnet", t, (1e3 * (field_T or 0.0),))
        _add(found["meter"], rng, "meter", t + 0.03, (1e-2 * (1 + rng.gauss(0, 1e-5)),))
    for one, other in zip(left["longitudinal"], right["longitudinal"]):
        _add(found["lockin_1"], rng, "lockin_1", one[1], (one[2], 10 * (other[2] or 0.0)))
    for one, other in zip(left["hall"], right["hall"]):
        x, aux = 1e3 * (one[2] or 0.0), -10 * (other[2] or 0.0)
        _add(found["lockin_2"], rng, "lockin_2", one[1] + 0.04, (x, rng.gauss(0, 1e-6), aux))
    if end:
        for reader, known in found.items():
            width = len(known[-1].values)
            known.append(Reading(reader, len(known), 40.5, None, "end", "", (None,) * width))
    return found


def _add(
    known: list[Reading], rng: random.Random, reader: str, t: float, values: tuple[float | None, ...]
) -> None:
    status = "ok"
    if rng.random() < 0.03:
        status, values = "no_answer", (None,) * len(values)
    known.append(Reading(reader, len(known), t, 0.01, status, "", values))


def interleaved(rng: random.Random, found: dict[str, list[Reading]]) -> Iterable[Reading]:
    """All rows in bursts, each reader's own order kept."""
    left = {name: list(known) for name, known in found.items()}
    while left:
        name = rng.choice(sorted(left))
        count = rng.choice([1, 2, 30])
        yield from left[name][:count]
        left[name] = left[name][count:]
        if not left[name]:
            del left[name]
