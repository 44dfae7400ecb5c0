"""Wild readings: one, or a few in a row, far from those before and after them.

A reading that jumps by more than ``factor`` usual steps from the last good one is held back, with
those that follow it, until one comes back to within ``back`` usual steps of the last good one: then
all that were held are wild (a glitch, a change of range and the filter's answer to it). If none
comes back within ``longest`` readings it was a real step, and they are judged by their own steps.
"""

from __future__ import annotations

import itertools
import statistics
from collections import deque
from typing import Generic, TypeVar

Item = TypeVar("Item")

SAME = 1e-6
"""Relative difference below which two departures are the same."""
ROUNDING = 1e-9
"""Departures below this share of a value are none."""
SILENT = 5
"""Rows without a value, more than ``longest``, after which a reading that jumped is called wild."""


class SpikeGate(Generic[Item]):
    """Passes items on in order, saying of each whether it is wild.

    The usual step is the trimmed mean of the last ``memory`` absolute steps between good
    readings, and not less than the last digit, which readings of few digits show by their
    departures coming again. The first ``memory / 4 + 1`` readings are held back until they can be
    judged together, by the median of their steps. A good reading is passed on at once, one that
    jumps only when it is known what it was.
    """

    def __init__(
        self, longest: int = 1, factor: float = 12.0, back: float = 6.0, memory: int = 32
    ) -> None:
        self.longest = longest
        self.factor = factor
        self.back = back
        self._steps: deque[float] = deque(maxlen=memory)
        self._needed = memory // 4
        self._good: float | None = None
        self._held: list[tuple[float | None, Item]] = []
        self._departures: list[float] = []
        self._repeated = False
        self._first: list[tuple[float | None, Item]] | None = []

    def push(self, value: float, item: Item) -> list[tuple[Item, bool]]:
        """Take a reading; returns what can be judged now, in order."""
        if self._first is not None:
            self._first.append((value, item))
            known = sum(one is not None for one, _ in self._first)
            return self._begin() if known > self._needed else []
        if self._good is None:
            return [self._accept(value, item)]
        away = abs(value - self._good)
        if not self._held and away > ROUNDING * abs(self._good):
            self._note_departure(away)
        usual = self._usual_step()
        if not self._held:
            if away <= self.factor * usual:
                return [self._accept(value, item)]
            self._held.append((value, item))
            return []
        # what was held may have moved on with the ramp meanwhile
        if away <= self.back * usual * (1 + len(self._held)) ** 0.5:
            return [*self._let_go(wild=True), self._accept(value, item)]
        self._held.append((value, item))
        return self._anew() if len(self._held) > self.longest else []

    def _anew(self) -> list[tuple[Item, bool]]:
        """What was held is a step, or the start of a ramp: judge it by its own steps."""
        self._first, self._held = self._held, []
        self._good = None
        self._steps.clear()
        return self._begin()

    def pass_by(self, item: Item) -> list[tuple[Item, bool]]:
        """Take something that has no value, to be passed on in its order."""
        if self._first:
            self._first.append((None, item))
            return self.flush() if len(self._first) > 4 * self._needed else []
        if not self._held:
            return [(item, False)]
        self._held.append((None, item))
        silent = sum(value is None for value, _ in self._held)
        return self._let_go(wild=True) if silent > self.longest + SILENT else []

    def flush(self) -> list[tuple[Item, bool]]:
        """Let go of all that is held; it is taken as good."""
        if self._first is not None:
            self._held, self._first = self._first, None
        return self._let_go(wild=False)

    def restart(self) -> list[tuple[Item, bool]]:
        """What follows is not like what came before: what is held is wild, and the next readings
        are judged by themselves."""
        self._held, self._first = self._held + (self._first or []), []
        judged = self._let_go(wild=True)
        self._good = None
        self._steps.clear()
        self._departures.clear()
        return judged

    def _begin(self) -> list[tuple[Item, bool]]:
        """Judge the first readings together; the median step does not mind a few wild ones."""
        first, self._first = self._first or [], None
        values = [value for value, _ in first if value is not None]
        steps = [abs(b - a) for a, b in itertools.pairwise(values)]
        usual = statistics.median(steps)
        self._steps.extend([usual] * self._needed)
        calm = (i for i, step in enumerate(steps) if step <= self.factor * usual)
        start = next(calm, 0)
        judged: list[tuple[Item, bool]] = []
        seen = 0
        for value, item in first:
            if value is None:
                judged += self.pass_by(item)
                continue
            judged += [(item, True)] if seen < start else self.push(value, item)
            seen += 1
        return judged

    def _let_go(self, wild: bool) -> list[tuple[Item, bool]]:
        held, self._held = self._held, []
        return [
            (item, wild and value is not None) if wild or value is None
            else self._accept(value, item)
            for value, item in held
        ]

    def _accept(self, value: float, item: Item) -> tuple[Item, bool]:
        if self._good is not None:
            self._steps.append(abs(value - self._good))
        self._good = value
        return item, False

    def _usual_step(self) -> float:
        if len(self._steps) < self._needed:
            return float("inf")
        ordered = sorted(self._steps)
        kept = ordered[: max(1, (len(ordered) * 9) // 10)]
        rounding = ROUNDING * abs(self._good) if self._good is not None else 0.0
        return max(sum(kept) / len(kept), self.last_digit, rounding, 1e-300)

    def _note_departure(self, away: float) -> None:
        """Keep the smallest different ones; readings of a digit fall on few values, again and again."""
        known = next((one for one in self._departures if abs(away - one) <= SAME * one), None)
        if known is not None:
            self._repeated = True
        else:
            self._departures = sorted([*self._departures, away])[:8]

    @property
    def last_digit(self) -> float:
        """The smallest distance between departures, zero among them; 0 while none came again."""
        if not self._repeated or not self._departures:
            return 0.0
        return min(b - a for a, b in itertools.pairwise((0.0, *self._departures)))
