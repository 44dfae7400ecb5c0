"""Cautions about the field: stuck, moving in steps, too fast; and drift while it stands."""

from __future__ import annotations

import itertools
import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass

from analyse.estimate import Caution
from analyse.pairing import Pair
from analyse.setup import Ramp

MEMORY = 60
CLEAR = 10.0
"""Standard errors by which the Hall resistivity must have moved for a standing field to be odd."""


TOO_FAST = 0.05
"""Share of the planned (or farthest) field that it may move by during the filter's delay."""


@dataclass(frozen=True)
class _Move:
    """First to second half of the last readings: seconds, field and resistivity moved by."""

    seconds: float
    field_T: float
    rho_ohm: float
    error_ohm: float


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

    def add(self, pair: Pair, kappa: float) -> None:
        """Take a usable Hall pair with its inflation by the filter."""
        self._pairs.append((pair.time_s, pair.field_T, pair.rho_ohm))
        self._kappa = kappa
        self._farthest_T = max(self._farthest_T, abs(pair.field_T))
        self._delay_s = pair.stages.delay_s if pair.stages is not None else 0.0

    def cautions(
        self, slope_ohm_per_T: float | None, noise_ohm: float | None
    ) -> Iterator[Caution]:
        """Cautions that hold now. The slope is None while it is not known; ``noise_ohm`` is the
        standard deviation of an independent Hall reading, None while it is not known."""
        move = self._move(noise_ohm)
        if move is None:
            return
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
        if abs(move.rho_ohm) < CLEAR * move.error_ohm:
            return
        yield from self._standing(move, slope_ohm_per_T)

    def _standing(self, move: _Move, slope: float | None) -> Iterator[Caution]:
        rate = self._planned if self._planned is not None else self._fastest
        if slope:
            needed_T = abs(move.rho_ohm / slope)
        elif rate:
            needed_T = rate * move.seconds
        else:
            return
        if abs(move.field_T) > 0.1 * needed_T:
            return
        if rate and abs(move.field_T) > 0.2 * rate * move.seconds:
            return
        if slope and rate and needed_T < 0.2 * rate * move.seconds:
            yield Caution(
                "drift",
                f"at a standing field the Hall resistivity moves by {move.rho_ohm:.3g} ohm in "
                f"{move.seconds:.0f} s: the sample, its temperature, the current or an amplifier "
                "drifts.",
            )
            return
        yield Caution(
            "field_stuck",
            f"the field reading stands while the Hall resistivity moved by {move.rho_ohm:.3g} ohm "
            f"in {move.seconds:.0f} s: the field meter or its reading is stuck.",
        )

    def _move(self, noise_ohm: float | None) -> _Move | None:
        if len(self._pairs) < MEMORY:
            return None
        half = MEMORY // 2
        pairs = list(self._pairs)
        one, two = pairs[:half], pairs[half:]
        means = [[sum(p[i] for p in part) / half for i in range(3)] for part in (one, two)]
        # scatter about the chord, so that a steady ramp is not taken for noise
        steps = [b[2] - a[2] for a, b in itertools.pairwise(pairs)]
        trend = sum(steps) / len(steps)
        rough = math.sqrt(sum((s - trend) ** 2 for s in steps) / len(steps) / 2)
        error = rough * math.sqrt(2 * max(self._kappa, 1.0) ** 2 / half)
        if noise_ohm is not None:
            error = max(error, noise_ohm * math.sqrt(2 / half))
        return _Move(
            means[1][0] - means[0][0], means[1][1] - means[0][1], means[1][2] - means[0][2],
            max(error, 1e-300),
        )
