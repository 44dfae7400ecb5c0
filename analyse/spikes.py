"""Wild readings: one, or a few in a row, far from those before and after them.

A reading that jumps by more than ``factor`` usual steps from the last good one is held back, with
those that follow it, until one comes back to within ``back`` usual steps of the last good one: then
all that were held are wild (a glitch, a change of range and the filter's answer to it). If none
comes back within ``longest`` readings it was a real step, and all of them are good.
"""

from __future__ import annotations

from collections import deque
from typing import Generic, TypeVar

Item = TypeVar("Item")

SILENT = 5
"""Rows without a value, more than ``longest``, after which a reading that jumped is called wild."""


class SpikeGate(Generic[Item]):
    """Passes items on in order, saying of each whether it is wild.

    The usual step is the trimmed mean of the last ``memory`` absolute steps between good
    readings, and not less than the last digit; before ``memory / 4`` of them are known nothing is
    called wild. The last digit is what readings that are mostly equal now and then differ by: the
    second smallest departure ever seen, if the smallest is of its kind. A good reading is passed
    on at once, one that jumps only when it is known what it was.
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

    def push(self, value: float, item: Item) -> list[tuple[Item, bool]]:
        """Take a reading; returns what can be judged now, in order."""
        if self._good is None:
            return [self._accept(value, item)]
        away = abs(value - self._good)
        if away and not self._held:
            self._departures = sorted([*self._departures, away])[:2]
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
        return self.flush() if len(self._held) > self.longest else []

    def pass_by(self, item: Item) -> list[tuple[Item, bool]]:
        """Take something that has no value, to be passed on in its order."""
        if not self._held:
            return [(item, False)]
        self._held.append((None, item))
        silent = sum(value is None for value, _ in self._held)
        return self._let_go(wild=True) if silent > self.longest + SILENT else []

    def flush(self) -> list[tuple[Item, bool]]:
        """Let go of all that is held; it is taken as good."""
        return self._let_go(wild=False)

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
        return max(sum(kept) / len(kept), self._last_digit())

    def _last_digit(self) -> float:
        if len(self._departures) == 2:
            smallest, second = self._departures
            if second <= self.factor * smallest:
                return second
        return 1e-300
