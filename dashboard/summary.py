"""What a run found: the latest numbers of each Hall bar, from the rows of its two tables.

The same object serves the terminal while a run goes on and the words at its end. Rows may come
in any interleaving of the two tables, each table in its own order.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS

_ESTIMATE = {name: index for index, name in enumerate(ESTIMATES.names)}
_EVENT = {name: index for index, name in enumerate(EVENTS.names)}


@dataclass
class BarSummary:
    """One Hall bar: its newest estimate, and what has happened to it.

    ``stable_at`` is the (time in s, field in T) since which it is stable, None if it is not;
    ``sentences`` has the latest sentence of each caution that was ever raised, by code.
    """

    newest: Row | None = None
    stable_at: tuple[float, float] | None = None
    sentences: dict[str, str] = field(default_factory=dict)

    def get(self, column: str) -> Any:
        """A cell of the newest estimate; None while there is none."""
        return None if self.newest is None else self.newest[_ESTIMATE[column]]

    @property
    def verdict(self) -> str:
        """``converging`` or ``stable``."""
        return self.get("verdict") or "converging"

    @property
    def cautions(self) -> dict[str, str]:
        """The open cautions: code to sentence (empty where its event has not come yet)."""
        codes = (self.get("cautions") or "").split()
        return {code: self.sentences.get(code, "") for code in codes}


class Summary:
    """The state of a run, brought up to date row by row.

    Parameters
    ----------
    run
        The run's name.
    hall_bars
        Names of the Hall bars, in the order in which they are told.
    confidence
        The configured confidence of the intervals.
    timed
        False for a table without a time column, whose times count its rows.
    """

    def __init__(
        self, run: str, hall_bars: Iterable[str], confidence: float, timed: bool = True
    ) -> None:
        self.run = run
        self.confidence = confidence
        self.timed = timed
        self.bars = {name: BarSummary() for name in hall_bars}

    def add_estimate(self, row: Row) -> None:
        """Take a row of the table of estimates."""
        bar = self.bars[str(row[_ESTIMATE["hall_bar"]])]
        bar.newest = row
        if bar.verdict != "stable":
            bar.stable_at = None
        elif bar.stable_at is None:
            bar.stable_at = (bar.get("time_s"), bar.get("field_T"))

    def add_event(self, row: Row) -> None:
        """Take a row of the table of events; what concerns no Hall bar changes nothing here."""
        kind, name = row[_EVENT["kind"]], row[_EVENT["hall_bar"]]
        if kind == "caution" and name is not None:
            code, sentence = row[_EVENT["code"]], row[_EVENT["text"]]
            self.bars[str(name)].sentences[str(code)] = str(sentence or "")
