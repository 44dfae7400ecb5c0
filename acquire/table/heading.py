"""The line of headings: the ways to cut it, and the columns that are looked for in it."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence

from acquire.config.problems import nearest_name
from acquire.table.separator import Separator

_UNIT = re.compile(r"(?:\([^()]*\)|\[[^\[\]]*\]|\{[^{}]*\}|/[^/]*)$")
_TWO_BLANKS = re.compile(r"\s{2,}|\t")
_IN_BRACKETS = r"[(\[{][^)\]}]{0,40}[)\]}]"
_WITH_UNIT = re.compile(rf"(?:[^\s(\[{{]|{_IN_BRACKETS}|\s{{1,9}}(?={_IN_BRACKETS}))+")
COMMENT_MARKS = "#%!;/*"  # of other programs than the one that the configuration knows
LONGEST_LIST = 30  # headings shown in an error


def cuts(line: str, comment: str, separators: Sequence[Separator]) -> Iterator[list[str]]:
    """The headings that a line may hold, cut in every sensible way, the likeliest first.

    Headings are often cut otherwise than the numbers: after a comment string, by several blanks
    since they have blanks inside, with their units in brackets.
    """
    bare = line.strip()
    bodies = [bare]
    if comment and bare.startswith(comment):
        bodies = [bare[len(comment) :].strip()]
    bodies.append(bodies[0].lstrip(COMMENT_MARKS).strip())
    seen: list[list[str]] = [[]]
    for body in dict.fromkeys(bodies):
        for cells in _cuts_of(body, separators):
            if cells not in seen:
                seen.append(cells)
                yield cells


def find_columns(cells: Sequence[str], names: Sequence[str]) -> list[int] | None:
    """Where each of the names stands; None unless each stands there exactly once.

    A name is that of the whole heading, or of the heading without the unit at its end.
    """
    found = []
    for name in names:
        places = _places(cells, name)
        if len(places) != 1:
            return None
        found.append(places[0])
    return found


def without_unit(heading: str) -> str:
    """``B`` for ``B (T)``, ``B [T]``, ``B / T``."""
    return _UNIT.sub("", heading).strip()


def not_found(names: Sequence[str], headings: Sequence[str]) -> str:
    """What to tell somebody who named a column that is not there, or is there twice."""
    name = next((name for name in names if len(_places(headings, name)) != 1), names[0])
    places = _places(headings, name)
    if places:
        columns = " and ".join(str(place + 1) for place in places)
        return f"columns {columns} are both headed {name!r}; give the column's number instead."
    known = list(dict.fromkeys([*headings, *map(without_unit, headings)]))
    nearest = nearest_name(name, known)
    shown = ", ".join(map(repr, headings[:LONGEST_LIST]))
    more = f" and {len(headings) - LONGEST_LIST} more" if len(headings) > LONGEST_LIST else ""
    hint = f"; did you mean {nearest!r}?" if nearest else "."
    return f"no column is headed {name!r}{hint} The headings are {shown}{more}."


def _places(cells: Sequence[str], name: str) -> list[int]:
    whole = [place for place, cell in enumerate(cells) if cell == name]
    return whole or [place for place, cell in enumerate(cells) if without_unit(cell) == name]


def _cuts_of(body: str, separators: Sequence[Separator]) -> Iterator[list[str]]:
    for separator in separators:
        yield separator.filled_cells(body)
    if any(separator.mark is None for separator in separators):
        yield [cell.strip('" ') for cell in _TWO_BLANKS.split(body) if cell]
        yield [cell.strip() for cell in _WITH_UNIT.findall(body)]
