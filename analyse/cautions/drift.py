"""Drift: while the field stands, both resistivities should stand too."""

from __future__ import annotations

import math
from collections.abc import Iterator

from analyse.estimate import Caution
from analyse.pairing import Pair
from analyse.setup import Ramp, Target
from analyse.square_root import SquareRootInformation

SPACING = 0.5
CLEAR = 4.5
"""Standard errors at which a drift is called one; it is looked at at every hold."""
MATTERS = 0.1
"""Share of the target that the drift must come to, over hold and ramp, to be said."""
FEWEST = 24


class _Hold:
    """One role's readings since the field began to stand."""

    def __init__(self, time_s: float) -> None:
        self.start_s = time_s
        self.last_s = -math.inf
        self.qr = SquareRootInformation(2)
        self.kappa = 1.0

    def add(self, pair: Pair) -> None:
        stages = pair.stages
        if stages is not None:
            if pair.time_s - self.last_s < SPACING * stages.integral_time_s:
                return
            self.kappa = 2.0 / SPACING
        self.last_s = pair.time_s
        self.qr.update((1.0, pair.time_s - self.start_s), pair.rho_ohm)

    def drift(self) -> tuple[float, float] | None:
        """(relative drift per second, standard error); None while it can't be told."""
        solution = self.qr.solve() if self.qr.count >= FEWEST else None
        if solution is None or solution.count <= 2 * self.kappa:
            return None
        s2 = solution.rss / (solution.count - 2 * self.kappa)
        error = math.sqrt(self.kappa * s2 * solution.inverse[1, 1])
        level = abs(float(solution.theta[0]))
        level_error = math.sqrt(self.kappa * s2 * solution.inverse[0, 0])
        if level < 20 * level_error or level == 0.0:
            return None
        return float(solution.theta[1]) / float(solution.theta[0]), error / level


class DriftWatch:
    """Watches the holds of a ramp. A drift once seen stays said until a longer hold shows none."""

    def __init__(self, ramp: Ramp | None, target: Target) -> None:
        self._duration_s = 600.0
        self._still_T = 1e-3
        if ramp is not None:
            travel = sum(abs(b - a) for a, b in zip(ramp.path_T, ramp.path_T[1:], strict=False))
            self._duration_s = max(60.0, travel / ramp.rate_T_per_s)
            self._still_T = 2e-4 * ramp.largest_T
        self._limit = MATTERS * min(target.sheet_density, target.mobility)
        self._field_T: float | None = None
        self._holds: dict[str, _Hold] = {}
        self._seen: float | None = None
        self._seen_over_s = 0.0

    def add(self, pair: Pair) -> None:
        """Take a usable pair of either role."""
        if self._field_T is None or abs(pair.field_T - self._field_T) > self._still_T:
            self._field_T = pair.field_T
            self._holds = {}
        hold = self._holds.get(pair.role)
        if hold is None:
            hold = self._holds[pair.role] = _Hold(pair.time_s)
        hold.add(pair)

    def cautions(self) -> Iterator[Caution]:
        """The drift, if one was seen."""
        known = [one for one in (hold.drift() for hold in self._holds.values()) if one]
        if known:
            weights = [1.0 / max(error, 1e-300) ** 2 for _, error in known]
            mean = sum(w * value for w, (value, _) in zip(weights, known, strict=True))
            mean, error = mean / sum(weights), 1.0 / math.sqrt(sum(weights))
            over_s = max(hold.last_s - hold.start_s for hold in self._holds.values())
            if abs(mean) > CLEAR * error and abs(mean) * (self._duration_s + over_s) > self._limit:
                self._seen, self._seen_over_s = mean, over_s
            elif over_s > self._seen_over_s:
                self._seen = None
        if self._seen is not None:
            yield Caution(
                "drift",
                f"at a standing field the resistivities drift by {100 * 600 * self._seen:.2g} % in "
                "ten minutes: the sample, its temperature, the current or an amplifier is not "
                "settled; wait, or look for the cause.",
            )
