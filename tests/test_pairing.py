"""Pairs of resistivity and field: what is waited for, what is told of what can't be used, and that
the order in which the channels arrive changes nothing."""

from __future__ import annotations

import itertools
import math
import random
from collections.abc import Iterable, Sequence

import pytest

from analyse import Excitation, FieldSource, HallBar, LockinFilter, Signal
from analyse.channel import OVERLOAD_SENTINEL
from analyse.pairing import LARGEST_T, Pair, Pairing
from analyse.setup import Setup

OHM = Signal(resistance=True)
BAR = HallBar(4.0, "GaAs")
Row = tuple[str, float, float | None, float | None, str]


def setup(**more: object) -> Setup:
    """Resistances, so that no current is needed, unless something else is given."""
    return Setup(**{"longitudinal": OHM, "hall": OHM, **more})  # type: ignore[arg-type]


def pairs_of(pairing: Pairing, rows: Iterable[Row], end: bool = True) -> list[Pair]:
    """Push rows (channel, time, x, y, status); then end all channels."""
    found = [pair for one in rows for pair in pairing.push(*one)]
    if end:
        for channel in ("field", "current", "longitudinal", "hall"):
            found += pairing.end(channel)
    return found


def row(channel: str, time_s: float, x: float | None, status: str = "ok") -> Row:
    """One row without y."""
    return (channel, time_s, x, None, status)


def kinds(pairs: Sequence[Pair]) -> list[tuple[str, float, str]]:
    """Role, time and kind of each pair."""
    return [(pair.role, pair.time_s, pair.kind) for pair in pairs]


def steady(count: int = 40, step: float = 0.5) -> list[Row]:
    """A ramp of 0.1 T/s with 100 Ohm per square and 2000 Ohm/T, all channels at each time."""
    return [
        one
        for k in range(count)
        for one in (
            row("field", k * step, 0.1 * k * step),
            row("longitudinal", k * step, 400.0),
            row("hall", k * step, 2000.0 * 0.1 * k * step),
        )
    ]


def test_each_voltage_gets_the_field_of_its_moment() -> None:
    rows = [row("field", float(k), 0.1 * k) for k in range(10)]
    rows += [row("longitudinal", 2.5, 400.0), row("hall", 3.25, 650.0)]
    one, two = pairs_of(Pairing(BAR, setup()), rows)
    assert kinds([one, two]) == [("longitudinal", 2.5, "ok"), ("hall", 3.25, "ok")]
    assert (one.field_T, one.rate_T_per_s, one.rho_ohm) == pytest.approx((0.25, 0.1, 100.0))
    assert (two.field_T, two.rate_T_per_s, two.rho_ohm) == pytest.approx((0.325, 0.1, 650.0))
    assert one.current_A == two.current_A == 1.0


def test_the_fields_own_delay_is_taken_out() -> None:
    rows = [row("field", k + 0.4, 0.1 * k) for k in range(10)] + [row("hall", 3.25, 1.0)]
    (one,) = pairs_of(Pairing(BAR, setup(field=FieldSource(delay_s=0.4))), rows)
    assert one.field_T == pytest.approx(0.325)


def test_behind_a_filter_a_voltage_gets_the_field_behind_the_same_filter() -> None:
    stages = LockinFilter(0.3, 4)
    signal = Signal(stages, resistance=True)
    pairing = Pairing(BAR, setup(longitudinal=signal, hall=signal))
    rows = [row("field", 0.5 * k, 0.05 * k) for k in range(100)] + [row("hall", 30.0, 1.0)]
    (one,) = pairs_of(pairing, rows)
    assert one.field_T == pytest.approx(0.1 * (30.0 - stages.delay_s), rel=1e-12)
    assert one.stages == stages


def test_a_voltage_waits_until_all_that_it_needs_is_past_its_moment() -> None:
    pairing = Pairing(BAR, setup())
    for k in range(12):  # the first readings of a channel are judged together
        time_s = 0.1 * k - 2.0
        early = [("field", 0.1 * time_s), ("longitudinal", 4.0), ("hall", 5.0)]
        pairs_of(pairing, [row(channel, time_s, x) for channel, x in early], end=False)
    waiting = [row("field", 0.0, 0.0), row("longitudinal", 1.0, 4.0), row("hall", 1.2, 5.0)]
    assert all(pair.time_s < 0 for pair in pairs_of(pairing, waiting, end=False))
    found = pairs_of(pairing, [row("field", 1.1, 0.11)], end=False)
    assert kinds(found) == [("longitudinal", 1.0, "ok")]
    assert pairs_of(pairing, [row("longitudinal", 1.4, 4.0)], end=False) == []
    found = pairs_of(pairing, [row("field", 1.3, 0.13)], end=False)
    assert kinds(found) == [("hall", 1.2, "ok")]


