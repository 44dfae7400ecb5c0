"""Whether the field moves as the planned ramp says, as far as a person would notice."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from statistics import median

CLOSE = 0.01  # of the planned span: what is taken for noise and overshoot
TURNS = 0.05  # of the planned span: how far from a planned turning point the field may turn


class Course:
    """Takes the readings of the field (T) in their order and says what is not as planned.

    The field may come from anywhere to the first planned field. Once it is within the planned
    range it must not leave it, and it may turn round only near a planned field that is not the
    last one: a quench, a supply that runs down, another person's hand show as something else.
    The median of three readings is looked at, so that one wild reading is nothing.

    Parameters
    ----------
    path_T
        The planned fields, in tesla, in order; at least two.
    """

    def __init__(self, path_T: Sequence[float]) -> None:
        self._low_T, self._high_T = min(path_T), max(path_T)
        span_T = self._high_T - self._low_T
        self.close_T, self._turns_T = CLOSE * span_T, TURNS * span_T
        self._turning_T = tuple(path_T[:-1])
        self._recent: deque[float] = deque(maxlen=3)
        self._been_inside = False
        self._direction = 0
        self._lowest_T = self._highest_T = float("nan")

    def add(self, reading_T: float) -> str | None:
        """Take a reading; what is unexpected about it, in words, or None."""
        self._recent.append(reading_T)
        if len(self._recent) < 3:
            return None
        field_T = median(self._recent)
        return self._outside(field_T) or self._turned(field_T)

    def _outside(self, field_T: float) -> str | None:
        inside = self._low_T - self.close_T <= field_T <= self._high_T + self.close_T
        self._been_inside = self._been_inside or inside
        if inside or not self._been_inside:
            return None
        planned = f"{self._low_T:g} to {self._high_T:g} T"
        return f"the field is at {field_T:.4g} T, outside of the planned {planned}"

    def _turned(self, field_T: float) -> str | None:
        if self._lowest_T != self._lowest_T:  # the first one
            self._lowest_T = self._highest_T = field_T
        self._lowest_T = min(self._lowest_T, field_T)
        self._highest_T = max(self._highest_T, field_T)
        down = self._highest_T - field_T > self.close_T
        up = field_T - self._lowest_T > self.close_T
        before, turned_at_T = self._direction, self._highest_T if down else self._lowest_T
        if down and before >= 0:
            self._direction, self._lowest_T = -1, field_T
        elif up and before <= 0:
            self._direction, self._highest_T = 1, field_T
        else:
            if before > 0:
                self._lowest_T = self._highest_T
            elif before < 0:
                self._highest_T = self._lowest_T
            return None
        if before == 0 or any(abs(turned_at_T - T) <= self._turns_T for T in self._turning_T):
            return None
        return f"the field turned round at {turned_at_T:.4g} T, where no turn is planned"
