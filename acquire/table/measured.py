"""A table measured elsewhere, as the readings of one run."""

from __future__ import annotations

from array import array
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple, overload

from acquire.readings import Reading

READER = "table"
"""The name by which a configuration refers to the columns of a table."""


class BadRow(NamedTuple):
    """A row that is counted and shown, and never used. Lines count from 1.

    ``text`` is the row as far as it can be printed, its beginning if it is long.
    """

    file: Path
    line: int
    reason: str
    text: str

    def __str__(self) -> str:
        return f"{self.file.name}, line {self.line}: {self.reason}: {self.text}"


@dataclass(frozen=True)
class MeasuredFile:
    """How one file was read. ``rows`` counts the bad ones too; lines count from 1."""

    path: Path
    rows: int
    bad: int
    first_line: int
    heading_line: int | None
    delimiter: str
    encoding: str

    def __str__(self) -> str:
        bad = f", {self.bad} of them bad" if self.bad else ""
        heading = "" if self.heading_line is None else f", headings in line {self.heading_line}"
        return (
            f"{self.path.name}: {self.rows} rows{bad}, from line {self.first_line} on{heading}; "
            f"separated by {self.delimiter}, {self.encoding}"
        )


class TableReadings(Sequence[Reading]):
    """The rows of a table as a reader's; the last says that it has ended.

    They are made when they are asked for: a million of them would fill the memory.
    """

    def __init__(
        self, times: Sequence[float], numbers: array[float], stride: int, bad: Mapping[int, str]
    ) -> None:
        self._times = times
        self._numbers = numbers
        self._stride = stride
        self._bad = bad
        self._nothing = (None,) * stride

    def __len__(self) -> int:
        return len(self._times) + 1

    @overload
    def __getitem__(self, index: int) -> Reading: ...
    @overload
    def __getitem__(self, index: slice) -> list[Reading]: ...
    def __getitem__(self, index: int | slice) -> Reading | list[Reading]:
        if isinstance(index, slice):
            return [self[position] for position in range(*index.indices(len(self)))]
        position = range(len(self))[index]
        if position == len(self._times):
            return self._end()
        begin = position * self._stride
        return self._reading(position, tuple(self._numbers[begin : begin + self._stride]))

    def __iter__(self) -> Iterator[Reading]:
        values = zip(*[iter(self._numbers)] * self._stride)
        for seq, row in enumerate(values):
            yield self._reading(seq, row)
        yield self._end()

    def _reading(self, seq: int, values: tuple[float, ...]) -> Reading:
        time_s, why = float(self._times[seq]), self._bad.get(seq)
        if why is None:
            return Reading(READER, seq, time_s, None, "ok", "", values)
        return Reading(READER, seq, time_s, None, "bad_reply", why, self._nothing)

    def _end(self) -> Reading:
        seq = len(self._times)
        time_s = float(self._times[-1]) if seq else 0.0
        return Reading(READER, seq, time_s, None, "end", "", self._nothing)


@dataclass(frozen=True)
class MeasuredTable:
    """What :func:`acquire.table.read_table` gives.

    Attributes
    ----------
    readings
        All rows in order, those that can't be used as ``bad_reply``, and one ``end``.
    bad_rows
        Those that can't be used, with the reason.
    has_time
        False: there is no time column, ``time_s`` counts the rows and is no time.
    files
        How each file was read.
    columns
        What the values were read from, by heading, or by number where none was looked for.
    notes
        Sentences for the person: what was found in each file, and what was done about it.
    """

    readings: TableReadings
    bad_rows: tuple[BadRow, ...]
    has_time: bool
    files: tuple[MeasuredFile, ...]
    columns: tuple[str, ...]
    notes: tuple[str, ...]