@pytest.mark.parametrize("first", ["field", "longitudinal", "hall"])
def test_they_come_in_the_order_of_time(first: str) -> None:
    rows = sorted(steady(), key=lambda one: one[0] != first)  # one channel before the others
    found = pairs_of(Pairing(BAR, setup()), rows)
    expected = sorted((one[1], one[0]) for one in rows if one[0] != "field")
    assert [(pair.time_s, pair.role) for pair in found] == expected


def replaced(rows: list[Row], channel: str, time_s: float, x: float | None, status: str = "ok") -> None:
    """Put another reading in the place of one."""
    place = next(k for k, one in enumerate(rows) if one[:2] == (channel, time_s))
    rows[place] = row(channel, time_s, x, status)


@pytest.mark.parametrize(
    ("status", "x", "kind"),
    [
        ("overload", 1.0, "overload"),
        ("range", 1.0, "overload"),
        ("no_answer", None, "lost"),
        ("bad_reply", None, "lost"),
        ("ok", None, "lost"),
        ("ok", math.nan, "lost"),
        ("ok", math.inf, "overload"),
        ("ok", OVERLOAD_SENTINEL, "overload"),
        ("ok", -OVERLOAD_SENTINEL, "overload"),
    ],
)
def test_what_can_not_be_used_says_why(status: str, x: float | None, kind: str) -> None:
    rows = steady()
    replaced(rows, "hall", 10.0, x, status)
    found = pairs_of(Pairing(BAR, setup()), rows)
    odd = [pair for pair in found if pair.kind != "ok"]
    assert kinds(odd) == [("hall", 10.0, kind)]
    assert math.isnan(odd[0].rho_ohm)
    assert len(found) == 80


def test_a_wild_voltage_is_counted_and_not_used() -> None:
    rows = steady()
    replaced(rows, "longitudinal", 15.0, 4e4)
    found = pairs_of(Pairing(BAR, setup()), rows)
    assert [(p.time_s, p.role) for p in found if p.kind == "wild"] == [(15.0, "longitudinal")]
    assert [pair.kind for pair in found].count("ok") == 79


def test_a_wild_field_reading_moves_no_pair() -> None:
    rows = steady()
    replaced(rows, "field", 15.0, 7.0)
    pairing = Pairing(BAR, setup())
    found = pairs_of(pairing, rows)
    assert pairing.wild_field_readings == 1
    assert all(pair.kind == "ok" for pair in found)
    assert [pair.field_T for pair in found] == pytest.approx([0.1 * p.time_s for p in found])


@pytest.mark.parametrize("field_T", [math.nan, math.inf, 2 * LARGEST_T, -1e300, None])
def test_a_field_that_is_none_is_bridged(field_T: float | None) -> None:
    rows = steady()
    replaced(rows, "field", 10.0, field_T)
    found = pairs_of(Pairing(BAR, setup(field=FieldSource(longest_gap_s=1.5))), rows)
    assert all(pair.kind == "ok" for pair in found)
    assert [pair.field_T for pair in found] == pytest.approx([0.1 * p.time_s for p in found])


def test_before_the_first_and_after_the_last_field_reading() -> None:
    rows = [one for one in steady() if one[0] != "field" or 5.0 <= one[1] <= 15.0]
    found = pairs_of(Pairing(BAR, setup()), rows)
    assert {pair.kind for pair in found if 5.0 <= pair.time_s <= 15.0} == {"ok"}
    assert {pair.kind for pair in found if not 5.0 <= pair.time_s <= 15.0} == {"no_field"}
    assert len(found) == 80


def test_over_too_long_a_gap_in_the_field_there_is_none() -> None:
    """And nothing waits for the gap's end once the field is known to be silent."""
    pairing = Pairing(BAR, setup(field=FieldSource(longest_gap_s=2.0)))
    rows = [one for one in steady() if one[0] != "field" or not 5.0 < one[1] < 15.0]
    silent = [one for one in rows if one[1] <= 12.0]
    assert max(pair.time_s for pair in pairs_of(pairing, silent, end=False)) <= 5.0
    nothing = [row("field", 12.5, None, "no_answer"), row("hall", 12.6, 0.0)]
    nothing.append(row("longitudinal", 12.6, 400.0))
    found = pairs_of(pairing, nothing, end=False)
    assert {pair.kind for pair in found} == {"no_field"}
    assert max(pair.time_s for pair in found) >= 12.0
    found = pairs_of(pairing, [one for one in rows if one[1] > 12.7])
    assert {pair.kind for pair in found if pair.time_s >= 15.0} == {"ok"}
    assert {pair.kind for pair in found if pair.time_s < 15.0} == {"no_field"}


