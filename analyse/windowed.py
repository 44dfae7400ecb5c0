"""Segments of both roles, the window over them, and what is pooled inside it."""

from __future__ import annotations

import math

from analyse.basis import LEVEL, OTHER_PARITY
from analyse.inflation import Inflation
from analyse.line_fit import fit_columns
from analyse.pairing import Pair
from analyse.segments import Pool, Segments
from analyse.setup import Setup
from analyse.shapes import (
    Shapes,
    beyond_window,
    fall_off,
    falls_beyond,
    ripples,
    square_rise,
    straight,
    sweeps_apart,
)
from analyse.transport_fit import (
    Coefficient,
    Models,
    best_inner,
    choose_models,
    fixed_phis,
    hall_columns,
    hall_slope,
    longitudinal_columns,
    noise_excess,
    zero_field,
)
from analyse.window import Bounds, agrees, crossing, find_bounds

ROLES = ("hall", "longitudinal")
GROWN = 1.12
"""Growth of the number of segments after which the window is looked for anew."""
NARROWINGS = 8
NARROWER = 0.8
BEND_HINT = 1.3
"""Standard errors of a bend at which narrower windows are tried."""
CLEARLY = 0.8
"""A narrower window must bring the uncertainty down to this share to be worth its change."""
HALVINGS = 5
MIN_INNER = 30.0
"""Effective readings that a part of the window needs."""
REACH = 0.3
"""Zero field is in reach when the window begins below this share of its upper end."""


