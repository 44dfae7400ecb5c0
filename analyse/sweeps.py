"""Which sweep a field point belongs to: the ramp is cut where the field turns back."""

from __future__ import annotations


class Sweeps:
    """Counts sweeps. A turn counts when the field came back by ``threshold_T`` from its extreme."""

    def __init__(self, threshold_T: float) -> None:
        self.threshold_T = threshold_T
        self.number = 0
        self.direction = 0
        self._extreme: float | None = None

    def add(self, field_T: float) -> int:
        """Take a field; returns the number of the sweep that it belongs to, from 0."""
        if self._extreme is None:
            self._extreme = field_T
            return self.number
        away = field_T - self._extreme
        if self.direction == 0:
            if abs(away) > self.threshold_T:
                self.direction = 1 if away > 0 else -1
                self._extreme = field_T
        elif away * self.direction > 0:
            self._extreme = field_T
        elif abs(away) > self.threshold_T:
            self.number += 1
            self.direction = -self.direction
            self._extreme = field_T
        return self.number