def test_a_current_behind_a_series_resistor() -> None:
    # I = (1 V - V_xx * 6 / 4 - |V_xy|) / (1 MOhm + 500 Ohm)
    excitation = Excitation(
        source_V=1.0, series_ohm=1e6, contact_ohm=500.0, source_to_drain_squares=6.0
    )
    pairing = Pairing(BAR, Setup(Signal(), Signal(), excitation))
    rows = [row("field", float(k), 0.1) for k in range(30)]
    rows += [row("longitudinal", float(k), 0.02) for k in range(30)]
    rows += [row("hall", k + 0.5, -0.1) for k in range(29)]
    current = (1.0 - 0.02 * 6 / 4 - 0.1) / (1e6 + 500.0)
    for pair in pairs_of(pairing, rows)[:-1]:
        assert pair.current_A == pytest.approx(current, rel=1e-12)
        value = 0.02 / 4 if pair.role == "longitudinal" else -0.1
        assert pair.rho_ohm == pytest.approx(value / current, rel=1e-12)


def test_a_series_resistor_where_one_signal_is_read_in_ohm() -> None:
    excitation = Excitation(source_V=1.0, series_ohm=1e4, source_to_drain_squares=6.0)
    pairing = Pairing(BAR, Setup(OHM, Signal(), excitation))
    current = 1.0 / (1e4 + 400.0 * 6 / 4 + 900.0)
    rows = [row("field", float(k), 0.1) for k in range(30)]
    rows += [row("longitudinal", float(k), 400.0) for k in range(30)]
    rows += [row("hall", k + 0.5, 900.0 * current) for k in range(29)]
    for pair in pairs_of(pairing, rows):
        if pair.role == "hall":
            assert pair.current_A == pytest.approx(current, rel=1e-12)
            assert pair.rho_ohm == pytest.approx(900.0, rel=1e-12)
        else:
            assert pair.rho_ohm == 100.0


@pytest.mark.parametrize(("shunt_ohm", "reading"), [(None, 2e-6), (1e4, 2e-2)])
def test_a_measured_current_is_interpolated(shunt_ohm: float | None, reading: float) -> None:
    excitation = Excitation(measured=Signal(), shunt_ohm=shunt_ohm)
    pairing = Pairing(BAR, Setup(Signal(), Signal(), excitation))
    rows = [row("field", float(k), 0.1) for k in range(20)]
    rows += [row("current", float(k), reading * (1 + k / 100)) for k in range(20)]
    rows += [row("hall", 7.5, 3e-3)]
    (pair,) = pairs_of(pairing, rows)
    assert pair.current_A == pytest.approx(2e-6 * 1.075, rel=1e-12)
    assert pair.rho_ohm == pytest.approx(3e-3 / (2e-6 * 1.075), rel=1e-12)


@pytest.mark.parametrize("current", [0.0, 1e-300, None])
def test_without_a_current_there_is_no_resistivity(current: float | None) -> None:
    pairing = Pairing(BAR, Setup(Signal(), Signal(), Excitation(measured=Signal())))
    rows = [row("field", float(k), 0.1) for k in range(9)]
    rows += [row("current", float(k), current) for k in range(9)] + [row("hall", 4.5, 3e-3)]
    assert kinds(pairs_of(pairing, rows)) == [("hall", 4.5, "lost")]


@pytest.mark.parametrize("volt", [1.0, 1.5, 1e30])
def test_a_source_that_the_sample_takes_all_of_gives_no_resistivity(volt: float) -> None:
    excitation = Excitation(source_V=1.0, series_ohm=1e6)
    pairing = Pairing(BAR, Setup(Signal(), Signal(), excitation))
    rows = [row("field", float(k), 0.1) for k in range(9)]
    rows += [row("longitudinal", k + 0.5, volt) for k in range(8)]
    rows += [row("hall", k + 0.5, 0.0) for k in range(8)]
    assert {pair.kind for pair in pairs_of(pairing, rows)} == {"lost"}


