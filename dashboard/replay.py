"""Readings through the estimator once more, compared with what was logged the first time."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

from acquire.cells import RowCodec
from acquire.config import Rig
from acquire.errors import UsageError
from acquire.readings import Reading
from acquire.run_folder import RunFolder
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES
from analyse.replay import RowMaker, merge_by_time, replay_readings, result
from dashboard.streams import reading_tables
from dashboard.summary import Summary


@dataclass(frozen=True)
class Replayed:
    """What a replay gave.

    ``result`` is the documented result. ``logged`` counts the estimates that the run's folder
    has (None where there was nothing to compare with); ``differs_at`` is the first of them that
    came out otherwise, None if all came out again to the last bit.
    """

    result: dict[str, Any]
    summary: Summary
    estimates: int
    logged: int | None = None
    differs_at: int | None = None


def replay(
    name: str,
    rig: Rig,
    readings: Callable[[RowMaker], Iterable[Reading]],
    logged: Iterable[Row] | None = None,
    copy: Path | None = None,
) -> Replayed:
    """Send readings through an estimator of their own.

    Parameters
    ----------
    name
        The run's name, for the result.
    readings
        Gives the readings that the row maker needs, each reader's in order.
    logged
        Rows of the table of estimates to compare with.
    copy
        A file to be made with the table of estimates. Raises UsageError if it is there already.
    """
    maker = RowMaker(rig)
    bars, timed = [bar.name for bar in rig.hall_bars], rig.table is None or rig.table.time is not None
    summary = Summary(name, bars, rig.target.confidence, timed)
    comparison = None if logged is None else _Comparison(logged)
    codec, count = RowCodec(ESTIMATES), 0
    with ExitStack() as stack:
        file = None if copy is None else stack.enter_context(_new_file(copy))
        if file is not None:
            file.write(codec.header)
        for record in replay_readings(maker, readings(maker)):
            if record.stream != ESTIMATES.stream:
                summary.add_event((0, *record.cells))
                continue
            row: Row = (count, *codec.canonical(record.cells))
            count += 1
            summary.add_estimate(row)
            if comparison is not None:
                comparison.add(row)
            if file is not None:
                file.write(codec.line(row))
    answer = result(name, rig, maker.latest)
    if comparison is None:
        return Replayed(answer, summary, count)
    return Replayed(answer, summary, count, *comparison.end())


def logged_readings(run: RunFolder, names: Iterable[str]) -> Iterator[Reading]:
    """The rows of these readers of a run, by time."""
    tables = reading_tables(run.rig)

    def rows(name: str) -> Iterator[Reading]:
        for row in run.rows(tables[f"readings/{name}"]):
            yield Reading.from_row(name, row)

    return merge_by_time({name: rows(name) for name in names})


def count_readings(run: RunFolder) -> int:
    """About how many rows the readers of a run have written."""
    return sum(_lines(run.journal_path(table)) for table in reading_tables(run.rig).values())


class _Comparison:
    """Rows as they come out now beside those that were logged."""

    def __init__(self, logged: Iterable[Row]) -> None:
        self._logged = iter(logged)
        self._count = 0
        self._differs_at: int | None = None

    def add(self, row: Row) -> None:
        """Take the next row that came out."""
        known = next(self._logged, None)
        if known is None:
            return
        if known != row and self._differs_at is None:
            self._differs_at = self._count
        self._count += 1

    def end(self) -> tuple[int, int | None]:
        """How many were logged, and where the first one that differs or is missing stands."""
        more = sum(1 for _ in self._logged)
        if more and self._differs_at is None:
            self._differs_at = self._count
        return self._count + more, self._differs_at


def _new_file(path: Path) -> BinaryIO:
    try:
        return open(path, "xb")
    except FileExistsError:
        raise UsageError(f"{path} is there already: name a new file.") from None


def _lines(path: Path) -> int:
    with open(path, "rb") as file:
        return sum(block.count(b"\n") for block in iter(lambda: file.read(1 << 20), b""))
