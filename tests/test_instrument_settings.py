"""Settings that change in mid-run: from which reading on they hold, and what is left out."""

from __future__ import annotations

import json
import math
import random
from collections.abc import Callable, Iterable
from dataclasses import replace

import pytest
from bench_readers import read
from simulated_bar import Sample
from two_bars import interleaved

from acquire.config import ConfigError, Rig, parse
from acquire.laboratory.bench import Bench
from acquire.laboratory.scenario import Scenario
from acquire.readings import Reading
from analyse import LockinFilter
from analyse.estimate import Estimate
from analyse.pairing import Pair
from analyse.replay import RowMaker, merge_by_time, replay_readings
from analyse.rig import RigEstimator
from analyse.row_maker import DETERMINED, Record

SLOW, FAST = (0.3, 4), (0.1, 2)
TRUTH = Sample(3e15, 20.0, filter=SLOW)
SETTINGS = ("T", "n", "phase", "sens")
CHANGE_S = 30.0

_LOCKIN = """
[[readers]]
name = "{name}"
resource = "TCPIP::127.0.0.1::5025::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["XY?"]
fields = 2
period_s = 0.2
values = [{{ name = "X", position = 1 }}, {{ name = "Y", position = 2 }}]
settings = [{settings}]
"""


def config(hall: str) -> bytes:
    told = ", ".join(f'{{ name = "{name}", query = "{name}?" }}' for name in SETTINGS)
    return f"""
[run]
title = "settings"
[ramp]
path_T = [0.0, 1.0]
rate_T_per_min = 1.0
[field]
reader = "magnet"
value = "B"
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = {{ reader = "along", x = "X", filter = {{ time_constant_s = 0.3, poles = 4 }} }}
hall = {{ reader = "across", x = "X", {hall} }}
excitation = {{ current_A = 1e-6 }}
[[readers]]
name = "magnet"
resource = "TCPIP::127.0.0.1::5025::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["B?"]
period_s = 0.2
values = [{{ name = "B", position = 1, unit = "T" }}]
{_LOCKIN.format(name="along", settings="")}
{_LOCKIN.format(name="across", settings=told)}
""".encode()


KNOWN_FILTER = "filter = { time_constant_s = 0.3, poles = 4 }"
TOLD_FILTER = 'filter = { time_constant_setting = "T", poles_setting = "n" }'

Values = dict[str, object]
PLAIN: Values = {"T": 0.3, "n": 4, "phase": 0.0, "sens": 1.0}


def settings(seq: int, time_s: float, **values: object) -> Reading:
    told = {name: {"raw": str(value), "value": value} for name, value in values.items()}
    detail = json.dumps({"settings": told})
    return Reading("across", seq, time_s, None, "settings", detail, (None, None))


def rows(
    across: Callable[[float, float], tuple[float, float]] = lambda time_s, x: (x, 0.0),
    changed: Values | None = None,
    after: tuple[float, int] = SLOW,
    told_s: float = CHANGE_S,
) -> dict[str, list[Reading]]:
    """Rows of a ramp in mid of which the Hall lock-in's filter becomes ``after``; ``across`` makes
    X and Y of its reading, ``changed`` is what its reader tells at ``told_s``."""
    before, later = TRUTH.streams(3), replace(TRUTH, filter=after).streams(3)
    found: dict[str, list[Reading]] = {"magnet": [], "along": [], "across": []}
    for _, time_s, field_T, _, _ in before["field"]:
        row = Reading("magnet", len(found["magnet"]), time_s, 0.01, "ok", "", (field_T,))
        found["magnet"].append(row)
    for _, time_s, x, _, _ in before["longitudinal"]:
        row = Reading("along", len(found["along"]), time_s, 0.01, "ok", "", (x, 0.0))
        found["along"].append(row)
    hall = [settings(0, 0.0, **PLAIN)]
    told = changed is None
    for one, two in zip(before["hall"], later["hall"]):
        _, time_s, x, _, _ = one if one[1] < CHANGE_S else two
        if not told and time_s >= told_s:
            hall.append(settings(len(hall), told_s, **{**PLAIN, **(changed or {})}))
            told = True
        assert x is not None
        hall.append(Reading("across", len(hall), time_s, 0.01, "ok", "", across(time_s, x)))
    found["across"] = hall
    for reader, known in found.items():
        width = len(known[-1].values)
        known.append(Reading(reader, len(known), 61.0, None, "end", "", (None,) * width))
    return found


def pairs_and_estimates(
    rig: Rig, readings: Iterable[Reading]
) -> tuple[list[Pair], list[Estimate]]:
    """The Hall pairs in their order, and all estimates."""
    one, pairs = RigEstimator(rig), list[Pair]()
    estimator = one.estimators["bar"]
    take = estimator._take

    def noting(pair: Pair) -> None:
        pairs.append(pair)
        take(pair)

    estimator._take = noting  # type: ignore[method-assign]
    estimates = [two for reading in readings for _, two in one.take(reading)]
    estimates += [two for _, two in one.end()]
    return [pair for pair in pairs if pair.role == "hall"], estimates


