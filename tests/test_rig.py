"""From a configuration and readers' rows to estimators and their channels."""

from __future__ import annotations

import json
import pickle
from dataclasses import replace
from typing import Any

import pytest
from two_bars import CONFIG, LEFT, RIGHT, rig, rows, settings_row

from acquire.config import parse
from acquire.readings import Reading
from analyse import HallBar, LockinFilter, Ramp, Signal, Target, Window
from analyse.replay import merge_by_time
from analyse.rig import RigEstimator


def taken(one: RigEstimator, readings: list[Reading]) -> list[tuple[str, Any]]:
    """What all rows and the end complete."""
    found = [pair for reading in readings for pair in one.take(reading)]
    return [*found, *one.end()]


def table_config(more: str = "", time: str = "") -> bytes:
    """One Hall bar out of a table of resistances."""
    return f"""
[run]
title = "table"
[field]
reader = "table"
value = "B"
relative_standard_uncertainty = 0.003
[table]
{time}
values = [
  {{ name = "B", column = 1, unit = "T" }},
  {{ name = "xx", column = 2, unit = "Ohm", scale = 1e3 }},
  {{ name = "xy", column = 3, unit = "Ohm" }},
]
[[hall_bars]]
name = "bar"
squares = 2.5
material = "GaAs"
longitudinal = {{ reader = "table", x = "xx", filter = {{ time_constant_s = 0.3, poles = 4 }} }}
hall = {{ reader = "table", x = "xy", relative_standard_uncertainty = 0.002 }}
{more}
""".encode()


def test_both_bars_find_their_truth() -> None:
    one = RigEstimator(rig())
    assert set(one.readers) == {"magnet", "lockin_1", "lockin_2", "meter"}
    found = dict(taken(one, list(merge_by_time(rows()))))
    for name, sample, carriers in (("left", LEFT, "holes"), ("right", RIGHT, "electrons")):
        last = found[name]
        assert last.carriers == carriers
        assert last.sheet_density.low <= abs(sample.density_per_m2) <= last.sheet_density.high
        assert last.mobility.low <= sample.mobility <= last.mobility.high
        assert last.mobility.value == pytest.approx(sample.mobility, rel=0.02)


def test_what_the_configuration_says_reaches_the_estimator() -> None:
    left, right = RigEstimator(rig()).estimators.values()
    assert left.bar == HallBar(4.0, "GaAs")
    assert right.bar == HallBar(2.0, "InAs")
    assert right.setup.expected_carriers == "electrons"
    assert left.setup.ramp == Ramp((0.0, 1.0), 1.5)
    assert left.setup.target == Target(0.95, 0.02, 0.02, None, True)
    assert left.setup.window == Window()
    assert left.setup.hall == Signal(detection="XY")
    assert right.setup.hall == Signal(gain=10.0, sign=-1)
    for bar in (left, right):
        assert bar.setup.excitation is not None
        assert bar.setup.excitation.measured == Signal()
        assert bar.setup.excitation.shunt_ohm == 1e4
        assert bar.setup.field.longest_gap_s == pytest.approx(1.0)  # five periods


def test_a_longest_gap_that_is_given() -> None:
    config = CONFIG.replace(b'value = "B"\n', b'value = "B"\nlongest_gap_s = 7.0\ndelay_s = 0.2\n', 1)
    left = RigEstimator(parse(config)).estimators["left"]
    assert (left.setup.field.longest_gap_s, left.setup.field.delay_s) == (7.0, 0.2)


def test_a_table_of_resistances() -> None:
    window = "[window]\nlow_T = 0.1\nhigh_T = 0.9\n"
    one = RigEstimator(parse(table_config(window, "time = { column = 4 }"))).estimators["bar"]
    assert one.setup.longitudinal == Signal(LockinFilter(0.3, 4), resistance=True)
    assert one.setup.hall == Signal(resistance=True, relative_uncertainty=0.002)
    assert one.setup.excitation is None
    assert one.setup.field.longest_gap_s is None
    assert one.setup.field.relative_uncertainty == 0.003
    assert one.setup.window == Window(0.1, 0.9)


def test_without_times_no_delay_can_be_taken_out() -> None:
    one = RigEstimator(parse(table_config())).estimators["bar"]
    assert one.setup.longitudinal.filter is None


def test_columns_and_scales_of_a_table() -> None:
    one = RigEstimator(parse(table_config(time="time = { column = 4 }")))
    readings = [
        Reading("table", k, float(k), None, "ok", "", (0.01 * k, 0.1, 20.0 * k)) for k in range(40)
    ]
    found = [estimate for _, estimate in taken(one, readings)]
    assert found[-1].rho_xy_ohm == pytest.approx(780.0)
    assert found[-1].rho_xx_ohm == pytest.approx(100.0 / 2.5)


def test_an_unknown_material_is_refused() -> None:
    with pytest.raises(ValueError, match="'Unobtainium' is not in the table"):
        RigEstimator(parse(CONFIG.replace(b'material = "GaAs"', b'material = "Unobtainium"')))


# ---- settings ----


@pytest.fixture(scope="module")
def halfway() -> tuple[bytes, list[Reading]]:
    """The pickled estimators after 20 s, and all rows."""
    readings = list(merge_by_time(rows(end=False)))
    one = RigEstimator(rig())
    assert used(one, [reading for reading in readings if reading.time_s < 20]).count("ok") > 60
    return pickle.dumps(one), readings


