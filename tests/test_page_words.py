"""What the page says beside the numbers: budget, sweeps, what is awaited, loud and quiet cautions."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path

import pytest
from made_run import config, estimates, ramp
from two_bars import CONFIG, rows

from acquire.config import parse
from acquire.readings import stream_of
from analyse.budget import combined
from analyse.estimate import Caution, Estimate
from analyse.estimate_table import ESTIMATES
from analyse.numbers import Number
from analyse.replay import Record, RowMaker, merge_by_time, replay_readings
from analyse.setup import Target
from analyse.sweeps import Sweeps
from analyse.verdict import Facts, what_is_missing
from analyse.cautions import NOTES
from dashboard.page.budget_panel import budget, budget_panel
from dashboard.page.caution_panel import caution_panel, touching
from dashboard.page.field_panel import ahead
from dashboard.page.html import LONGEST, Html, element, visible
from dashboard.page.number_panel import verdict_panel
from dashboard.page.store import BarFacts, RunStore
from dashboard.page.sweeps import sweep_panel, threshold_T

RIG = parse(config())
UNCERTAIN = CONFIG.replace(
    b'name = "right"', b'name = "right"\nsquares_relative_standard_uncertainty = 0.004'
)
COLUMN = {name: index for index, name in enumerate(ESTIMATES.names)}


GOOD = (Number(1.0, 1e-4, 0.999, 1.001, 1e-4, 0.0, 0.0, 0.95),) * 3


class Good:
    """A fit of which nothing is wrong, and each of its coefficients."""

    effective, value = 100.0, 1.0

    @property
    def slope(self) -> Good:
        return self

    rho_0 = slope

    def largest_bend(self) -> float:
        return 0.0


def words(panel: Html) -> str:
    return re.sub(r"\s+", " ", re.sub(r"<[^>]*>", " ", panel)).strip()


@pytest.fixture(scope="module")
def estimated() -> tuple[RunStore, dict[str, list[Estimate]]]:
    """A store filled by the real estimator, and what the estimator said."""
    rig = parse(UNCERTAIN)
    store = RunStore("run", rig)
    said: dict[str, list[Estimate]] = {bar: [] for bar in store.bars}
    records: Iterator[Record] = replay_readings(RowMaker(rig), merge_by_time(rows()))
    for seq, record in enumerate(one for one in records if one.estimate is not None):
        store.take("estimates", (seq, *record.cells))
        assert record.estimate is not None
        said[str(record.cells[1])].append(record.estimate)
    return store, said


def with_cells(store: RunStore, **cells: object) -> BarFacts:
    """The Hall bar after one more row, the last one with other cells."""
    (*_, last) = estimates(ramp(1.0, 60))
    row = [0, *last]
    for name, value in cells.items():
        row[COLUMN[name]] = value
    store.take("estimates", tuple(row))  # type: ignore[arg-type]
    return store.bar("bar3")


@pytest.mark.parametrize("bar", ["left", "right"])
def test_the_budget_is_that_of_the_estimator(
    bar: str, estimated: tuple[RunStore, dict[str, list[Estimate]]]
) -> None:
    store, said = estimated
    last = said[bar][-1]
    assert last.sheet_density and last.mobility and last.scattering_time
    lines = budget(store.bar(bar).curves, store.systematic[bar])
    wanted = combined(last.budget)
    assert combined(lines) == pytest.approx(wanted, rel=1e-12)
    numbers = (last.sheet_density, last.mobility, last.scattering_time)
    assert wanted == pytest.approx([n.standard_uncertainty / n.value for n in numbers])
    by_source = {line.source: line for line in lines}
    told = {line.source: line for line in last.budget if line.kind == "systematic"}
    assert told.items() <= by_source.items()
    assert ("length over width" in by_source) == (bar == "right")
    largest = [max(line.sheet_density, line.mobility, line.scattering_time) for line in lines]
    assert largest == sorted(largest, reverse=True)
    assert re.search(r"density mobility time .* together 0\.\d+ 0\.\d+ 0\.\d+$", words(budget_panel(lines)))


def test_there_is_no_budget_before_the_numbers() -> None:
    store = RunStore("run", RIG)
    assert budget(store.bar("bar3").curves, store.systematic["bar3"]) == ()
    assert words(budget_panel(())) == "Known once the three numbers are."


def test_the_sweeps_are_those_of_the_estimator(
    estimated: tuple[RunStore, dict[str, list[Estimate]]]
) -> None:
    store, said = estimated
    shown = store.bar("left").curves.sweeps
    assert [sweep.number for sweep in shown] == [one.number for one in said["left"][-1].sweeps]
    assert RowMaker(store.rig).estimators.estimators["left"]._sweeps.threshold_T == threshold_T(store.rig)


def test_sweeps_are_told_with_direction_and_ends() -> None:
    kept = Sweeps(0.01)
    assert "has not moved" in words(sweep_panel(kept.all(), True))
    fields = [*[-0.1] * 20, *ramp(0.9, 200, -0.1), *ramp(-0.1, 200, 0.9), *ramp(0.2, 60, -0.1)]
    for index, field in enumerate(fields):
        kept.add(0.4 * index, field + 1e-4 * (-1) ** index)
    said = words(sweep_panel(kept.all(), False))
    assert re.fullmatch(
        r"Sweeps ↑ up −0\.10\d to \+0\.(90|89)\d T ↓ down \+0\.(90|89)\d to −0\.10\d T "
        r"↑ up −0\.10\d to \+0\.(20|19)\d T",
        said,
    )
    assert 'class="sweep now"' in sweep_panel(kept.all(), True)
    assert 'class="sweep now"' not in sweep_panel(kept.all(), False)


def test_a_night_of_sweeps_shows_the_last_ones() -> None:
    kept = Sweeps(0.01)
    for index in range(4000):
        kept.add(1.0 * index, abs(index % 40 - 20) / 20)
    said = words(sweep_panel(kept.all(), True))
    assert said.startswith("Sweeps … of 200, the last ↓ down +1.000 to +0.000 T ↑ up +0.000 to")
    assert said.count(" T") == 4


def test_without_a_forecast_the_page_says_what_it_waits_for() -> None:
    store = RunStore("run", RIG)
    store.begin("live", lambda: 30.0)
    assert ahead(store.bar("bar3"), store.run()) == ("not known yet", "the three numbers come first")
    unknown = {"time_to_target_s": None, "field_to_target_T": None, "verdict": "converging"}
    assert ahead(with_cells(store, **unknown), store.run())[0] == "the field must move"
    for seq in range(40):
        store.take(stream_of("magnet"), (seq, 0.2 * seq, 0.01, "ok", None, 0.002 * seq))
    assert ahead(with_cells(store, **unknown), store.run()) == (
        "no forecast yet", "waits: sheet density known to 3\u00a0%, wanted 1\u00a0%",
    )  # fmt: skip
    back = with_cells(store, **unknown, field_T=-0.3)
    assert ahead(back, store.run()) == (
        "when |B| is past 1.00 T", "the ramp has been at these fields already",
    )  # fmt: skip
    precise = with_cells(store, time_to_target_s=0.0, field_to_target_T=1.0)
    assert ahead(precise, store.run())[0] == "precise enough"
    assert ahead(with_cells(store, verdict="stable"), store.run()) == ("target met", "")
    store.begin("ended", None)
    assert ahead(with_cells(store, verdict="converging"), store.run()) == ("target not met", "")


def test_only_cautions_that_touch_the_answer_are_loud() -> None:
    store = RunStore("run", RIG)
    found = (Caution("drift", "."), Caution("overload", "."), Caution("field_offset", ".", False))
    reason = "; ".join(what_is_missing(Facts(GOOD, Good(), 0.0, 9.0, True, found), Target()))  # type: ignore[arg-type]
    open_codes = {"cautions": "drift overload field_offset"}
    unknown = with_cells(store, **open_codes, mobility_m2_per_V_s=None, waiting_for="unknown")
    assert touching(unknown) == ["drift", "overload"]
    bar = with_cells(store, **open_codes, waiting_for=f"something else; {reason}")
    assert touching(bar) == ["drift", "overload"]
    said = words(caution_panel(bar))
    assert said.startswith("▲ drift … ▲ overload … field offset …")
    assert "▲ 2 open cautions 1 note" in words(verdict_panel(bar, store.run()))
    told = with_cells(store, cautions="current_sag", waiting_for="the field is not passed")
    assert touching(told) == []  # told only: the current is measured
    assert words(caution_panel(told)).startswith("None that touches the answer. Also seen: current sag current sag …")


def test_the_quiet_codes_are_those_of_the_readme() -> None:
    readme = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
    told = re.findall(r"^\| `(\w+)` \|.*\| (.+) \|$", readme, re.MULTILINE)
    assert NOTES == {code for code, touches in told if touches == "no"}


def test_numbers_that_are_all_too_wide_share_a_line() -> None:
    store = RunStore("run", RIG)
    waiting = (
        "sheet density known to 3.66 %, wanted 1 %; mobility known to 4 %, wanted 1 %; "
        "the Hall line is not yet shown to be straight"
    )
    said = words(verdict_panel(with_cells(store, waiting_for=waiting), store.run()))
    assert said.startswith(
        "Converging sheet density and mobility not yet as well known as wanted "
        "the Hall line is not yet shown to be straight"
    )


def test_every_character_of_a_text_can_be_seen_and_a_text_has_an_end() -> None:
    assert visible("ρxx 1\u2009000 µ 10¹⁵\u00a0%") == "ρxx 1\u2009000 µ 10¹⁵\u00a0%"
    assert visible("a\u202egnp.exe\u2066") == "a\\u202egnp.exe\\u2066"
    assert visible("\x1b[2J\x00\udcff\u2028\U000e0041") == "\\u001b[2J\\u0000\\udcff\\u2028\\U000e0041"
    assert visible("x" * 10**6) == "x" * LONGEST + "… (1000000 characters)"
    assert element("b", "\u202e", title="\u202e") == '<b title="\\u202e">\\u202e</b>'