def misses(estimates: list[Estimate]) -> float:
    """By how much the density misses the truth, in m^-2."""
    density = estimates[-1].sheet_density
    assert density is not None
    return abs(density.value - TRUTH.density_per_m2)


def error_of(estimates: list[Estimate]) -> float:
    """The same in half-widths of its interval."""
    density = estimates[-1].sheet_density
    assert density is not None
    return misses(estimates) / (0.5 * (density.high - density.low))


def test_a_time_constant_that_changes_is_used_from_its_reading_on() -> None:
    rig = parse(config(TOLD_FILTER))
    found = rows(changed={"T": 0.1, "n": 2}, after=FAST)
    pairs, estimates = pairs_and_estimates(rig, merge_by_time(found))
    used = {pair.time_s: pair.stages for pair in pairs if pair.kind == "ok"}
    assert {stages for time_s, stages in used.items() if time_s < CHANGE_S} == {LockinFilter(0.3, 4)}
    assert {stages for time_s, stages in used.items() if time_s > CHANGE_S} == {LockinFilter(0.1, 2)}
    settle_s = LockinFilter(0.1, 2).settle_s(1e-3)
    left_out = [pair.kind for pair in pairs if CHANGE_S < pair.time_s < CHANGE_S + settle_s]
    assert left_out and set(left_out) == {"no_field"}
    assert min(time_s for time_s in used if time_s > CHANGE_S) < CHANGE_S + settle_s + 0.7
    assert error_of(estimates) < 1
    wrong = rows(after=FAST)
    assert error_of(pairs_and_estimates(rig, merge_by_time(wrong))[1]) > 1


def test_a_phase_that_changes_is_used_from_its_reading_on() -> None:
    def across(time_s: float, x: float) -> tuple[float, float]:
        angle = math.radians(40.0 - (25.0 if time_s >= CHANGE_S else 0.0))
        return x * math.cos(angle), x * math.sin(angle)

    rig = parse(
        config(
            'y = "Y", detection = "XY", phase_deg = 40.0, phase_setting = "phase", '
            + KNOWN_FILTER
        )
    )
    pairs, estimates = pairs_and_estimates(rig, merge_by_time(rows(across, {"phase": 25.0})))
    assert error_of(estimates) < 1
    assert not {one.code for one in estimates[-1].cautions} & {"phase_wrong", "unusable_readings"}
    quadrature = [abs(pair.quadrature_ohm or 0.0) for pair in pairs if pair.kind == "ok"]
    assert max(quadrature) < 1e-6
    assert error_of(pairs_and_estimates(rig, merge_by_time(rows(across)))[1]) > 1


def test_readings_that_are_shares_of_the_full_scale() -> None:
    def across(time_s: float, x: float) -> tuple[float, float]:
        return x / (3e-3 if time_s >= CHANGE_S else 1.0), 0.0

    rig = parse(config(f'full_scale_setting = "sens", {KNOWN_FILTER}'))
    _, estimates = pairs_and_estimates(rig, merge_by_time(rows(across, {"sens": 3e-3})))
    assert error_of(estimates) < 1


@pytest.mark.parametrize("told_s", [30.4, 31.0, 33.0])
def test_readings_beside_a_change_of_range_are_not_used(told_s: float) -> None:
    """Some while it switches, and it is noticed only afterwards, when the settings are asked:
    before the readings are back, or after."""

    def across(time_s: float, x: float) -> tuple[float, float]:
        return (0.3 * x if CHANGE_S <= time_s < CHANGE_S + 1.0 else x), 0.0

    rig = parse(config(f'range_setting = "sens", {KNOWN_FILTER}'))
    pairs, estimates = pairs_and_estimates(
        rig, merge_by_time(rows(across, {"sens": 0.1}, told_s=told_s))
    )
    glitch = [pair for pair in pairs if CHANGE_S <= pair.time_s < CHANGE_S + 1.0]
    assert len(glitch) == 5
    assert {pair.kind for pair in glitch} <= {"wild", "no_field", "lost"}
    settling = [pair.kind for pair in pairs if told_s < pair.time_s < told_s + 2.0]
    assert "ok" not in settling
    assert error_of(estimates) < 1


def test_without_a_known_filter_some_readings_after_a_change_are_passed_over() -> None:
    rig = parse(config('range_setting = "sens"'))
    pairs, _ = pairs_and_estimates(rig, merge_by_time(rows(changed={"sens": 0.1})))
    after = [pair.kind for pair in pairs if pair.time_s > CHANGE_S]
    assert after[:3] == ["lost"] * 3
    assert set(after[3:-1]) == {"ok"}  # behind the last one no field follows


