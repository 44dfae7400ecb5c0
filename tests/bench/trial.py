"""One ramp through the estimator, and what became of the promise."""

from __future__ import annotations

import math
import time
from dataclasses import dataclass, field

from analyse import (
    Estimate,
    Estimator,
    Excitation,
    FieldSource,
    HallBar,
    LockinFilter,
    Ramp,
    Signal,
    Target,
)
from bench.case import Case
from bench.generator import LockIn, in_order
from bench.naive import Stop, naive_stops
from bench.oracle import Reference, best_estimate, ramp_of, reference
from bench.setting import TARGET

NUMBERS = ("sheet_density", "mobility", "scattering_time")


@dataclass
class Kept:
    """One number over a ramp: at how many points it had an interval, and held the truth."""

    points: int = 0
    held: int = 0
    held_at_stop: bool = False
    error_at_stop: float = math.nan
    held_at_end: bool = False
    value_at_end: float = math.nan
    width_at_end: float = math.nan

    @property
    def always(self) -> bool:
        """At every point that had an interval."""
        return self.held == self.points

    def add(self, estimate: Estimate, name: str, truth: float) -> None:
        """Take one estimate."""
        number = getattr(estimate, name)
        if number is None:
            return
        self.points += 1
        self.held_at_end = bool(number.low <= truth <= number.high)
        self.held += self.held_at_end
        self.value_at_end = number.value
        self.width_at_end = (number.high - number.low) / 2 / number.value

    def stop(self, estimate: Estimate, name: str, truth: float) -> None:
        """Take the estimate at the moment of stopping."""
        number = getattr(estimate, name)
        if number is not None:
            self.held_at_stop = bool(number.low <= truth <= number.high)
            self.error_at_stop = number.value / truth - 1.0


@dataclass
class Outcome:
    """All that the table needs to know of one ramp. ``stop_T``, field swept: inf if never stable.

    ``excess``: by how much the variances of density and mobility at the end exceed the bound, as
    the square of (estimate - best estimate) / bound; their mean over ramps is the excess, since
    the best estimate is uncorrelated with the difference to it. None where it does not apply.
    """

    scenario: str
    index: int
    covered: bool
    always: bool
    forbidden: bool
    required: tuple[str, ...]
    allowed: tuple[str, ...]
    clean: bool
    estimates: int = 0
    stop_T: float = math.inf
    stable_at_end: bool = False
    kept: dict[str, Kept] = field(default_factory=dict)
    cautions: dict[str, float] = field(default_factory=dict)
    caution_texts: dict[str, str] = field(default_factory=dict)
    waiting_for: tuple[str, ...] = ()
    reference: Reference | None = None
    naive: dict[str, Stop] = field(default_factory=dict)
    excess: tuple[float, float] | None = None
    seconds: float = 0.0
    failure: str | None = None

    @property
    def stopped(self) -> bool:
        """Whether anything was ever called stable."""
        return math.isfinite(self.stop_T)

    @property
    def said(self) -> bool:
        """Whether one of the required cautions was shown."""
        return not self.required or any(code in self.cautions for code in self.required)

    @property
    def false_cautions(self) -> tuple[str, ...]:
        """Cautions that have no reason here."""
        known = {*self.required, *self.allowed}
        return tuple(code for code in self.cautions if code not in known)

    @property
    def held_at_stop(self) -> bool:
        """All three numbers at once."""
        return all(one.held_at_stop for one in self.kept.values())

    @property
    def always_held(self) -> bool:
        """All three numbers, at every point."""
        return all(one.always for one in self.kept.values())


def build(case: Case) -> Estimator:
    """The estimator as a person would set it up for this rig."""
    told = case.told or case.rig
    off = case.relative_uncertainty
    mass = case.sample.mass
    bar = HallBar(told.squares, effective_mass=mass, effective_mass_source="the bench",
                  squares_relative_uncertainty=off.get("squares", 0.0))
    fields, rate = ramp_of(case.profile)
    current_u = off.get("current", 0.0)
    if told.reads_current:
        excitation = Excitation(measured=Signal(), shunt_ohm=told.shunt_ohm,
                                relative_uncertainty=current_u)
    elif told.series_ohm:
        excitation = Excitation(
            source_V=told.current_A * told.series_ohm, series_ohm=told.series_ohm,
            contact_ohm=told.contact_ohm, source_to_drain_squares=told.source_to_drain_squares,
            relative_uncertainty=current_u,
        )
    else:
        excitation = Excitation(current_A=told.current_A, relative_uncertainty=current_u)
    return Estimator(
        bar, longitudinal=_signal(told.longitudinal), hall=_signal(told.hall),
        excitation=excitation,
        field=FieldSource(delay_s=told.meter.delay_s,
                          relative_uncertainty=off.get("field", 0.0)),
        target=Target(confidence=0.95, sheet_density=TARGET, mobility=TARGET,
                      scattering_time=TARGET),
        ramp=Ramp(path_T=fields, rate_T_per_min=rate),
    )


def _signal(lockin: LockIn) -> Signal:
    return Signal(filter=LockinFilter(lockin.stages.time_constant_s, lockin.stages.poles))


def run(case: Case) -> Outcome:
    """Feed a case to the estimator, reading by reading."""
    out = Outcome(case.scenario, case.index, case.covered, case.always, case.forbidden,
                  case.required, case.allowed, case.clean, kept={name: Kept() for name in NUMBERS})
    truths = dict(zip(NUMBERS, (
        case.sample.density_per_m2, case.sample.mobility_m2_per_V_s, case.sample.scattering_time_s
    )))
    start = time.process_time()
    try:
        last = _feed(case, out, truths)
    except Exception as fault:  # noqa: BLE001  a broken ramp is a result, not the end
        out.failure = f"{type(fault).__name__}: {fault}"
        return out
    out.seconds = time.process_time() - start
    if last is not None:
        out.stable_at_end = last.verdict == "stable"
        out.waiting_for = tuple(last.waiting_for)
    if case.sample.second_density_per_m2 == 0.0:
        out.reference = reference(case)
        out.naive = naive_stops(case)
    if case.exact_line:
        out.excess = _excess(case, out)
    return out


def _feed(case: Case, out: Outcome, truths: dict[str, float]) -> Estimate | None:
    estimator = build(case)
    last: Estimate | None = None
    for row in in_order(case.streams):
        for estimate in estimator.advance(*row):
            _note(case, out, truths, estimate)
            last = estimate
    for estimate in estimator.end():
        _note(case, out, truths, estimate)
        last = estimate
    return last


def _note(case: Case, out: Outcome, truths: dict[str, float], estimate: Estimate) -> None:
    out.estimates += 1
    for name, truth in truths.items():
        out.kept[name].add(estimate, name, truth)
    for caution in estimate.cautions:
        if caution.code not in out.cautions:
            out.cautions[caution.code] = case.swept_at(estimate.time_s)
            out.caution_texts[caution.code] = caution.text
    if estimate.verdict == "stable" and not out.stopped:
        out.stop_T = case.swept_at(estimate.time_s)
        for name, truth in truths.items():
            out.kept[name].stop(estimate, name, truth)


def _excess(case: Case, out: Outcome) -> tuple[float, float] | None:
    assert out.reference is not None
    best = best_estimate(case)
    errors = (out.reference.density_error, out.reference.mobility_error)
    at_end = (out.kept["sheet_density"].value_at_end, out.kept["mobility"].value_at_end)
    if not all(math.isfinite(one) for one in at_end):
        return None
    one, two = (((mine / ideal - 1.0) / u) ** 2 for mine, ideal, u in zip(at_end, best, errors))
    return one, two
