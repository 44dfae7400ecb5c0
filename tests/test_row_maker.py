"""Rows of the tables of estimates and events: a function of the readers' rows alone."""

from __future__ import annotations

import itertools
import random
from collections.abc import Iterable
from dataclasses import replace

import pytest
from two_bars import CONFIG, interleaved, rig, rows, settings_row

from acquire.cells import RowCodec
from acquire.config import parse
from acquire.readings import Reading
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.replay import RowMaker, merge_by_time, replay_readings, result
from analyse.row_maker import DETERMINED, Record

COLUMN = {name: place - 1 for place, name in enumerate(ESTIMATES.names)}
EVENT = {name: place - 1 for place, name in enumerate(EVENTS.names)}


def made(readings: Iterable[Reading]) -> list[Record]:
    """Everything that comes of the rows."""
    return list(replay_readings(RowMaker(rig()), readings))


def cells(records: Iterable[Record], stream: str) -> list[Row]:
    """Cells of one table's rows."""
    return [record.cells for record in records if record.stream == stream]


@pytest.fixture(scope="module")
def reference() -> list[Record]:
    """What comes of the rows in the order of time."""
    return made(merge_by_time(rows()))


@pytest.mark.parametrize("seed", range(3))
def test_the_order_of_arrival_changes_no_row(reference: list[Record], seed: int) -> None:
    assert made(interleaved(random.Random(seed), rows())) == reference


@pytest.mark.parametrize("backwards", [False, True])
def test_one_reader_after_the_other(reference: list[Record], backwards: bool) -> None:
    found = rows()
    names = sorted(found, reverse=backwards)
    assert made(reading for name in names for reading in found[name]) == reference


def test_rows_fit_their_tables(reference: list[Record]) -> None:
    """And are as they will read back, so that comparing with a journal is fair."""
    for table in (ESTIMATES, EVENTS):
        codec = RowCodec(table)
        found = cells(reference, table.stream)
        assert found
        for seq, row in enumerate(found):
            canonical = codec.canonical(row)
            (back,) = codec.rows([codec.line((seq, *canonical)).decode()], seq)
            assert back[1:] == canonical


def test_both_bars_are_merged_by_time(reference: list[Record]) -> None:
    found = cells(reference, "estimates")
    times = [float(row[COLUMN["time_s"]] or 0.0) for row in found]
    assert times == sorted(times)
    for name in ("left", "right"):
        own = [row for row in found if row[COLUMN["hall_bar"]] == name]
        points = [int(row[COLUMN["field_points"]] or 0) for row in own]
        assert all(after - before in (0, 1) for before, after in itertools.pairwise(points))
        assert len(own) == pytest.approx(200, abs=2)


def test_a_field_point_waits_for_the_other_bar() -> None:
    """Which here has no reading yet that its filter is known for."""
    maker, found = RowMaker(rig()), rows()
    found["lockin_1"] = found["lockin_1"][:1]  # both bars need it
    early = [record for one in merge_by_time(found) for record in maker.take(one)]
    assert early == []


def test_events_follow_the_estimate_that_they_name(reference: list[Record]) -> None:
    count, verdicts = 0, {"left": "converging", "right": "converging"}
    for record in reference:
        if record.stream == "estimates":
            assert record.estimate is not None
            current, count = record.cells, count + 1
            continue
        kind, bar = record.cells[EVENT["kind"]], record.cells[EVENT["hall_bar"]]
        assert kind in DETERMINED
        assert record.cells[EVENT["estimate_seq"]] == count - 1
        assert (bar, record.cells[0]) == (current[COLUMN["hall_bar"]], current[0])
        if kind == "verdict":
            assert record.cells[EVENT["code"]] == current[COLUMN["verdict"]] != verdicts[str(bar)]
            verdicts[str(bar)] = str(record.cells[EVENT["code"]])
            assert record.cells[EVENT["text"]]
    assert verdicts == {"left": "stable", "right": "stable"}


