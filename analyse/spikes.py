"""Single wild points: a reading that is far from both its neighbours.

A reading is judged when the next one is known. It is wild when it departs from the last good one
and from the next by more than ``factor`` usual steps, to the same side. A real step (the next
reading stays there) is never taken for a wild point.
"""

from __future__ import annotations

from collections import deque
from typing import Generic, TypeVar

Item = TypeVar("Item")


class SpikeGate(Generic[Item]):
    """Passes items on, one reading late, saying of each whether it is wild.

    The usual step is the trimmed mean of the last ``memory`` absolute steps between good
    readings; before ``memory / 4`` of them are known nothing is called wild.
    """

    def __init__(self, factor: float = 12.0, memory: int = 32) -> None:
        self.factor = factor
        self._steps: deque[float] = deque(maxlen=memory)
        self._needed = memory // 4
        self._good: float | None = None
        self._held: tuple[float, Item] | None = None

    def push(self, value: float, item: Item) -> tuple[Item, bool] | None:
        """Take a reading; returns the previous one with its judgement, if there was one."""
        judged = self._judge(value)
        self._held = (value, item)
        return judged

    def flush(self) -> tuple[Item, bool] | None:
        """Let go of the reading that waits for its next neighbour; it is taken as good."""
        judged = self._judge(None)
        self._held = None
        return judged

    def _judge(self, following: float | None) -> tuple[Item, bool] | None:
        if self._held is None:
            return None
        value, item = self._held
        if self._good is None or following is None:
            self._accept(value)
            return item, False
        before, after = value - self._good, value - following
        limit = self.factor * self._usual_step()
        wild = before * after > 0 and min(abs(before), abs(after)) > limit
        if not wild:
            self._accept(value)
        return item, wild

    def _accept(self, value: float) -> None:
        if self._good is not None:
            self._steps.append(abs(value - self._good))
        self._good = value

    def _usual_step(self) -> float:
        if len(self._steps) < self._needed:
            return float("inf")
        ordered = sorted(self._steps)
        kept = ordered[: max(1, (len(ordered) * 9) // 10)]
        return max(sum(kept) / len(kept), 1e-300)
