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
SAG = 0.02
"""Share by which the known current may change before it is said."""
FLAT_INTEGRAL_TIMES = 8.0
"""A filter's noise does not stand still within a digit for so many of its integral times."""
BAD = ("lost", "wild", "overload")
"""Kinds that can't be used; a glitch counts once, however long the filter's answer to it."""
UNUSABLE = 0.2
"""Share of the last readings that can't be used at which that is said."""
LOOK_EVERY = 5
"""Readings between two looks at the phase."""
FLAT = 12
"""Readings in a row, equal to the last digit while the field moves, that can't be real."""


class RoleWatch:
    """Counts what became of one role's readings, and watches the recent ones."""

    def __init__(self, role: str) -> None:
        self.role = role
        self.counts: dict[str, int] = {}
        self._recent: deque[str] = deque(maxlen=MEMORY)
        self._bad = 0
        self._quadrature: deque[tuple[float, float]] = deque(maxlen=MEMORY)
        self._angle_deg: float | None = None
        self._flat: list[Pair] = []
        self._run = 0
        self._current: list[float] = []
        self._currents: list[float] = []

    def add(self, pair: Pair) -> None:
        """Take note of one pair."""
        self.counts[pair.kind] = self.counts.get(pair.kind, 0) + 1
        again = pair.kind == "wild" and self._recent and self._recent[-1] in ("wild", "after wild")
        if len(self._recent) == MEMORY:
            self._bad -= self._recent[0] in BAD
        self._recent.append("after wild" if again else pair.kind)
        self._bad += self._recent[-1] in BAD
        if pair.kind == "ok":
            if self._flat and pair.rho_ohm != self._flat[0].rho_ohm:
                self._flat.clear()
            self._flat[2:] = [*self._flat[2:], pair][-1:]
            self._run = self._run + 1 if len(self._flat) > 1 else 1
            self._note_current(pair.current_A)
        if pair.kind == "ok" and pair.quadrature_ohm is not None:
            self._quadrature.append((pair.rho_ohm, pair.quadrature_ohm))
            if self.counts["ok"] % LOOK_EVERY == 0:
                self._angle_deg = self._phase_angle()

    def cautions(self) -> Iterator[Caution]:
        """Cautions about this role's readings that hold now."""
        recent = [self._recent[-k] for k in range(1, min(RECENT, len(self._recent)) + 1)]
        overloads = recent.count("overload")
        if overloads:
            yield Caution(
                "overload",
                f"{overloads} of the last {len(recent)} {self.role} readings are "
                "overloads or out of range: set a larger range; they are not used.",
            )
        if recent.count("lost") == RECENT:
            yield Caution(
                "stream_silent",
                f"no usable {self.role} reading among the last {RECENT}: look at the instrument, "
                "its line and its settings.",
            )
        seen = len(self._recent)
        if seen >= MEMORY // 2 and self._bad > UNUSABLE * seen:
            yield Caution(
                "unusable_readings",
                f"{self._bad} of the last {seen} {self.role} readings can't be used (no answer, "
                "overload, or wild): look at the line, the range and for interference.",
            )
        yield from self._phase()
        yield from self._clipped()
        if self.role == "hall":
            yield from self._sagging()

    def _phase_angle(self) -> float | None:
        """By how much the signal is off the phase, if it is clearly; None if not."""
        if len(self._quadrature) < RECENT:
            return None
        in_phase = math.sqrt(sum(x * x for x, _ in self._quadrature))
        across = math.sqrt(sum(y * y for _, y in self._quadrature))
        aligned = abs(sum(x * y for x, y in self._quadrature))
        if across > 0.1 * in_phase and aligned > 0.7 * in_phase * across:
            return math.degrees(math.atan2(across, in_phase))
        return None

    def _phase(self) -> Iterator[Caution]:
        if self._angle_deg is not None:
            yield Caution(
                "phase_wrong",
                f"the {self.role} signal stands {self._angle_deg:.0f} degrees off the reading's phase: "
                "check the lock-in's phase, the wiring and capacitive pick-up.",
            )

    def _note_current(self, current_A: float) -> None:
        self._current.append(current_A)
        if len(self._current) == RECENT:
            self._currents.append(sum(self._current) / RECENT)
            self._current.clear()
            if len(self._currents) > 2:
                self._currents = [min(self._currents), max(self._currents)]

    def _sagging(self) -> Iterator[Caution]:
        if len(self._currents) < 2:
            return
        low, high = sorted(map(abs, (min(self._currents), max(self._currents))))
        if high > 0 and 1 - low / high > SAG:
            yield Caution(
                "current_sag",
                f"the current changes by {100 * (1 - low / high):.2g} % over the ramp, as measured "
                "or reckoned from source and resistor; that is taken into account.",
                touches_answer=False,
            )

    def _clipped(self) -> Iterator[Caution]:
        if self._run < FLAT or len(self._flat) < 2:
            return
        first, last = self._flat[0], self._flat[-1]
        stages = last.stages
        long_enough = self._run >= 2 * FLAT if stages is None else (
            last.time_s - first.time_s > FLAT_INTEGRAL_TIMES * stages.integral_time_s
        )
        value = first.rho_ohm
        if not long_enough or not value or last.field_T == first.field_T:
            return
        plateau = abs(h / e**2 / value)
        looks = f"it is not a plateau (h/e^2 over {plateau:.2f})"
        if round(plateau) >= 1 and abs(plateau / round(plateau) - 1) < 2e-3:
            looks = f"even a plateau (i = {round(plateau)}) has noise"
        yield Caution(
            "clipped",
            f"{self._run} {self.role} readings in a row are equal to the last digit while the "
            f"field moves: {looks}; the input or the range is clipped, or the reading is frozen.",
        )