class WindowedFit:
    """Takes pairs; gives the pools inside the window."""

    def __init__(self, setup: Setup, scale_T: float) -> None:
        self._setup = setup
        self._alpha = 1 - setup.target.confidence
        self._scale_T = scale_T
        self._segments = {role: Segments(role, scale_T) for role in ROLES}
        self._phis = fixed_phis(setup, scale_T)
        self._wide = {role: Pool() for role in ROLES}
        self._pools = dict(self._wide)
        self._inflation = {role: Inflation() for role in ROLES}
        given = setup.window
        high = given.high_T if given.high_T is not None else math.inf
        self.bounds = self._widest = Bounds(given.low_T or 0.0, high)
        self.excess = (1.0, 1.0)
        self._searched = 0
        self._now: tuple[Pool, Pool] | None = None
        self._inner: list[tuple[Pool, Bounds]] = []
        self._narrowed = False
        self.inner: Coefficient | None = None
        self.tail: tuple[float, float] | None = None
        self.noisy = (False, False)
        self.models = Models()
        self.shapes = Shapes()
        self._time_s = [math.inf, -math.inf]
        self.digits_ohm = dict.fromkeys(ROLES, 0.0)

    def add(self, sweep: int, pair: Pair) -> float:
        """Take one usable pair; returns its inflation by the filter."""
        self._now = None
        self._time_s = [min(self._time_s[0], pair.time_s), max(self._time_s[1], pair.time_s)]
        self.digits_ohm[pair.role] = pair.digit_ohm
        kappa = self._inflation[pair.role].next(pair.time_s, pair.stages)
        if self._segments[pair.role].add(sweep, pair.time_s, pair.field_T, pair.rho_ohm, kappa):
            self._closed(pair.role)
        return kappa

    def pools(self) -> tuple[Pool, Pool]:
        """(hall, longitudinal): all in the window, the growing segments included."""
        if self._now is None:
            self._now = (self._with_active("hall"), self._with_active("longitudinal"))
        return self._now

    @property
    def window_T(self) -> tuple[float, float] | None:
        """Magnitudes of field between which readings are used; None before there are any."""
        pools = self.pools()
        if not all(pool.count for pool in pools):
            return None
        return (max(p.low_T for p in pools), min(p.high_T for p in pools))

    @property
    def zero_in_reach(self) -> bool:
        """Whether the window comes near enough to zero field for an extrapolation to it."""
        if self._setup.window.low_T is not None:
            return True
        window = self.window_T
        return window is not None and window[0] <= REACH * window[1]

    @property
    def seconds_per_effective(self) -> float | None:
        """Time that one effective reading takes."""
        stages = self._inflation["hall"].stages
        pool = self.pools()[0]
        if pool.count < 4:
            return None
        if stages is not None:
            spacing = (self._time_s[1] - self._time_s[0]) / pool.count
            return max(stages.integral_time_s, spacing)
        return (self._time_s[1] - self._time_s[0]) / pool.effective

    def _with_active(self, role: str) -> Pool:
        pool, active = self._pools[role], self._segments[role].active
        if active is None or not self.bounds.holds(active):
            return pool
        pool = pool.copy()
        pool.take(active)
        return pool

    def _closed(self, role: str) -> None:
        """A segment was closed: take it in, or look for the window anew when that is due."""
        newest = self._segments[role].closed[-1]
        total = sum(len(one.closed) for one in self._segments.values())
        inside = self._widest.holds(newest)
        odd = inside and not agrees(newest, self._wide[role], role, self._scale_T)
        if odd or total >= self._searched * GROWN + 1:
            self._searched = total
            self._search()
            self._narrow()
            self._inner = self._halve(self._pools["longitudinal"])
            self._settle()
            self.shapes = self._seen_shapes()
            return
        if inside:
            self._wide[role].take(newest)
        if self._narrowed and self.bounds.holds(newest):
            self._pools[role].take(newest)
        if role == "longitudinal":
            for pool, limit in self._inner:
                if limit.holds(newest):
                    pool.take(newest)
        self._settle()

    def _settle(self) -> None:
        """What holds until the next segment is closed: models, noise, rho_0 of smaller parts."""
        self.models = choose_models(self._pools["hall"], self._pools["longitudinal"])
        self.excess = self._excesses()
        pools = [pool for pool, _ in self._inner]
        self.inner = best_inner(pools, self.excess[1] > 1, self._phis, self._alpha)
        self.tail = self._seen_tail()
        self.noisy = self._still_noisy()

    def _still_noisy(self) -> tuple[bool, bool]:
        """Whether the excess of noise (hall, longitudinal) is there in the upper half of the window
        by itself, too; what is structure near zero field is not."""
        found = []
        for role, excess in zip(ROLES, self.excess, strict=True):
            if excess > 1:
                half = Bounds(self._pools[role].high_T / 2, self.bounds.high_T)
                pool = self._pool(role, half)
                models = hall_columns(pool) if role == "hall" else longitudinal_columns(pool)
                excess = noise_excess(pool, models)
            found.append(excess > 1)
        return found[0], found[1]

    def _seen_tail(self) -> tuple[float, float] | None:
        """(mean of what was left out around zero, level of the upper half of the window), where a
        peak was left out."""
        if self._setup.window.low_T is not None or not self.bounds.low_T:
            return None
        half = Bounds(self._pools["longitudinal"].high_T / 2, self.bounds.high_T)
        far = fit_columns(self._pool("longitudinal", half), LEVEL)
        peak = fit_columns(self._pool("longitudinal", Bounds(0.0, self.bounds.low_T)), LEVEL)
        return None if far is None or peak is None else (peak.theta[0], far.theta[0])

    def _seen_shapes(self) -> Shapes:
        hall, along = (self._pools[each] for each in ROLES)
        closed = self._segments["hall"].closed
        inside = [one for one in closed if self.bounds.holds(one)]
        crossing_T = crossing(hall, along, self._scale_T)
        return Shapes(
            fall_off(along, "longitudinal", self._scale_T),
            fall_off(hall, "hall", self._scale_T),
            straight(along, "longitudinal", self._scale_T),
            straight(hall, "hall", self._scale_T),
            sweeps_apart(inside, self._scale_T),
            square_rise(along, crossing_T, self._scale_T),
            *self._beyond(hall, along),
        )

    def _beyond(self, hall: Pool, along: Pool) -> tuple[
        tuple[float, float] | None, bool, tuple[tuple[float, float], tuple[float, float]] | None
    ]:
        end_T = self.bounds.high_T
        if not math.isfinite(end_T):
            return None, False, None
        closed = {role: self._segments[role].closed for role in ROLES}
        return (
            beyond_window(hall, closed["hall"], end_T, self._scale_T),
            ripples(along, closed["longitudinal"], end_T, self._scale_T),
            falls_beyond((hall, along), (closed["hall"], closed["longitudinal"]), end_T, self._scale_T),
        )

    def _halve(self, along: Pool) -> list[tuple[Pool, Bounds]]:
        plain = longitudinal_columns(along) in (LEVEL, (*LEVEL, OTHER_PARITY))
        if plain and self.excess[1] == 1.0:
            return []
        parts, high_T = [], along.high_T
        for _ in range(HALVINGS):
            high_T /= 2
            bounds = Bounds(self.bounds.low_T, high_T)
            pool = self._pool("longitudinal", bounds)
            if pool.effective < MIN_INNER or pool.groups < 4:
                break
            parts.append((pool, bounds))
        return parts

    def _search(self) -> None:
        closed = {role: one.closed for role, one in self._segments.items()}
        self._widest = find_bounds(
            self._setup.window, closed["longitudinal"], closed["hall"], self._scale_T
        )
        self._wide = {role: self._pool(role, self._widest) for role in ROLES}

    def _narrow(self) -> None:
        """Leave out the upper part of the window where that makes the answer more certain: what
        lies there is then structure (oscillations that set in), not information."""
        self.bounds, self._pools, self._narrowed = self._widest, dict(self._wide), False
        self.excess = self._excesses()
        hall, along = (self._pools[role] for role in ROLES)
        if self._setup.window.high_T is not None or not self._structured(hall, along):
            return
        best, high_T = self._uncertainty(hall, along), hall.high_T
        for _ in range(NARROWINGS):
            high_T *= NARROWER
            bounds = Bounds(self._widest.low_T, high_T)
            hall, along = (self._pool(role, bounds) for role in ROLES)
            if min(hall.effective, along.effective) < MIN_INNER or hall.groups < 4:
                break
            total = self._uncertainty(hall, along)
            if total < CLEARLY * best:
                best, self.bounds, self._narrowed = total, bounds, True
        if self._narrowed:
            self._pools = {role: self._pool(role, self.bounds) for role in ROLES}
            self.excess = self._excesses()

    def _structured(self, hall: Pool, along: Pool) -> bool:
        models = choose_models(hall, along)
        if max(self.excess) > 1 or models.longitudinal not in (LEVEL, (*LEVEL, OTHER_PARITY)):
            return True
        parts = self._coefficients(hall, along, models)
        return any(part is not None and abs(part.bend) > BEND_HINT * part.bend_error for part in parts)

    def _coefficients(
        self, hall: Pool, along: Pool, models: Models
    ) -> tuple[Coefficient | None, Coefficient | None]:
        excess = noise_excess(hall, models.hall) > 1, noise_excess(along, models.longitudinal) > 1
        return (
            hall_slope(hall, models.hall, excess[0], self._phis, self._alpha),
            zero_field(along, models.longitudinal, excess[1], self._phis, self._alpha),
        )

    def _uncertainty(self, hall: Pool, along: Pool) -> float:
        """Relative uncertainty of the mobility, from two pools."""
        slope, rho_0 = self._coefficients(hall, along, choose_models(hall, along))
        if slope is None or rho_0 is None or not slope.value or not rho_0.value:
            return math.inf
        shares = [(part.half_width / abs(part.value), part.spread / abs(part.value))
                  for part in (slope, rho_0)]
        return math.hypot(*(w for w, _ in shares)) + math.hypot(*(s for _, s in shares))

    def _excesses(self) -> tuple[float, float]:
        hall, along = (self._pools[role] for role in ROLES)
        return (
            noise_excess(hall, hall_columns(hall)),
            noise_excess(along, longitudinal_columns(along)),
        )

    def _pool(self, role: str, bounds: Bounds) -> Pool:
        pool = Pool()
        for segment in self._segments[role].closed:
            if bounds.holds(segment):
                pool.take(segment)
        return pool
