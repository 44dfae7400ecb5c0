"""A replay says whether the estimates that were logged come out again."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

import pytest

from acquire.config import parse
from acquire.errors import UsageError
from acquire.journal import read_rows
from acquire.readings import Reading
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES
from analyse.replay import RowMaker
from dashboard.commands.replay import compared
from dashboard.replay import Replayed, replay

RIG = parse(b"""
[run]
title = "t"
[field]
reader = "table"
value = "B"
[table]
values = [{ name = "B", column = 1, unit = "T" }, { name = "xx", column = 2, unit = "Ohm" },
          { name = "xy", column = 3, unit = "Ohm" }]
[[hall_bars]]
name = "bar"
squares = 1.0
material = "GaAs"
longitudinal = { reader = "table", x = "xx" }
hall = { reader = "table", x = "xy" }
""")


def readings(maker: RowMaker) -> Iterable[Reading]:
    """A straight line, forty points."""
    assert maker.readers == ("table",)
    for seq in range(40):
        wiggle = 0.1 if seq % 3 else -0.2
        values = (0.02 * seq, 100.0 + wiggle, 40.0 * seq - wiggle)
        yield Reading("table", seq, float(seq), None, "ok", "", values)
    yield Reading("table", 40, 40.0, None, "end", "", (None, None, None))


def again(logged: Iterable[Row] | None = None) -> Replayed:
    """The same readings once more."""
    return replay("t", RIG, readings, logged)


@pytest.fixture
def rows(tmp_path: Path) -> list[Row]:
    """The estimates as they were logged."""
    copy = tmp_path / "estimates.csv"
    replayed = replay("t", RIG, readings, None, copy)
    logged = list(read_rows(copy, ESTIMATES))
    assert len(logged) == replayed.estimates
    return logged


def test_the_same_again(rows: list[Row]) -> None:
    replayed = again(rows)
    assert (replayed.logged, replayed.differs_at) == (len(rows), None)
    assert compared(replayed).endswith("came out again to the last bit.")


def test_one_last_bit_is_seen(rows: list[Row]) -> None:
    column = ESTIMATES.names.index("rho_xx_ohm")
    value = rows[10][column]
    assert isinstance(value, float)
    rows[10] = (*rows[10][:column], value * (1 + 2.3e-16), *rows[10][column + 1 :])
    replayed = again(rows)
    assert replayed.differs_at == 10
    assert "differ from those in the run's folder from row 10 on" in compared(replayed)


def test_estimates_that_were_not_logged_any_more(rows: list[Row]) -> None:
    replayed = again(rows[:-3])
    assert replayed.differs_at is None
    assert compared(replayed).endswith("to the last bit, and 3 that it does not have.")


def test_estimates_that_do_not_come_any_more(rows: list[Row]) -> None:
    assert again([*rows, rows[-1]]).differs_at == len(rows)


def test_nothing_is_written_over(tmp_path: Path) -> None:
    copy = tmp_path / "estimates.csv"
    copy.write_text("precious")
    with pytest.raises(UsageError, match="is there already"):
        replay("t", RIG, readings, None, copy)
    assert copy.read_text() == "precious"
