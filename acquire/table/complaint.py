"""Why a table can't be used: the sentences."""

from __future__ import annotations

from collections.abc import Sequence

from acquire.config.table import TableSection
from acquire.table.numbers import has_other_mark, looks_like_number, read_number, why_no_number
from acquire.table.sampling import separators_for

LONGEST_SHOWN = 60


def no_heading(name: str) -> str:
    """No line of headings was found at all."""
    return f"no line of headings has {name!r}; give the column's number, counted from 1."


def nothing_fits(
    below: Sequence[str],
    section: TableSection,
    places: Sequence[int],
    headings: Sequence[str] = (),
    heading_line: int | None = None,
) -> str:
    """No line has numbers in the wanted columns; shows the one that comes nearest."""
    names = [repr(headings[place]) if headings else str(place + 1) for place in places]
    text = f"no line has a number in each of the columns {', '.join(names)}"
    if heading_line is not None:
        text += f" below the headings in line {heading_line + 1}"
    if not below:
        return f"{text}: there are only comments and blank lines."
    line, cells = _nearest(below, section)
    shown = line if len(line) <= LONGEST_SHOWN else line[:LONGEST_SHOWN] + "..."
    text += f"; the line {shown!r} comes nearest"
    if headings and len(cells) != len(headings):
        return (
            f"{text}, but has {len(cells)} cells and there are {len(headings)} headings; "
            "see to the delimiter, or give the columns by number."
        )
    if len(cells) <= max(places):
        return f"{text}, but has {len(cells)} cells; see to the delimiter."
    for name, place in zip(names, places):
        if read_number(cells[place], section.decimal) is None:
            why = why_no_number(cells[place], section.decimal)
            return f"{text}, but in column {name} is {why}{_hint(cells[place], section)}."
    return f"{text}."


def _nearest(below: Sequence[str], section: TableSection) -> tuple[str, list[str]]:
    pairs = (
        (line, separator.filled_cells(line))
        for separator in separators_for(section)
        for line in below
    )
    return max(pairs, key=lambda pair: sum(map(looks_like_number, pair[1])))


def _hint(cell: str, section: TableSection) -> str:
    if not has_other_mark(cell, section.decimal):
        return ""
    other = "." if section.decimal == "," else ","
    return f'; set decimal = "{other}" if that is meant'