def test_quadrature_is_told_in_ohm() -> None:
    signal = Signal(detection="XY", phase_deg=30.0, gain=10.0, sign=-1)
    pairing = Pairing(BAR, Setup(signal, signal, Excitation(current_A=1e-6)))
    rows = [row("field", float(k), 0.1) for k in range(9)]
    angle = math.radians(30.0)
    in_phase, across = -10 * 2e-3, -10 * 1e-4
    x = in_phase * math.cos(angle) - across * math.sin(angle)
    y = in_phase * math.sin(angle) + across * math.cos(angle)
    rows.append(("hall", 4.5, x, y, "ok"))
    (pair,) = pairs_of(pairing, rows)
    assert pair.rho_ohm == pytest.approx(2000.0, rel=1e-12)
    assert pair.quadrature_ohm == pytest.approx(100.0, rel=1e-12)


@pytest.mark.parametrize("y", [None, math.nan, math.inf])
def test_a_vector_that_lacks_a_component_is_lost(y: float | None) -> None:
    signal = Signal(detection="XY", resistance=True)
    rows = [row("field", float(k), 0.1) for k in range(9)] + [("hall", 4.5, 1.0, y, "ok")]
    (pair,) = pairs_of(Pairing(BAR, setup(longitudinal=signal, hall=signal)), rows)
    assert pair.kind == "lost"


def test_time_that_runs_backwards_in_a_channel_stands_for_no_moment() -> None:
    rows = steady()
    rows.insert(60, row("hall", 3.0, 600.0))
    rows.insert(70, row("field", 3.0, 7.0))
    found = pairs_of(Pairing(BAR, setup()), rows)
    assert [pair.kind for pair in found].count("lost") == 1
    assert all(a.time_s <= b.time_s for a, b in itertools.pairwise(found))
    good = [pair for pair in found if pair.kind == "ok"]
    assert [pair.field_T for pair in good] == pytest.approx([0.1 * p.time_s for p in good])


def test_a_filter_that_changes_in_mid_run() -> None:
    fast, slow = LockinFilter(0.1, 2), LockinFilter(0.3, 4)
    signal = Signal(fast, resistance=True)
    pairing = Pairing(BAR, setup(longitudinal=signal, hall=signal))
    rows = steady(120)
    found = pairs_of(pairing, [one for one in rows if one[1] < 20.0], end=False)
    pairing.set_filter("hall", slow)
    found += pairs_of(pairing, [one for one in rows if one[1] >= 20.0])
    assert len(found) == 240
    hall = [pair for pair in found if pair.role == "hall"]
    before = [pair for pair in hall if pair.time_s < 20.0]
    settling = [pair for pair in hall if 20.0 <= pair.time_s < 19.5 + slow.settle_s(1e-3)]
    after = [pair for pair in hall if pair.time_s > 19.5 + slow.settle_s(1e-3)]
    assert {pair.stages for pair in before if pair.kind == "ok"} == {fast}
    assert {pair.kind for pair in settling} == {"no_field"}
    assert {(pair.kind, pair.stages) for pair in after} == {("ok", slow)}
    last = after[-1]
    # A state of rest was assumed at the change; what is left of that is 1e-3 of the lag, and falling.
    assert last.field_T == pytest.approx(0.1 * (last.time_s - slow.delay_s), abs=1e-6)
    other = {pair.kind for pair in found if pair.role == "longitudinal" and pair.time_s > 2.0}
    assert other == {"ok"}


def test_an_unknown_channel_and_a_current_that_is_not_measured() -> None:
    pairing = Pairing(BAR, setup())
    with pytest.raises(ValueError, match="'voltage' is not one of field, longitudinal"):
        pairing.push("voltage", 0.0, 1.0, None, "ok")
    with pytest.raises(ValueError, match="not a measured one"):
        pairing.push("current", 0.0, 1.0, None, "ok")


def _mixed(rng: random.Random, role: str, count: int) -> list[Row]:
    """Rows of one channel: jitter or a common grid, losses, overloads, wild points, same times and
    times that run backwards."""
    grid, step = rng.random() < 0.5, rng.choice([0.1, 0.2, 0.3])
    time_s = rng.uniform(0.0, 0.5)
    rows: list[Row] = []
    for _ in range(count):
        time_s += step * (rng.choice([1, 1, 2]) if grid else rng.uniform(0.3, 1.7))
        time_s = round(time_s, 1) if grid else time_s
        field_T = max(0.0, time_s - 2.0) / 40
        base = {"field": field_T, "longitudinal": 4e-4, "hall": 2e-3 * field_T, "current": 1e-6}
        x: float | None = base[role] * (1 + rng.gauss(0, 1e-3)) + rng.gauss(0, 1e-9)
        fate, when, status = rng.random(), time_s, "ok"
        if fate < 0.05:
            status, x = rng.choice([("no_answer", None), ("overload", 9.9e37), ("bad_reply", None)])
        elif fate < 0.08:
            x = base[role] + 50 * abs(base[role]) + 1e-7
        elif fate < 0.10 and rows:
            when = rows[-1][1]
        elif fate < 0.11:
            when = time_s - rng.uniform(0.0, 1.0)
        rows.append((role, when, x, rng.gauss(0, 1e-8), status))
    return rows


