"""Cautions raised from the pairs of one Hall bar, and from its fit. Pure: numbers in, texts out."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass

from analyse.estimate import Caution
from analyse.pairing import Pair
from analyse.quick import HALL_MARK_OHM, QuickReading
from analyse.setup import Setup, Target
from analyse.transport_fit import TransportFit
from analyse.window import Bounds

RECENT = 20
MEMORY = 100
MIN_EFFECTIVE = 20.0
BEND_CERTAIN = 4.5
"""Standard errors beyond the target at which a bend is called one; it is looked at all the time."""


class RoleWatch:
    """Counts what became of one role's readings, and watches the recent ones."""

    def __init__(self, role: str) -> None:
        self.role = role
        self.counts: dict[str, int] = {}
        self._recent: deque[str] = deque(maxlen=MEMORY)
        self._quadrature: deque[tuple[float, float]] = deque(maxlen=MEMORY)

    def add(self, pair: Pair) -> None:
        """Take note of one pair."""
        self.counts[pair.kind] = self.counts.get(pair.kind, 0) + 1
        self._recent.append(pair.kind)
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


@dataclass(frozen=True)
class FitFacts:
    """What the cautions about the fit look at; slope and offset in ohm and tesla."""

    fit: TransportFit
    bounds: Bounds
    farthest_T: float
    carriers: str
    density_per_m2: float | None
    mobility_m2_per_V_s: float | None
    quick_density: QuickReading | None
    quick_mobility: QuickReading | None


def fit_cautions(facts: FitFacts, setup: Setup) -> Iterator[Caution]:
    """Cautions about the fit that hold now."""
    yield from _noise(facts.fit, setup)
    yield from _straightness(facts.fit, setup.target)
    if facts.farthest_T > facts.bounds.high_T:
        yield Caution(
            "oscillations",
            f"above {facts.bounds.high_T:.3g} T the curves leave Drude's form (oscillations, "
            "plateaus or a bend): the fit ends there.",
            touches_answer=False,
        )
    if setup.expected_carriers and facts.carriers not in ("unknown", setup.expected_carriers):
        yield Caution(
            "hall_sign",
            f"the Hall slope has the sign of {facts.carriers}, expected were "
            f"{setup.expected_carriers}: check the Hall contacts, the field's direction and sign.",
        )
    yield from _quick(facts)


def _noise(fit: TransportFit, setup: Setup) -> Iterator[Caution]:
    for role, excess, stages in (
        ("Hall", fit.noise_excess_hall, setup.hall.filter),
        ("longitudinal", fit.noise_excess_longitudinal, setup.longitudinal.filter),
    ):
        if excess > 1.0 and stages is not None:
            yield Caution(
                "noise_high",
                f"the {role} readings scatter {math.sqrt(excess):.1f} times more over seconds than "
                "white noise behind the stated filter would: drift, 1/f noise, mains, or a wrong "
                "time constant; the intervals are widened.",
            )


def _straightness(fit: TransportFit, target: Target) -> Iterator[Caution]:
    pairs = (
        ("Hall resistivity", fit.slope, target.sheet_density, "sheet density"),
        ("longitudinal resistivity", fit.rho_0, target.mobility, "mobility"),
    )
    for what, coefficient, limit, number in pairs:
        if coefficient is None or not math.isfinite(coefficient.bend_error):
            continue
        size = abs(coefficient.value)
        if coefficient.effective < MIN_EFFECTIVE or not size:
            continue
        if abs(coefficient.bend) - BEND_CERTAIN * coefficient.bend_error > limit * size:
            yield Caution(
                "not_straight",
                f"the {what} bends within the window; taking the bend into account moves the "
                f"{number} by {100 * abs(coefficient.bend) / size:.2g} %: a second kind of "
                "carrier, a current that depends on field, or heating.",
            )


def _quick(facts: FitFacts) -> Iterator[Caution]:
    rho_0 = facts.fit.rho_0
    offset = abs(facts.fit.offset_ohm or 0.0)
    level = abs(rho_0.value) if rho_0 is not None and rho_0.value else math.inf
    pairs = (
        ("sheet density", "at 6.25 kOhm", facts.density_per_m2,
         facts.quick_density and facts.quick_density.density_per_m2, facts.quick_density,
         offset / HALL_MARK_OHM),
        ("mobility", "where rho_xx = rho_xy", facts.mobility_m2_per_V_s,
         facts.quick_mobility and facts.quick_mobility.mobility_m2_per_V_s, facts.quick_mobility,
         offset / level),
    )
    for name, where, fitted, value, reading, explained in pairs:
        if fitted is None or value is None or reading is None:
            continue
        apart = abs(value / fitted - 1.0)
        if apart > 0.05 + 5 * reading.relative_uncertainty + 1.2 * explained:
            yield Caution(
                "quick_readings_apart",
                f"the {name} read off the curve {where} is {100 * apart:.0f} % away from the fit: "
                "look for a plateau, a bend or a wrong scale.",
                touches_answer=False,
            )
