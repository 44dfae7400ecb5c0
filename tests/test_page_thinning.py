"""Thinning and axis ranges: bounded, spikes kept, calm."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analyse.sweeps import Sweeps
from dashboard.page.scales import sensible, steady
from dashboard.page.thinning import Thinned

FIELDS = st.floats(-20, 20, allow_subnormal=False)


def thinned(rows: list[tuple[float, ...]], limit: int) -> Thinned:
    kept, sweeps = Thinned(len(rows[0]), limit), Sweeps(0.05)
    for index, row in enumerate(rows):
        kept.add(row, sweeps.add(float(index), row[0]))
    return kept


def test_a_short_ramp_is_kept_as_it_is() -> None:
    rows = [(0.1 * i, float(i)) for i in range(40)]
    assert thinned(rows, 20).columns().T.tolist() == [list(row) for row in rows]


def test_a_spike_on_a_steep_line_survives_a_long_ramp() -> None:
    field = np.linspace(0, 12, 20_000)
    hall = 2600 * field + np.random.default_rng(1).normal(0, 1, len(field))
    hall[7_001] += 15.0
    hall[13_337] -= 15.0
    kept = thinned(list(zip(field, hall)), 500)
    x, y = kept.columns()
    assert len(x) <= 1000
    assert kept.total == 20_000
    assert {field[7_001], field[13_337]} <= set(x)
    assert x[0] == field[0] and x[-1] == field[-1]
    assert np.all(np.diff(x) > 0)
    assert np.interp(field, x, y) == pytest.approx(hall, abs=0.02 * np.ptp(hall))


def test_a_night_at_one_field_costs_no_more_than_its_extremes() -> None:
    rows = [(0.01 * i, 1.0) for i in range(50)] + [(0.5, 1.0)] * 5000
    rows[2000] = (0.5, 9.0)
    x, y = thinned(rows, 100).columns()
    assert len(x) <= 200
    assert y.max() == 9.0
    assert len(np.unique(x)) >= 40


def test_up_and_down_stay_apart() -> None:
    up = [(x, 1.0) for x in np.linspace(0, 1, 900)]
    down = [(x, 2.0) for x in np.linspace(1, 0, 900)]
    kept = thinned(up + down, 200)
    x, y = kept.columns()
    assert sorted(set(kept.sweeps())) == [0, 1]
    for level in (1.0, 2.0):
        assert len(np.unique(np.round(x[y == level], 1))) == 11


@settings(max_examples=40, deadline=None)
@given(
    rows=st.lists(st.tuples(FIELDS, FIELDS, FIELDS), min_size=1, max_size=400),
    limit=st.integers(40, 60),
)
def test_whatever_comes_the_number_kept_is_bounded_and_rows_are_genuine(
    rows: list[tuple[float, ...]], limit: int
) -> None:
    kept = thinned(rows, limit).columns().T
    assert 0 < len(kept) <= 2 * limit
    assert tuple(kept[0]) == rows[0] and tuple(kept[-1]) == rows[-1]
    assert {tuple(row) for row in kept} <= set(rows)


def test_a_range_holds_still_while_it_is_filled() -> None:
    first = steady(0.0, 1.0, None)
    assert first == pytest.approx((-0.08, 1.08))
    assert steady(0.02, 1.01, first) == first
    grown = steady(0.0, 1.3, first)
    assert grown[1] > 1.6  # room on the side on which it was left
    assert steady(0.0, 1.6, grown) == grown
    assert steady(0.4, 0.6, grown) != grown  # too little of it is used


@given(low=FIELDS, width=st.floats(0, 5), old=st.none() | st.tuples(FIELDS, FIELDS))
def test_a_range_always_holds_what_it_must(
    low: float, width: float, old: tuple[float, float] | None
) -> None:
    found = steady(low, low + width, old if old is None or old[0] < old[1] else None)
    assert found[0] <= low and low + width <= found[1] and found[0] < found[1]


def test_a_wild_point_does_not_stretch_an_axis() -> None:
    values = np.append(np.linspace(1.0, 2.0, 100), [1e6, -1e9])
    assert sensible(values) == (1.0, 2.0)
    assert sensible(np.array([])) is None
    assert sensible(np.array([3.0])) == (3.0, 3.0)