def test_cautions_come_and_go_once() -> None:
    """The Hall voltage of the left bar is overloaded for a while."""
    found = rows()
    found["lockin_2"] = [
        replace(one, status="overload") if 20 < one.time_s < 25 else one
        for one in found["lockin_2"]
    ]
    records = made(merge_by_time(found))
    events = [row for row in cells(records, "events") if row[EVENT["code"]] == "overload"]
    left = [row[EVENT["kind"]] for row in events if row[EVENT["hall_bar"]] == "left"]
    assert left == ["caution", "caution_over"]
    began, over = (row[0] for row in events if row[EVENT["hall_bar"]] == "left")
    assert 20 < began < 21  # type: ignore[operator]
    assert 25 < over < 31  # type: ignore[operator]
    open_now = set()
    for record in records:
        if record.stream == "events" and record.cells[EVENT["hall_bar"]] == "left":
            kind, code = record.cells[EVENT["kind"]], record.cells[EVENT["code"]]
            if kind == "caution":
                open_now.add(code)
            elif kind == "caution_over":
                open_now.remove(code)
        elif record.estimate is not None and record.cells[COLUMN["hall_bar"]] == "left":
            known = {caution.code for caution in record.estimate.cautions}
            text = record.cells[COLUMN["cautions"]]
            assert set(str(text or "").split()) == known
    assert "overload" not in open_now


def test_nothing_is_finished_before_every_reader_has_ended(reference: list[Record]) -> None:
    maker, found = RowMaker(rig()), rows()
    ends = [known.pop() for known in found.values()]
    early = [record for one in merge_by_time(found) for record in maker.take(one)]
    for end in ends:
        assert list(maker.finish()) == []
        assert list(maker.take(end)) == []
    late = list(maker.finish())
    assert 0 < len(late) < 20
    assert early + late == reference
    assert list(maker.finish()) == []


def test_a_reader_that_was_ended_and_started_again_has_not_ended(reference: list[Record]) -> None:
    """Its end row stands amid its rows; ends of all readers at once do no more."""
    found = rows()
    for name, known in found.items():
        place = next(k for k, one in enumerate(known) if one.time_s > 20)
        between = [replace(known[-1], time_s=20.0)]
        if name.startswith("lockin"):
            between.append(settings_row(name, 0, 20.0, 0.1))
        found[name] = [*known[:place], *between, *known[place:]]
    assert made(merge_by_time(found)) == reference
    assert made(interleaved(random.Random(1), found)) == reference


def test_what_strangers_send_changes_nothing(reference: list[Record]) -> None:
    stranger = Reading("thermometer", 0, 3.0, 0.01, "end", "", (4.2,))
    known = list(merge_by_time(rows()))
    assert made([stranger, *known[:300], stranger, *known[300:]]) == reference


def test_one_bar_alone_has_the_same_estimates_as_beside_another(reference: list[Record]) -> None:
    text = CONFIG.decode()
    start, end = text.index('[[hall_bars]]\nname = "right"'), text.index("\n[[readers]]")
    alone = parse((text[:start] + text[end:]).encode())
    records = list(replay_readings(RowMaker(alone), merge_by_time(rows())))
    left = [record.estimate for record in reference if record.cells[1] == "left" and record.estimate]
    assert [record.estimate for record in records if record.estimate] == left


def test_result_of_a_run_as_plain_data(reference: list[Record]) -> None:
    maker = RowMaker(rig())
    before = result("run-1", rig(), maker.latest)
    assert before["run"] == "run-1"
    assert before["hall_bars"]["left"]["sheet_density_per_m2"] is None
    assert before["hall_bars"]["left"]["verdict"] == "converging"
    for _ in replay_readings(maker, merge_by_time(rows())):
        pass
    after = result("run-1", rig(), maker.latest)["hall_bars"]
    assert set(after) == {"left", "right"}
    assert set(after["left"]) == set(before["hall_bars"]["left"])
    last = cells(reference, "estimates")[-1]
    one = after[str(last[COLUMN["hall_bar"]])]
    assert one["sheet_density_per_m2"]["value"] == last[COLUMN["sheet_density_per_m2"]]
    assert one["sheet_density_per_m2"]["interval"] == [
        last[COLUMN["sheet_density_per_m2_low"]], last[COLUMN["sheet_density_per_m2_high"]],
    ]  # fmt: skip
    assert one["mobility_m2_per_V_s"]["confidence"] == 0.95
    assert one["carriers"] == last[COLUMN["carriers"]]
    assert one["verdict"] == last[COLUMN["verdict"]] == "stable"
    assert set(one["stable_at"]) == {"time_s", "field_T"}
