"""Cautions about the readings themselves: overload, clipping, silence, phase."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator

from scipy.constants import e, h

from analyse.estimate import Caution
from analyse.pairing import Pair

RECENT = 20
MEMORY = 100
FLAT = 12
"""Readings in a row, equal to the last digit while the field moves, that can't be real."""


class RoleWatch:
    """Counts what became of one role's readings, and watches the recent ones."""

    def __init__(self, role: str) -> None:
        self.role = role
        self.counts: dict[str, int] = {}
        self._recent: deque[str] = deque(maxlen=MEMORY)
        self._quadrature: deque[tuple[float, float]] = deque(maxlen=MEMORY)
        self._flat: deque[tuple[float, float]] = deque(maxlen=FLAT)

    def add(self, pair: Pair) -> None:
        """Take note of one pair."""
        self.counts[pair.kind] = self.counts.get(pair.kind, 0) + 1
        self._recent.append(pair.kind)
        if pair.kind == "ok":
            self._flat.append((pair.field_T, pair.rho_ohm))
        if pair.kind == "ok" and pair.quadrature_ohm is not None:
            self._quadrature.append((pair.rho_ohm, pair.quadrature_ohm))

    def cautions(self) -> Iterator[Caution]:
        """Cautions about this role's readings that hold now."""
        recent = list(self._recent)
        overloads = recent[-RECENT:].count("overload")
        if overloads:
            yield Caution(
                "overload",
                f"{overloads} of the last {len(recent[-RECENT:])} {self.role} readings are "
                "overloads or out of range: set a larger range; they are not used.",
            )
        lost = recent[-RECENT:].count("lost")
        if len(recent) >= RECENT and lost == RECENT:
            yield Caution(
                "stream_silent",
                f"no usable {self.role} reading among the last {RECENT}: look at the instrument, "
                "its line and its settings.",
            )
        bad = sum(kind in ("lost", "wild", "overload") for kind in recent)
        if len(recent) >= MEMORY // 2 and bad > 0.1 * len(recent):
            yield Caution(
                "unusable_readings",
                f"{bad} of the last {len(recent)} {self.role} readings can't be used (no answer, "
                "overload, or wild): look at the line, the range and for interference.",
            )
        yield from self._phase()
        yield from self._clipped()

    def _phase(self) -> Iterator[Caution]:
        if len(self._quadrature) < RECENT:
            return
        in_phase = math.sqrt(sum(x * x for x, _ in self._quadrature))
        across = math.sqrt(sum(y * y for _, y in self._quadrature))
        aligned = abs(sum(x * y for x, y in self._quadrature))
        if across > 0.1 * in_phase and aligned > 0.7 * in_phase * across:
            angle = math.degrees(math.atan2(across, in_phase))
            yield Caution(
                "phase_wrong",
                f"the {self.role} signal stands {angle:.0f} degrees off the reading's phase: "
                "check the lock-in's phase, the wiring and capacitive pick-up.",
            )

    def _clipped(self) -> Iterator[Caution]:
        if len(self._flat) < FLAT:
            return
        fields = [field for field, _ in self._flat]
        values = [value for _, value in self._flat]
        if values.count(values[0]) < FLAT or not values[0] or max(fields) == min(fields):
            return
        plateau = abs(h / e**2 / values[0])
        looks = f"it is not a plateau (h/e^2 over {plateau:.2f})"
        if round(plateau) >= 1 and abs(plateau / round(plateau) - 1) < 2e-3:
            looks = f"even a plateau (i = {round(plateau)}) has noise"
        yield Caution(
            "clipped",
            f"{FLAT} {self.role} readings in a row are equal to the last digit while the field "
            f"moves: {looks}; the input or the range is clipped, or the reading is frozen.",
        )
