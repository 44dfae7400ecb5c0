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
ALONE = 0.3
"""Share of the longitudinal drift below which the Hall resistivity is said to stand."""


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
        self._seen: tuple[float, bool] | None = None
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
        found = self._found()
        if found is not None:
            self._seen = found
        if self._seen is None:
            return
        per_s, alone = self._seen
        size = f"{100 * 600 * per_s:.2g} % in ten minutes"
        if alone:
            yield Caution(
                "heating",
                f"at a standing field the longitudinal resistivity alone drifts, by {size}, and the "
                "Hall resistivity does not: the mobility changes, as it does when the sample warms "
                "up or cools down; wait, ramp slower or use less current.",
            )
        else:
            yield Caution(
                "drift",
                f"at a standing field the resistivities drift by {size}: the sample, its "
                "temperature, the current or an amplifier is not settled; wait, or look for the "
                "cause.",
            )

    def _found(self) -> tuple[float, bool] | None:
        """(relative drift per second, whether the longitudinal resistivity drifts alone)."""
        known = {role: drift for role, hold in self._holds.items() if (drift := hold.drift())}
        if not known:
            return None
        over_s = max(hold.last_s - hold.start_s for hold in self._holds.values())
        matters = self._limit / (self._duration_s + over_s)
        along, hall = known.get("longitudinal"), known.get("hall")
        if along is not None and hall is not None and _clear(along, matters):
            apart = along[0] - hall[0], math.hypot(along[1], hall[1])
            if _clear(apart, matters) and abs(hall[0]) < ALONE * abs(along[0]):
                self._seen_over_s = over_s
                return along[0], True
        weights = [1.0 / max(error, 1e-300) ** 2 for _, error in known.values()]
        mean = sum(w * value for w, (value, _) in zip(weights, known.values(), strict=True))
        both = mean / sum(weights), 1.0 / math.sqrt(sum(weights))
        if _clear(both, matters):
            self._seen_over_s = over_s
            return both[0], False
        if over_s > self._seen_over_s:
            self._seen = None
        return None


def _clear(drift: tuple[float, float], matters: float) -> bool:
    return abs(drift[0]) > max(CLEAR * drift[1], matters)
