"""Mistakes in a configuration, all at once, each with its place, the rule and the value found."""

from __future__ import annotations

import difflib
from dataclasses import dataclass

from acquire.errors import RampsideError


@dataclass(frozen=True)
class Problem:
    """One mistake: ``path`` such as ``readers[0].timeout_ms``, the rule, the value found."""

    path: str
    rule: str
    found: str | None = None
    nearest: str | None = None

    def __str__(self) -> str:
        text = f"{self.path}: {self.rule}"
        if self.found is not None:
            text += f" (found {self.found})"
        if self.nearest is not None:
            text += f"; did you mean {self.nearest}?"
        return text


class ConfigError(RampsideError):
    """A configuration that can't be used. ``problems`` lists every mistake found."""

    def __init__(self, source: str, problems: list[Problem]) -> None:
        self.source = source
        self.problems = tuple(problems)
        count = "1 mistake" if len(problems) == 1 else f"{len(problems)} mistakes"
        lines = "\n".join(f"  {problem}" for problem in problems)
        super().__init__(f"{source}: {count}; mend and run again.\n{lines}")


def nearest_name(name: str, known: list[str]) -> str | None:
    """The known name closest to ``name``, or None if none is close."""
    close = difflib.get_close_matches(name, known, n=1, cutoff=0.5)
    return close[0] if close else None
