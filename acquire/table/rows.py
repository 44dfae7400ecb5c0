"""The rows of one file: numbers where a line is in order, else why it is not.

Almost all lines of a table are plain. One that is gets its numbers by ``float`` at once; whatever
is not beyond doubt (another number of cells, quotes, comments, characters that ``float`` takes
in ways of its own) is read again, slowly and strictly.
"""

from __future__ import annotations

import math
from array import array
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import islice
from operator import itemgetter

from acquire.config.table import TableSection
from acquire.errors import TableError
from acquire.table.dialect import Layout, moved
from acquire.table.numbers import has_other_mark, read_number, why_no_number
from acquire.table.sampling import is_comment
from acquire.table.separator import outside_quotes

LATEST_S = 1e12  # 30 000 years; beyond some 1e15 s a time has no milliseconds left


class Refusal(ValueError):
    """Why a line can't be used, in a few words. ``other_marks``: for the marks in a number."""

    def __init__(self, why: str, other_marks: bool = False) -> None:
        super().__init__(why)
        self.other_marks = other_marks


@dataclass
class FileRows:
    """What a file holds, row by row, good or not.

    ``numbers``: ``stride`` a row, nan in a refused one. ``times``: in seconds as the file has
    them, empty without a time column; a refused row has that of the row before it (nan before
    the first good one). ``refused``: line (counted from 1) and reason by the row's number.
    ``other_marks``: rows refused for decimal or thousands marks.
    """

    stride: int
    numbers: array[float] = field(default_factory=lambda: array("d"))
    times: array[float] = field(default_factory=lambda: array("d"))
    refused: dict[int, tuple[int, str]] = field(default_factory=dict)
    other_marks: int = 0

    def __len__(self) -> int:
        return len(self.numbers) // self.stride

    @property
    def good(self) -> int:
        """How many rows can be used."""
        return len(self) - len(self.refused)


def read_rows(lines: Sequence[str], layout: Layout, section: TableSection) -> FileRows:
    """All rows of a file. Raises TableError if the columns change places halfway."""
    plain, slow = _plain_reader(layout, section), _slow_reader(layout, section)
    rows = FileRows(len(section.values))
    nothing = (math.nan,) * rows.stride
    scale = None if section.time is None else section.time.scale
    latest = math.nan
    first = layout.first_line
    for line_number, line in enumerate(islice(lines, first, None), first + 1):
        try:
            values = plain(line) or slow(line)
            if values is None:
                continue
            if scale is not None:
                latest = _later(values[-1] * scale, latest)
                values = values[:-1]
        except Refusal as refusal:
            if moved(line, layout):
                raise TableError(
                    f"line {line_number} has the columns in another order; make two files of it."
                ) from None
            rows.refused[len(rows)] = line_number, str(refusal)
            rows.other_marks += refusal.other_marks
            values = nothing
        rows.numbers.extend(values)
        if scale is not None:
            rows.times.append(latest)
    return rows


def _later(time_s: float, latest: float) -> float:
    """The time if it is later than the latest (nan: there was none), else Refusal."""
    if time_s <= latest:
        raise Refusal(f"time does not increase: {time_s!r} s after {latest!r} s")
    if not abs(time_s) <= LATEST_S:
        raise Refusal(f"too large a time: {time_s!r} s; see to its scale")
    return time_s


def _slow_reader(
    layout: Layout, section: TableSection
) -> Callable[[str], tuple[float, ...] | None]:
    """A strict reader of any line, which gives None for blank ones and comments.

    It raises Refusal for what is neither that nor a good row.
    """
    comment, width = section.comment, layout.width

    def read(line: str) -> tuple[float, ...] | None:
        if is_comment(line, comment):
            return None
        if comment and comment in outside_quotes(line):
            raise Refusal("a comment after the numbers")
        cells = layout.separator.cells(line)
        if not any(cells):
            return None
        if len(cells) < width:
            raise Refusal(f"too few cells: {len(cells)} of {width}")
        if any(cells[width:]):
            raise Refusal(f"too many cells: {len(cells)} of {width}")
        return tuple([number(cells[place], place) for place in layout.places])

    def number(cell: str, place: int) -> float:
        value = read_number(cell, section.decimal)
        if value is None:
            why = why_no_number(cell, section.decimal)
            other = has_other_mark(cell, section.decimal)
            raise Refusal(f"column {layout.name(place)}: {why}", other)
        return value

    return read


def _plain_reader(
    layout: Layout, section: TableSection
) -> Callable[[str], tuple[float, ...] | None]:
    """A quick reader of plain lines, which gives None for all others."""
    mark, width, comment = layout.separator.mark, layout.width, section.comment
    place = layout.places[0]
    one = len(layout.places) == 1
    pick = itemgetter(*layout.places)
    commas = section.decimal == ","
    isfinite = math.isfinite

    def read(line: str) -> tuple[float, ...] | None:
        cells = line.split(mark)
        if len(cells) != width and (len(cells) != width + 1 or cells[width].strip()):
            return None  # one more that is empty: the line ends with a delimiter
        if "_" in line or '"' in line or not line.isascii():
            return None
        if comment and comment in line:
            return None
        wanted = (cells[place],) if one else pick(cells)
        if commas:
            if "." in "".join(wanted):
                return None
            wanted = [cell.replace(",", ".") for cell in wanted]
        try:
            values = tuple(map(float, wanted))
        except ValueError:
            return None
        return values if isfinite(sum(values)) else None

    return read
