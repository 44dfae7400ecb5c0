"""Cautions about the field: a reading that is stuck, a ramp too fast for the filter."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass

from analyse.estimate import Caution
from analyse.pairing import Pair
from analyse.scatter import scatter_about_line
from analyse.setup import Ramp

MEMORY = 60
FEWEST = 28
"""Pairs from which on a judgement is made."""
EDGE = 4
"""This share, one over it, of the pairs at either end of the memory is compared."""
SPACING = 0.5
"""Pairs are kept this share of the filter's integral time apart, so that the memory is long."""
CLEAR = 10.0
"""Standard errors by which the Hall resistivity must have moved for a standing field to be odd."""
TOO_FAST = 0.05
"""Share of the planned (or farthest) field that it may move by during the filter's delay."""


@dataclass(frozen=True)
class Move:
    """From the first to the last of some pairs: seconds, field and resistivity moved by."""

    seconds: float
    field_T: float
    field_error_T: float
    rho_ohm: float
    rho_error_ohm: float
    rho_mean_ohm: float

    @property
    def field_stands(self) -> bool:
        """Whether the field did not move beyond the scatter of its readings."""
        return abs(self.field_T) <= 4 * self.field_error_T + 1e-12


class FieldWatch:
    """Compares how the field moves with how the Hall resistivity does."""

    def __init__(self, ramp: Ramp | None) -> None:
        self._planned = ramp.rate_T_per_s if ramp is not None else None
        self._planned_T = ramp.largest_T if ramp is not None else 0.0
        self._pairs: deque[tuple[float, float, float]] = deque(maxlen=MEMORY)
        self._kappa = 1.0
        self._fastest = 0.0
        self._delay_s = 0.0
        self._farthest_T = 0.0
        self._move: Move | None = None

    def add(self, pair: Pair, kappa: float) -> None:
        """Take a usable Hall pair with its inflation by the filter."""
        stages = pair.stages
        self._farthest_T = max(self._farthest_T, abs(pair.field_T))
        self._delay_s = stages.delay_s if stages is not None else 0.0
        if stages is not None and self._pairs:
            apart = pair.time_s - self._pairs[-1][0]
            if apart < SPACING * stages.integral_time_s:
                return
            kappa = min(kappa, 2.0 / SPACING)
        self._kappa = kappa
        self._move = None
        self._pairs.append((pair.time_s, pair.field_T, pair.rho_ohm))

    def cautions(self, slope_ohm_per_T: float | None) -> Iterator[Caution]:
        """Cautions that hold now. The slope is None while it is not known."""
        if len(self._pairs) < FEWEST:
            return
        if self._move is None:
            self._move = last_move(list(self._pairs), self._kappa)
        move = self._move
        rate = abs(move.field_T) / move.seconds if move.seconds > 0 else 0.0
        self._fastest = max(self._fastest, rate)
        lag_T = rate * self._delay_s
        if lag_T > TOO_FAST * max(self._farthest_T, self._planned_T):
            yield Caution(
                "ramp_too_fast",
                f"during the filter's delay the field moves by {1e3 * lag_T:.3g} mT: that is "
                "corrected for, but sharp features are smeared; ramp slower or shorten the time "
                "constant.",
                touches_answer=False,
            )
        if move.field_stands and abs(move.rho_ohm) > CLEAR * move.rho_error_ohm:
            yield from self._stuck(move, slope_ohm_per_T)

    def _stuck(self, move: Move, slope: float | None) -> Iterator[Caution]:
        rate = self._planned if self._planned is not None else self._fastest
        whole_T = rate * move.seconds
        if slope:
            needed_T = abs(move.rho_ohm / slope)
        elif abs(move.rho_ohm) > 0.1 * abs(move.rho_mean_ohm):
            needed_T = whole_T
        else:
            return
        if needed_T < max(5 * move.field_error_T, 0.2 * whole_T):
            return
        yield Caution(
            "field_stuck",
            f"the field reading stands while the Hall resistivity moved by {move.rho_ohm:.3g} ohm "
            f"in {move.seconds:.0f} s: the field meter or its reading is stuck.",
        )


def last_move(pairs: list[tuple[float, float, float]], kappa: float) -> Move:
    """How field and resistivity moved from the first quarter of the pairs to the last."""
    edge = len(pairs) // EDGE
    one, two = pairs[:edge], pairs[-edge:]
    (t1, b1, r1), (t2, b2, r2) = _means(one), _means(two)
    jitter = max(scatter_about_line([(t, b) for t, b, _ in part]) for part in (one, two))
    noise = max(scatter_about_line([(t, r) for t, _, r in part]) for part in (one, two))
    whole = sum(r for _, _, r in pairs) / len(pairs)
    return Move(
        t2 - t1, b2 - b1, jitter * math.sqrt(2 / edge), r2 - r1,
        max(noise * math.sqrt(2 * max(kappa, 1.0) / edge), 1e-300), whole,
    )


def _means(part: list[tuple[float, float, float]]) -> tuple[float, float, float]:
    n = len(part)
    return sum(p[0] for p in part) / n, sum(p[1] for p in part) / n, sum(p[2] for p in part) / n
