"""Cutting a line into cells."""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass

NAMED = {"tab": "\t", "comma": ",", "semicolon": ";", "space": None, " ": None}
"""The delimiters that have names; None stands for runs of blanks."""

_QUOTED = re.compile(r'"[^"]*"')


@dataclass(frozen=True)
class Separator:
    """What stands between two cells: one character, or None for a run of blanks and tabs."""

    mark: str | None

    @classmethod
    def named(cls, name: str) -> Separator:
        """The separator for a key ``delimiter`` of the configuration other than ``auto``."""
        return cls(NAMED.get(name, name))

    @property
    def words(self) -> str:
        """For a person: ``tabs``, ``blanks``, ``';'``."""
        return {"\t": "tabs", None: "blanks", ",": "commas", ";": "semicolons"}.get(
            self.mark, repr(self.mark)
        )

    def cells(self, line: str) -> list[str]:
        """All cells, without blanks around them and without quotes. Empty ones at the end count."""
        if '"' in line:
            return self._quoted_cells(line)
        return [cell.strip() for cell in line.split(self.mark)]

    def filled_cells(self, line: str) -> list[str]:
        """The cells up to the last one that is not empty."""
        cells = self.cells(line)
        while cells and not cells[-1]:
            cells.pop()
        return cells

    def _quoted_cells(self, line: str) -> list[str]:
        mark = self.mark
        if mark is None:
            line, mark = line.replace("\t", " "), " "
        try:
            rows = list(csv.reader([line], delimiter=mark, skipinitialspace=mark != "\t"))
        except csv.Error:  # a cell of more than 128 kB
            return [cell.strip() for cell in line.split(self.mark)]
        return [cell.strip() for cell in rows[0]] if rows else []


def outside_quotes(line: str) -> str:
    """A line without what stands in quotes."""
    return _QUOTED.sub("", line) if '"' in line else line


def printable(text: str) -> str:
    """Text from a file for a terminal: what can't be printed as an escape."""
    if text.isprintable():
        return text
    return "".join([c if c.isprintable() else repr(c)[1:-1] for c in text])
