"""Readings: what a reader publishes, and the table that holds it.

Every row says by ``status`` what it is:

========== =======================================================================
ok         all values were read
overload   the instrument said so, or a value is an overload sentinel
range      a value is outside the range that the configuration states for it
no_answer  no reply in time, or the connection broke; the values are empty
bad_reply  a reply came that is not what was configured; the values are empty
settings   no reading: ``detail`` has the instrument's identity and settings (JSON),
           valid from this row on
end        no reading: the reader has ended in order; nothing follows
relay      no reading: a relay says whom it listens to elsewhere, or how far the clocks are apart
unheard    no reading: a relay says why the reader elsewhere can't be heard
========== =======================================================================

Values are the numbers as read; the configuration's ``scale`` turns them into its unit.
"""

from __future__ import annotations

from dataclasses import dataclass

from acquire.config.reader import ReaderSection
from acquire.config.table import TableSection
from acquire.tables import SEQ, TIME, Column, Row, Table

NO_READING = ("settings", "end", "relay", "unheard")
"""Statuses of rows that are about the reader, and for which no time has passed without a reading."""

STATUSES = ("ok", "overload", "range", "no_answer", "bad_reply", *NO_READING)

_TOOK = "from question to answer, time_s is the middle; empty for samples of a block"


def stream_of(reader: str) -> str:
    """The name of a reader's stream on the bus."""
    return f"readings/{reader}"


def reading_table(name: str, source: ReaderSection | TableSection) -> Table:
    """The table of one reader: seq, time_s, took_s, status, detail, then its values."""
    values = tuple(
        Column(value.name, "number", "", f"as read; times {value.scale!r} in {value.unit}")
        for value in source.values
    )
    fixed = (
        SEQ,
        TIME,
        Column("took_s", "number", "s", _TOOK),
        Column("status", "string", "", ", ".join(STATUSES)),
        Column("detail", "string", "", "what was wrong, or settings as JSON"),
    )
    return Table(stream_of(name), f"readings/{name}.csv", f"readings of {name}", fixed + values)


@dataclass(frozen=True, slots=True)
class Reading:
    """One row of a reader's table."""

    reader: str
    seq: int
    time_s: float
    took_s: float | None
    status: str
    detail: str
    values: tuple[float | None, ...]

    @classmethod
    def from_row(cls, reader: str, row: Row) -> Reading:
        """The reading in a row of :func:`reading_table`."""
        seq, time_s, took_s, status, detail = row[:5]
        return cls(reader, seq, time_s, took_s, status, detail or "", row[5:])  # type: ignore[arg-type]

    def cells(self) -> Row:
        """The row without ``seq``, as a publisher takes it."""
        return (self.time_s, self.took_s, self.status, self.detail, *self.values)
