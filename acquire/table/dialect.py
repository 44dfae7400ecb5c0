"""How a table is laid out: found in its own lines.

The delimiter is the one by which most lines fall into cells that look like numbers, whatever the
decimal mark: in ``1,5<tab>2,5`` tabs leave only such cells, commas do not. Where columns are given
by heading, only a cut counts in which one line has all the headings and the lines below it have
as many cells.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import islice

from acquire.config.table import TableSection
from acquire.errors import TableError
from acquire.table import heading, sampling
from acquire.table.complaint import no_heading, nothing_fits
from acquire.table.numbers import read_number
from acquire.table.separator import Separator, printable

DEEPEST_HEADING = 10_000  # lines looked through for headings
MOST_HEADINGS = 20  # lines with all the wanted headings that are tried

Wanted = Sequence[str | int]


@dataclass(frozen=True)
class Layout:
    """Where the numbers are. Columns and lines are counted from 0.

    ``places``: the wanted columns, time last where it is wanted. ``width``: cells a line.
    ``headings``: all headings, empty where none were looked for; ``heading_line``: where.
    ``first_line``: the first line of numbers; all before it is preamble.
    """

    separator: Separator
    width: int
    places: tuple[int, ...]
    first_line: int = 0
    headings: tuple[str, ...] = ()
    heading_line: int | None = None

    def name(self, place: int) -> str:
        """A column's heading, or its number counted from 1."""
        return printable(self.headings[place]) if self.headings else str(place + 1)


def find_layout(lines: Sequence[str], section: TableSection) -> Layout:
    """The layout of a table. Raises TableError, without the file's name, if there is none."""
    wanted: list[str | int] = [value.column for value in section.values]
    if section.time is not None:
        wanted.append(section.time.column)
    layout = _by_heading(lines, section, wanted) if _names(wanted) else None
    if layout is None:
        layout = _by_number(lines, section, [int(column) - 1 for column in wanted])
    return replace(layout, first_line=_first_numbers(lines, section, layout))


def moved(line: str, layout: Layout) -> bool:
    """Whether a line among the numbers gives the headings anew, in another order."""
    names = [layout.headings[place] for place in layout.places] if layout.headings else []
    if not names or not all(name in line for name in names):
        return False
    found = heading.find_columns(layout.separator.filled_cells(line), names)
    return found is not None and tuple(found) != layout.places


def _names(wanted: Wanted) -> list[str]:
    return [column.strip() for column in wanted if isinstance(column, str)]


def _by_number(lines: Sequence[str], section: TableSection, places: list[int]) -> Layout:
    sample = sampling.sample(lines, 0, section.comment)
    scores = sampling.scores(sample, section, places)
    if not scores:
        raise TableError(nothing_fits(sample, section, places))
    return Layout(*max(scores, key=lambda cut: scores[cut]), tuple(places))


def _by_heading(lines: Sequence[str], section: TableSection, wanted: Wanted) -> Layout:
    """Raises TableError if no line has the headings, or none of those fits the numbers below."""
    best: tuple[sampling.Score, Layout] | None = None
    lonely: tuple[int, list[str], list[int]] | None = None
    for number, headings, places in islice(_headings(lines, section, wanted), MOST_HEADINGS):
        lonely = lonely or (number, headings, places)
        below = sampling.sample(lines, number + 1, section.comment)
        for cut, score in sampling.scores(below, section, places).items():
            if cut[1] == len(headings) and (best is None or score > best[0]):
                best = score, Layout(*cut, tuple(places), number + 1, tuple(headings), number)
    if best is not None:
        return best[1]
    if lonely is None:
        raise TableError(_not_found(lines, section, wanted))
    number, headings, places = lonely
    below = sampling.sample(lines, number + 1, section.comment)
    raise TableError(nothing_fits(below, section, places, headings, number))


def _headings(
    lines: Sequence[str], section: TableSection, wanted: Wanted
) -> Iterator[tuple[int, list[str], list[int]]]:
    """Lines that have all the wanted headings, in each cut in which they do."""
    names = _names(wanted)
    for number, line in enumerate(lines[:DEEPEST_HEADING]):
        if all(name in line for name in names):
            for headings in heading.cuts(line, section.comment, _all_separators(section)):
                places = _resolve(headings, wanted)
                if places is not None:
                    yield number, headings, places


def _resolve(headings: Sequence[str], wanted: Wanted) -> list[int] | None:
    names = _names(wanted)
    found = heading.find_columns(headings, names)
    if found is None:
        return None
    by_name = dict(zip(names, found))
    places = [
        by_name[column.strip()] if isinstance(column, str) else column - 1 for column in wanted
    ]
    return places if max(places) < len(headings) else None


def _all_separators(section: TableSection) -> tuple[Separator, ...]:
    """For headings, which may be cut otherwise than the numbers; the likeliest first."""
    return tuple(dict.fromkeys([*sampling.separators_for(section), *sampling.TRIED]))


def _first_numbers(lines: Sequence[str], section: TableSection, layout: Layout) -> int:
    """The first line of numbers, counting from the first that is good in all wanted columns back
    over those that are good in some, so that bad rows at the top are counted and not passed over.
    """
    good = layout.first_line
    while good < len(lines) and not all(_numbers_in(lines[good], section, layout)):
        good += 1
    if good == len(lines):
        below = sampling.sample(lines, layout.first_line, section.comment)
        raise TableError(nothing_fits(below, section, layout.places, layout.headings))
    while good > layout.first_line and any(_numbers_in(lines[good - 1], section, layout)):
        good -= 1
    return good


def _numbers_in(line: str, section: TableSection, layout: Layout) -> list[bool]:
    """Which of the wanted columns hold a number; all False in a line of another kind."""
    if not sampling.may_hold_numbers(line, section.comment):
        return [False]
    cells = layout.separator.filled_cells(line)
    if len(cells) > layout.width or len(cells) <= max(layout.places):
        return [False]
    return [read_number(cells[place], section.decimal) is not None for place in layout.places]


def _not_found(lines: Sequence[str], section: TableSection, wanted: Wanted) -> str:
    """Names the headings that there are: above the numbers, as many as there are cells."""
    numbers = [column - 1 for column in wanted if isinstance(column, int)] or [0]
    scores = sampling.scores(sampling.sample(lines, 0, section.comment), section, numbers)
    if not scores:
        return no_heading(_names(wanted)[0])
    layout = Layout(*max(scores, key=lambda cut: scores[cut]), tuple(numbers))
    first = next(n for n, line in enumerate(lines) if _fits(line, section, layout))
    for line in reversed(lines[max(first - DEEPEST_HEADING, 0) : first]):
        for headings in heading.cuts(line, section.comment, _all_separators(section)):
            if len(headings) == layout.width:
                return heading.not_found(_names(wanted), headings)
    return no_heading(_names(wanted)[0])


def _fits(line: str, section: TableSection, layout: Layout) -> bool:
    cut = layout.separator, layout.width
    return sampling.may_hold_numbers(line, section.comment) and cut in sampling.scores(
        [line], section, layout.places
    )