def used(one: RigEstimator, readings: list[Reading]) -> list[str]:
    """Kinds of the left bar's Hall pairs, in order."""
    estimator = one.estimators["left"]
    before = dict(estimator._watch["hall"].counts)
    for reading in readings:
        for _ in one.take(reading):
            pass
    counts = estimator._watch["hall"].counts
    return [kind for kind in counts for _ in range(counts[kind] - before.get(kind, 0))]


def test_until_the_filter_is_known_nothing_is_used() -> None:
    found = rows()
    late = settings_row("lockin_2", 0, 15.0, 0.1)
    found["lockin_2"] = [one for one in found["lockin_2"] if one.status != "settings"]
    early = {name: [one for one in known if one.time_s < 15] for name, known in found.items()}
    one = RigEstimator(rig())
    assert set(used(one, list(merge_by_time(early)))) == {"lost"}
    rest = {name: [one for one in known if one.time_s >= 15] for name, known in found.items()}
    for _ in one.take(late):
        pass
    kinds = used(one, list(merge_by_time(rest)))
    assert kinds.count("ok") > 100


@pytest.mark.parametrize(
    "detail",
    [
        "",
        "not JSON",
        "[]",
        "null",
        '{"settings": null}',
        '{"settings": {"T": 3}}',
        '{"settings": {"T": {"raw": "8"}}}',
        '{"settings": {"T": {"value": null}}}',
        '{"settings": {"T": {"value": "0.1"}}}',
        '{"settings": {"T": {"value": true}}}',
        '{"settings": {"T": {"value": 0.0}}}',
        '{"settings": {"T": {"value": -0.1}}}',
        '{"settings": {"T": {"value": Infinity}}}',
        '{"settings": {"T": {"value": NaN}}}',
        '{"settings": {"other": {"value": 0.1}}}',
    ],
)
def test_settings_that_say_no_time_constant_stop_the_use_of_readings(
    halfway: tuple[bytes, list[Reading]], detail: str
) -> None:
    state, readings = halfway
    one = pickle.loads(state)
    bad = replace(settings_row("lockin_2", 0, 20.0, 0.1), detail=detail)
    for _ in one.take(bad):
        pass
    kinds = used(one, [reading for reading in readings if 20.5 <= reading.time_s < 30])
    assert kinds.count("ok") < 5  # those that were read before
    assert kinds.count("lost") > 40


@pytest.mark.parametrize("poles", ["4", "0", "2.5", "1e9", "Infinity", '"4"', "null"])
def test_poles_out_of_a_setting(poles: str) -> None:
    config = CONFIG.replace(b"poles = 2 } }\nexc", b'poles_setting = "n" } }\nexc').replace(
        b'settings = [{ name = "T", query = "OFLT?" }]\n\n[[readers]]\nname = "meter"',
        b'settings = [{ name = "T", query = "OFLT?" }, { name = "n", query = "OFSL?" }]\n\n'
        b'[[readers]]\nname = "meter"',
    )
    one = RigEstimator(parse(config))
    detail = '{"settings": {"T": {"value": 0.1}, "n": {"value": POLES}}}'.replace("POLES", poles)
    for _ in one.take(replace(settings_row("lockin_2", 0, 0.0, 0.1), detail=detail)):
        pass
    track = one.estimators["left"]._pairing._voltages["hall"].track
    assert track is not None
    assert track.stages == (LockinFilter(0.1, 4) if poles == "4" else None)


def test_settings_that_say_nothing_new_cost_nothing() -> None:
    readings = list(merge_by_time(rows(end=False)))
    again = [settings_row(reader, 0, 20.0, 0.1) for reader in ("lockin_1", "lockin_2")]
    place = next(k for k, reading in enumerate(readings) if reading.time_s >= 20)
    plain = taken(RigEstimator(rig()), readings)
    assert taken(RigEstimator(rig()), [*readings[:place], *again, *readings[place:]]) == plain
    other = [replace(one, detail=json.dumps({"settings": {"T": {"value": 0.3}}})) for one in again]
    assert taken(RigEstimator(rig()), [*readings[:place], *other, *readings[place:]]) != plain


# ---- ends ----


def test_a_row_that_says_end_ends_nothing_by_itself() -> None:
    """The reader may have been ended and started again; what comes then is used as before."""
    found = rows()
    width = len(found["lockin_1"][-1].values)
    ended = Reading("lockin_1", 0, 20.0, None, "end", "", (None,) * width)
    plain = list(merge_by_time(found))
    place = next(k for k, reading in enumerate(plain) if reading.time_s >= 20)
    broken = [*plain[:place], ended, settings_row("lockin_1", 0, 20.0, 0.1), *plain[place:]]
    assert taken(RigEstimator(rig()), broken) == taken(RigEstimator(rig()), plain)


def test_rows_of_a_reader_that_nobody_needs_are_passed_over() -> None:
    one = RigEstimator(rig())
    stranger = Reading("thermometer", 0, 1.0, 0.01, "ok", "", (4.2,))
    assert list(one.take(stranger)) == []
    assert list(one.take(settings_row("thermometer", 1, 1.0, 0.1))) == []