@pytest.mark.parametrize(
    ("hall", "name"),
    [
        (TOLD_FILTER, "T"),
        (f'y = "Y", detection = "XY", phase_setting = "phase", {KNOWN_FILTER}', "phase"),
        (f'full_scale_setting = "sens", {KNOWN_FILTER}', "sens"),
    ],
)
def test_while_a_code_is_not_known_nothing_is_used_and_that_is_said(hall: str, name: str) -> None:
    rig = parse(config(hall))
    found = rows(changed={name: None})
    pairs, estimates = pairs_and_estimates(rig, merge_by_time(found))
    assert {pair.kind for pair in pairs if pair.time_s > CHANGE_S} == {"lost"}
    assert "stream_silent" in {one.code for one in estimates[-1].cautions}
    back = next(k for k, row in enumerate(found["across"]) if row.time_s > 40.0)
    found["across"].insert(back, settings(0, 40.0, **PLAIN))
    pairs, _ = pairs_and_estimates(rig, merge_by_time(found))
    settle_s = LockinFilter(*SLOW).settle_s(1e-3)
    assert "ok" not in {pair.kind for pair in pairs if CHANGE_S < pair.time_s < 40.0 + settle_s}
    later = [pair.kind for pair in pairs if pair.time_s > 40.5 + settle_s]
    assert set(later[:-1]) == {"ok"}


def made(rig: Rig, readings: Iterable[Reading]) -> list[Record]:
    return list(replay_readings(RowMaker(rig), readings))


def test_a_change_is_an_event_at_its_field_point_whatever_the_order_of_arrival() -> None:
    """And live as in replay: the tables are made of the readers' rows in any order."""
    rig = parse(config(TOLD_FILTER))
    found = rows(changed={"T": 0.1, "n": 2}, after=FAST)
    reference = made(rig, merge_by_time(found))
    for seed in range(4):
        assert made(rig, interleaved(random.Random(seed), found)) == reference
    events = [record.cells for record in reference if record.stream == "events"]
    told = [cells for cells in events if cells[1] == "setting"]
    row = next(one.seq for one in found["across"] if one.status == "settings" and one.seq)
    where = f"that holds from its row {row + 1} on, at 30.000 s"
    assert [cells[2:5] for cells in told] == [
        ("bar", "T", f"across: T has changed from 0.3 to 0.1; {where}"),
        ("bar", "n", f"across: n has changed from 4 to 2; {where}"),
    ]
    assert all(CHANGE_S < cells[0] < CHANGE_S + 0.5 for cells in told)  # type: ignore[operator]
    assert "setting" in DETERMINED


def test_a_time_constant_turned_in_mid_ramp_of_the_simulated_laboratory() -> None:
    """From the knob to the answer: noticed within a second, used from then on; a reader that does
    not ask again leaves the truth."""
    scenario = {
        "current_A": 1e-6,
        "sample": {
            "sheet_density_per_m2": TRUTH.density_per_m2,
            "mobility_m2_per_V_s": TRUTH.mobility,
            "quantum_lifetime_s": 1e-13,
            "carriers": "holes",
        },
        "magnet": {"path_T": [0.0, 1.0], "rate_T_per_min": 1.0, "wait_s": 1.0},
        "lockins": [
            {"name": "along", "measures": "longitudinal", "noise_V_per_rtHz": 1e-7},
            {"name": "across", "measures": "hall", "noise_V_per_rtHz": 1e-7},
        ],
    }
    text = config(TOLD_FILTER).decode()
    text = text.replace('queries = ["B?"]', 'queries = ["FIELD?"]')
    start = text.index("settings = [{ name = \"T\"")
    for again_s in (1.0, 0.0):
        asked = f"""settings_period_s = {again_s}
settings = [{{ name = "T", query = "TIMECONSTANT?", codes = {{ "5" = 0.3, "6" = 1.0 }} }},
            {{ name = "n", query = "SLOPE?", codes = {{ "3" = 4 }} }}]
"""
        rig = parse((text[:start] + asked).encode())
        found = read(
            rig, Bench(Scenario.model_validate(scenario)), 62.0, [(30.0, "across", "TIMECONSTANT 6")]
        )
        told = [row for row in found["across"] if row.status == "settings"]
        pairs, estimates = pairs_and_estimates(rig, merge_by_time(found))
        if not again_s:
            assert len(told) == 1
            assert misses(estimates) > 3 * right
            continue
        assert len(told) == 2
        assert 30.0 < told[1].time_s < 31.5
        used = {pair.time_s: pair.stages for pair in pairs if pair.kind == "ok"}
        later = {stages for time_s, stages in used.items() if time_s > told[1].time_s}
        assert later == {LockinFilter(1.0, 4)}
        assert min(t for t in used if t > told[1].time_s) > told[1].time_s + 10.0
        assert error_of(estimates) < 1
        right = misses(estimates)
        events = [one.cells for one in made(rig, merge_by_time(found)) if one.stream == "events"]
        assert [cells[3] for cells in events if cells[1] == "setting"] == ["T"]


@pytest.mark.parametrize("key", ["phase_setting", "full_scale_setting", "range_setting"])
def test_a_setting_that_is_not_asked_for_is_a_mistake(key: str) -> None:
    xy = 'y = "Y", detection = "XY", ' if key == "phase_setting" else ""
    with pytest.raises(ConfigError, match=f"hall.{key}.*no such setting.*did you mean sens"):
        parse(config(f'{xy}{key} = "senss"'))


def test_a_phase_needs_both_components() -> None:
    with pytest.raises(ConfigError, match="phase_setting needs detection"):
        parse(config('phase_setting = "phase"'))
