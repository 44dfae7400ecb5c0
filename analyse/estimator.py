"""The streaming estimator of one Hall bar: readings in, a frozen estimate at each field point."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from analyse.answer import Numbers, carriers_of, fitted_lines, measured, numbers_of
from analyse.budget import combined, systematic_lines
from analyse.cautions import DriftWatch, FieldWatch, FitFacts, RoleWatch, fit_cautions
from analyse.drude import transport
from analyse.estimate import Caution, Estimate, Moment
from analyse.forecast import State, field_range, field_to_target
from analyse.hall_bar import HallBar
from analyse.lockin import LockinFilter
from analyse.numbers import Number
from analyse.pairing import Pair, Pairing
from analyse.quick import QuickReadings
from analyse.setup import Excitation, FieldSource, Ramp, Setup, Signal, Target, Window
from analyse.sweeps import Sweeps
from analyse.transport_fit import TransportFit, fit_transport, fixed_phis
from analyse.verdict import Facts, what_is_missing
from analyse.windowed import WindowedFit

LATEST_S = 1e12
LOOK_AHEAD_EVERY = 5
"""Field points between two forecasts."""
PLAIN_SIGNAL, PLAIN_FIELD, ANY_WINDOW = Signal(), FieldSource(), Window()


@dataclass
class _Point:
    """What was gathered since the last field point was complete."""

    seen: set[str]
    fields: list[float]
    rho: dict[str, list[float]]


class Estimator:
    """Density, mobility and scattering time of one Hall bar from a stream of readings.

    Parameters
    ----------
    bar
        Geometry and carriers.
    longitudinal, hall
        The two signals; see :class:`analyse.setup.Signal`.
    excitation
        The current; not needed where both signals are resistances.
    field, target, ramp, window, expected_carriers
        See :mod:`analyse.setup`. The ramp is the plan: it fixes scales before the data and
        serves the forecast; without it documented defaults hold.

    The noise of a signal is taken as white before its filter. Readings of one channel must come
    in the order of time; the channels may come in any order relative to each other, the estimates
    do not depend on it.
    """

    def __init__(
        self,
        bar: HallBar,
        *,
        longitudinal: Signal = PLAIN_SIGNAL,
        hall: Signal = PLAIN_SIGNAL,
        excitation: Excitation | None = None,
        field: FieldSource = PLAIN_FIELD,
        target: Target | None = None,
        ramp: Ramp | None = None,
        window: Window = ANY_WINDOW,
        expected_carriers: str | None = None,
    ) -> None:
        self.bar = bar
        self.setup = Setup(
            longitudinal, hall, excitation, field, target or Target(), ramp, window,
            expected_carriers,
        )
        self._scale_T = ramp.largest_T if ramp is not None else 1.0
        self._pairing = Pairing(bar, self.setup)
        self._fit = WindowedFit(self.setup, self._scale_T)
        self._phis = fixed_phis(self.setup, self._scale_T)
        self._systematic = systematic_lines(bar, self.setup)
        self._sweeps = Sweeps(max(2e-3, 0.01 * self._scale_T))
        self._watch = {role: RoleWatch(role) for role in ("longitudinal", "hall")}
        self._field_watch = FieldWatch(ramp)
        self._drift_watch = DriftWatch(ramp, self.setup.target)
        self._quick = QuickReadings()
        self._field_points = 0
        self._point = _Point(set(), [], {"longitudinal": [], "hall": []})
        self._stable_at: Moment | None = None
        self._farthest_T = 0.0
        self._lowest_T, self._highest_T = math.inf, -math.inf
        self._last_rate = 0.0
        self._last_field: float | None = None
        self._ahead: tuple[float | None, tuple[float | None, float | None]] | None = None

    def update(
        self, channel: str, time_s: float, x: float | None, y: float | None = None,
        status: str = "ok",
    ) -> Estimate | None:
        """Take one reading; the latest estimate that it completes, or None.

        Parameters
        ----------
        channel
            "field" (tesla), "longitudinal", "hall" (volt or ohm), "current" (volt or ampere).
        time_s
            Time of the reading in seconds, from any fixed start.
        x, y
            The reading; None where there was none, which says that time has passed.
        status
            "ok", or why the reading can't be used: "overload", "range", "no_answer", "bad_reply".

        Raises ValueError for an unknown channel, and for a time that is not finite or beyond
        1e12 s.
        """
        estimates = self.advance(channel, time_s, x, y, status)
        return estimates[-1] if estimates else None

    def advance(
        self, channel: str, time_s: float, x: float | None, y: float | None = None,
        status: str = "ok",
    ) -> tuple[Estimate, ...]:
        """As :meth:`update`, with every estimate that the reading completes, in order."""
        if not abs(time_s) <= LATEST_S:
            raise ValueError(f"time_s must be a time in seconds, not {time_s!r}")
        x, y = (None if one is None else float(one) for one in (x, y))
        return self._absorb(self._pairing.push(channel, float(time_s), x, y, status))

    def set_filter(self, role: str, stages: LockinFilter | None) -> None:
        """From the next reading of "longitudinal" or "hall" on, another filter stands before it.

        Its readings are used again once the field behind the new filter has settled.
        """
        self._pairing.set_filter(role, stages)

    def change_signal(self, channel: str, signal: Signal, since_s: float) -> None:
        """From the next reading of "longitudinal", "hall" or "current" on it is read by ``signal``
        (another filter, phase or gain), as an instrument that was found to be set otherwise at
        ``since_s``. Its readings are used again once they have settled.
        """
        self._pairing.change_signal(channel, signal, since_s)

    def end(self, channel: str | None = None) -> tuple[Estimate, ...]:
        """No more readings come (from one channel, or from all): what that completes."""
        channels = [channel] if channel else ["field", "current", "longitudinal", "hall"]
        return tuple(one for each in channels for one in self._absorb(self._pairing.end(each)))

    def _absorb(self, pairs: Iterable[Pair]) -> tuple[Estimate, ...]:
        estimates = []
        for pair in pairs:
            self._take(pair)
            self._point.seen.add(pair.role)
            if len(self._point.seen) == 2:
                estimates.append(self._complete(pair.time_s))
        return tuple(estimates)

    def _take(self, pair: Pair) -> None:
        self._watch[pair.role].add(pair)
        if pair.kind != "ok":
            return
        self._farthest_T = max(self._farthest_T, abs(pair.field_T))
        self._lowest_T = min(self._lowest_T, pair.field_T)
        self._highest_T = max(self._highest_T, pair.field_T)
        self._last_rate = pair.rate_T_per_s
        self._point.fields.append(pair.field_T)
        self._point.rho[pair.role].append(pair.rho_ohm)
        kappa = self._fit.add(self._sweeps.add(pair.time_s, pair.field_T), pair)
        self._drift_watch.add(pair)
        if pair.role == "hall":
            self._field_watch.add(pair, kappa)

    def _complete(self, time_s: float) -> Estimate:
        point, self._point = self._point, _Point(set(), [], {"longitudinal": [], "hall": []})
        field_T, rho_xx, rho_xy = map(
            _mean, (point.fields, point.rho["longitudinal"], point.rho["hall"])
        )
        if field_T is not None:
            self._field_points += 1
            self._last_field = field_T
            if rho_xx is not None and rho_xy is not None:
                self._quick.add(field_T, rho_xx, rho_xy)
        hall, along = self._fit.pools()
        fit = fit_transport(
            self.setup, hall, along, self._fit.models, self._fit.inner, self._fit.tail,
            self._phis, self._fit.excess,
            (self._fit.digits_ohm["hall"], self._fit.digits_ohm["longitudinal"]),
        )
        return self._estimate(time_s, field_T, rho_xx, rho_xy, fit)

    def _estimate(
        self, time_s: float, field_T: float | None, rho_xx: float | None, rho_xy: float | None,
        fit: TransportFit,
    ) -> Estimate:
        bounds, zero = self._fit.bounds, self._fit.zero_in_reach
        numbers: Numbers = (None, None, None)
        confidence = self.setup.target.confidence
        if zero:
            numbers = numbers_of(fit, self._scale_T, self.bar, self._systematic, confidence)
        density, mobility, tau = numbers
        carriers = "unknown" if self.setup.hall.detection == "R" else carriers_of(fit, confidence)
        cautions = self._cautions(fit, carriers, density, mobility)
        window = self._fit.window_T
        missing = what_is_missing(
            Facts(
                numbers, fit, *(window or (0.0, 0.0)), zero, cautions, self._fit.shapes.square_rise
            ),
            self.setup.target,
        )
        at_field = field_T if field_T is not None else self._last_field
        if missing:
            self._stable_at = None
        elif self._stable_at is None and at_field is not None:
            self._stable_at = Moment(time_s, at_field)
        ahead = self._forecast(fit, mobility, bool(missing))
        return Estimate(
            time_s, field_T, rho_xx, rho_xy, self._field_points,
            field_T is not None and bounds.low_T <= abs(field_T) <= bounds.high_T,
            density, mobility, tau,
            measured(fit.rho_0), measured(fit.slope, self._scale_T), fit.offset_ohm,
            carriers, window, self._quick.density, self._quick.mobility,
            transport(density.value, mobility.value, self.bar.carrier_gas)
            if density and mobility else None,
            fitted_lines(fit) + self._systematic, "converging" if missing else "stable", missing, self._stable_at,
            *ahead, cautions, self._sweeps.all(),
        )

    def _cautions(
        self, fit: TransportFit, carriers: str, density: Number | None, mobility: Number | None
    ) -> tuple[Caution, ...]:
        facts = FitFacts(
            fit, self._fit.bounds, self._farthest_T, carriers,
            density.value if density else None, mobility.value if mobility else None,
            self._quick.density, self._quick.mobility,
            self._fit.window_T[1] if self._fit.window_T is not None else None, self._fit.shapes,
            self._lowest_T < 0.0 < self._highest_T, self._fit.noisy,
        )
        slope = fit.slope.value / self._scale_T if density and fit.slope else None
        found = [c for watch in self._watch.values() for c in watch.cautions()]
        found += self._field_watch.cautions(slope)
        found += self._drift_watch.cautions()
        return (*found, *fit_cautions(facts, self.setup))

    def _forecast(
        self, fit: TransportFit, mobility: Number | None, missing: bool
    ) -> tuple[float | None, float | None, tuple[float | None, float | None]]:
        """Seconds and field to the target, and the range of that field."""
        unknown = (None, None, (None, None))
        ramp, slope, rho_0 = self.setup.ramp, fit.slope, fit.rho_0
        if not missing and self._stable_at is not None:
            at = abs(self._stable_at.field_T)
            return 0.0, at, (at, at)
        if mobility is None or slope is None or rho_0 is None or self._last_field is None:
            return unknown
        rate, field_T = abs(self._last_rate), abs(self._last_field)
        per_effective = self._fit.seconds_per_effective
        if rate <= 0 or per_effective is None or field_T < 0.95 * self._farthest_T:
            return unknown
        end_T = min(ramp.largest_T if ramp else math.inf, self._fit.bounds.high_T, 1e3)
        window = self._fit.window_T
        state = State(
            field_T, window[0] if window else 0.0, rate, per_effective, slope.effective,
            slope.noise / abs(slope.value), rho_0.noise / rho_0.value,
            mobility.value, combined(self._systematic),
        )
        if self._ahead is None or self._field_points % LOOK_AHEAD_EVERY == 0:
            given = (self.setup.target, self._phis, self._scale_T, end_T)
            at_T = field_to_target(state, *given)
            self._ahead = at_T, field_range(state, slope.effective - 2, *given)
        at_T, ends = self._ahead
        if at_T is None:
            return unknown
        return max(0.0, at_T - field_T) / rate, at_T, ends


def _mean(values: list[float]) -> float | None:
    return sum(values) / len(values) if values else None
