"""What a table of a run looks like: its columns, their kinds and units.

One description serves the journal on disk, the messages on the bus and ``datapackage.json``.
A row is a tuple of cells in the order of the columns; a cell is an int, a float, a str, or None
where nothing is known. The first two columns of every table are ``seq`` (counted from 0 without
gaps) and ``time_s`` (seconds since the run's start, from a monotonic clock).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Cell = int | float | str | None
Row = tuple[Cell, ...]


@dataclass(frozen=True)
class Column:
    """One column: ``kind`` says how a cell is read back from text."""

    name: str
    kind: Literal["integer", "number", "string"]
    unit: str = ""
    description: str = ""


@dataclass(frozen=True)
class Table:
    """One table of a run. ``stream`` names it on the bus, ``path`` is relative to the run."""

    stream: str
    path: str
    description: str
    columns: tuple[Column, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """The columns' names, in order."""
        return tuple(column.name for column in self.columns)


SEQ = Column("seq", "integer", "", "counts the rows from 0 without gaps")
TIME = Column("time_s", "number", "s", "seconds since the start of the run, monotonic clock")