def _interleaved(
    rng: random.Random, streams: dict[str, list[Row]], order: str
) -> list[tuple[str, Row | None]]:
    """Rows of all channels (None: the end of one), each channel's in its own order."""
    left = {name: [*rows, None] for name, rows in streams.items()}
    mixed: list[tuple[str, Row | None]] = []
    names = list(left)
    if order == "backwards":
        names.reverse()
    while left:
        waiting = [name for name in names if name in left]
        name = rng.choice(waiting) if order in ("mixed", "bursts") else waiting[0]
        for _ in range(rng.randint(1, 60) if order == "bursts" else 1):
            if name in left:
                mixed.append((name, left[name].pop(0)))
                if not left[name]:
                    del left[name]
    return mixed


@pytest.mark.parametrize("seed", range(24))
def test_the_order_of_arrival_changes_nothing(seed: int) -> None:
    """To the last bit; each channel's own order is kept, as a journal keeps it."""
    rng = random.Random(seed)
    stages = rng.choice([None, LockinFilter(0.1, 2), LockinFilter(0.3, 4)])
    excitation = rng.choice(
        [
            Excitation(current_A=1e-6),
            Excitation(source_V=1.0, series_ohm=1e6),
            Excitation(measured=Signal()),
        ]
    )
    gap_s = rng.choice([None, 1.0, 0.4])
    signal = Signal(stages, detection=rng.choice(["X", "XY"]))
    plan = Setup(signal, signal, excitation, FieldSource(rng.choice([0.0, 0.15]), gap_s))
    names = ["field", "longitudinal", "hall"] + ["current"] * (excitation.measured is not None)
    streams = {name: _mixed(rng, name, rng.randint(60, 200)) for name in names}
    changed, at = rng.choice(["longitudinal", "hall"]), rng.randint(0, 50)
    new = rng.choice([None, LockinFilter(0.05, 1), LockinFilter(0.2, 3)])

    def run(order: str) -> list[Pair]:
        pairing, count = Pairing(BAR, plan), dict.fromkeys(names, 0)
        found: list[Pair] = []
        for name, one in _interleaved(random.Random(seed + 1), streams, order):
            if name == changed and count[name] == at:
                pairing.set_filter(name, new)
            count[name] += 1
            found += pairing.end(name) if one is None else pairing.push(*one)
        return found

    reference = repr(run("mixed"))
    assert len(run("mixed")) == sum(len(streams[name]) for name in ("longitudinal", "hall"))
    for order in ("bursts", "forwards", "backwards"):
        assert repr(run(order)) == reference, order


def test_nothing_piles_up_while_a_lock_in_answers_nothing() -> None:
    excitation = Excitation(measured=Signal())
    signal = Signal(LockinFilter(0.1, 2))
    pairing = Pairing(BAR, Setup(signal, signal, excitation, FieldSource(0.0, 1.0)))
    for k in range(5000):
        rows = [row("field", 0.1 * k, 1e-4 * k), row("current", 0.1 * k, 1e-6)]
        rows += [row(role, 0.1 * k, None, "no_answer") for role in ("longitudinal", "hall")]
        pairs_of(pairing, rows, end=False)
    assert len(pairing._knots) < 20
    assert all(len(track._knots) < 20 for track in pairing._tracks)
    assert pairing._current is not None
    assert len(pairing._current.queue) < 20


def test_filters_that_keep_changing_leave_nothing_behind() -> None:
    pairing = Pairing(BAR, setup())
    for k in range(400):
        pairing.set_filter("hall", LockinFilter(0.01 + k * 1e-4, 2))
        step = [row("field", 0.1 * k, 0.0), row("longitudinal", 0.1 * k, 4.0)]
        pairs_of(pairing, [*step, row("hall", 0.1 * k, 4.0)], end=False)
    assert len(pairing._tracks) < 6
