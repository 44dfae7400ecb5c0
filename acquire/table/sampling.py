"""Which delimiter and number of cells fit the lines of a table, by a sample of them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from acquire.config.table import TableSection
from acquire.table.numbers import looks_like_number
from acquire.table.separator import Separator

TRIED = tuple(Separator(mark) for mark in ("\t", ";", "|", ",", None))
"""Delimiters that are tried, by rank among equals."""

SAMPLE = 200  # lines looked at from the top, and as many spread over the rest

Cut = tuple[Separator, int]
"""A delimiter, and how many cells it makes of a line."""

Score = tuple[float, int, int]
"""Lines that fit, each weighed by its share of numbers; cells a line; rank of the delimiter."""


def is_comment(line: str, comment: str) -> bool:
    """Whether a line holds nothing but a comment."""
    return bool(comment) and line.lstrip().startswith(comment)


def may_hold_numbers(line: str, comment: str) -> bool:
    """Whether a line is neither blank nor a comment."""
    return bool(line.strip()) and not is_comment(line, comment)


def separators_for(section: TableSection) -> tuple[Separator, ...]:
    """Those that a configuration leaves open: one, or all that can be."""
    if section.delimiter != "auto":
        return (Separator.named(section.delimiter),)
    return tuple(one for one in TRIED if one.mark is None or one.mark != section.comment)


def sample(lines: Sequence[str], start: int, comment: str) -> list[str]:
    """Lines that may hold numbers: some from number ``start`` on, some spread over the rest."""
    good: list[str] = []
    position = start
    while position < len(lines) and len(good) < SAMPLE:
        if may_hold_numbers(lines[position], comment):
            good.append(lines[position])
        position += 1
    step = max((len(lines) - position) // SAMPLE, 1)
    return good + [line for line in lines[position::step] if may_hold_numbers(line, comment)]


def scores(lines: Iterable[str], section: TableSection, places: Sequence[int]) -> dict[Cut, Score]:
    """How well each cut fits a sample of lines; only those that fit any line at all."""
    sums: dict[Cut, float] = {}
    separators = separators_for(section)
    for line in lines:
        for separator in separators:
            if not _can_separate(separator, line, section):
                continue
            cells = separator.filled_cells(line)
            share = _share_of_numbers(cells, places)
            if share:
                cut = separator, len(cells)
                sums[cut] = sums.get(cut, 0.0) + share
    rank = {separator: -place for place, separator in enumerate(separators)}
    return {cut: (total, cut[1], rank[cut[0]]) for cut, total in sums.items()}


def _can_separate(separator: Separator, line: str, section: TableSection) -> bool:
    """A comma that stands in decimals separates only what is in quotes, unless it was asked for."""
    asked = section.delimiter != "auto" or section.decimal != "," or separator.mark != ","
    return asked or '"' in line


def _share_of_numbers(cells: Sequence[str], places: Sequence[int]) -> float:
    """How many of the cells look like numbers or are empty; 0 unless all the wanted ones do."""
    if len(cells) <= max(places):
        return 0.0
    likely = [not cell or looks_like_number(cell) for cell in cells]
    if not all(likely[place] and cells[place] for place in places):
        return 0.0
    return sum(likely) / len(cells)
