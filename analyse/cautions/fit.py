"""Cautions about the fit: noise, bends, exchanged channels, sweeps apart, quick readings."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from scipy.constants import e

from analyse.confidence import heavy_tails
from analyse.estimate import Caution
from analyse.hall_bar import finite_length_factor
from analyse.quick import HALL_MARK_OHM, QuickReading
from analyse.setup import Setup, Target
from analyse.shapes import Shapes
from analyse.transport_fit import TransportFit
from analyse.window import Bounds

MIN_EFFECTIVE = 20.0
FEWEST_EFFECTIVE = 10.0
KNOWN = 0.3
"""Relative half-width from which on a coefficient is known well enough to speak of its bend."""
DIGIT_MATTERS = 0.3
"""Share of the target that the last digit takes up when it is said."""
BEND_CERTAIN = 4.5
"""Standard errors beyond the target at which a bend is called one; it is looked at all the time."""


NOISE_MATTERS = 0.3
"""Share of the target that the widened interval takes up when an excess of noise is said."""
OFFSET_CLEAR = 5.0
SMALLEST_OFFSET_T, SMALLEST_OFFSET_SQUARES = 5e-4, 0.02
SAG_CLEAR = 4.5
"""Standard errors at which a fall-off is called one."""


@dataclass(frozen=True)
class FitFacts:
    """What the cautions about the fit look at."""

    fit: TransportFit
    bounds: Bounds
    farthest_T: float
    carriers: str
    density_per_m2: float | None
    mobility_m2_per_V_s: float | None
    quick_density: QuickReading | None
    quick_mobility: QuickReading | None
    bounds_high_T: float | None
    shapes: Shapes
    zero_passed: bool
    noisy: tuple[bool, bool]


def fit_cautions(facts: FitFacts, setup: Setup) -> Iterator[Caution]:
    """Cautions about the fit that hold now."""
    yield from _noise(facts, setup)
    sagging = _sag_share(facts)
    if sagging is not None:
        yield Caution(
            "current_sag",
            f"both resistivities fall off alike with field, by {100 * sagging:.2g} % at the "
            "upper end, as if the current did: the sample's resistance takes a share of a "
            "source behind a series resistor; measure the current or state source and resistor.",
        )
    else:
        yield from _straightness(facts.fit, setup.target)
        yield from _second_carrier(facts.shapes, setup.target)
    yield from _coarse_digit(facts.fit, setup.target)
    yield from _short_bar(facts.density_per_m2, setup)
    if _exchanged(facts):
        yield Caution(
            "channels_exchanged",
            "what is configured as longitudinal grows linearly from zero with the field and what "
            "is configured as Hall does not: the two are exchanged, in wiring or configuration.",
        )
    rho_0 = facts.fit.rho_0
    if rho_0 is not None and rho_0.value < -rho_0.half_width:
        yield Caution(
            "longitudinal_negative",
            "the longitudinal resistivity is negative: its two leads are exchanged, or the phase "
            "is off by half a turn; set sign = -1 for it.",
        )
    yield from _sweeps(facts, setup.target)
    yield from _offset(facts)
    if facts.shapes.ripples:
        yield Caution(
            "oscillations",
            f"above {facts.bounds.high_T:.3g} T the longitudinal resistivity oscillates: the fit "
            "ends there.",
            touches_answer=False,
        )
    if setup.expected_carriers and facts.carriers not in ("unknown", setup.expected_carriers):
        yield Caution(
            "hall_sign",
            f"the Hall slope has the sign of {facts.carriers}, expected were "
            f"{setup.expected_carriers}: check the Hall contacts, the field's direction and sign.",
        )
    yield from _quick(facts)


def _noise(facts: FitFacts, setup: Setup) -> Iterator[Caution]:
    target, fit, noisy = setup.target, facts.fit, facts.noisy
    for role, excess, stages, coefficient, limit in (
        ("Hall", fit.noise_excess_hall, setup.hall.filter if noisy[0] else None, fit.slope,
         target.sheet_density),
        ("longitudinal", fit.noise_excess_longitudinal,
         setup.longitudinal.filter if noisy[1] else None, fit.rho_0, target.mobility),
    ):
        if excess <= 1.0 or stages is None or coefficient is None:
            continue
        if coefficient.half_width > NOISE_MATTERS * limit * abs(coefficient.value):
            yield Caution(
                "noise_high",
                f"the {role} readings scatter {math.sqrt(excess):.1f} times more over seconds than "
                "white noise behind the stated filter would: drift, 1/f noise, mains, or a wrong "
                "time constant; the intervals are widened.",
            )


def _sag_share(facts: FitFacts) -> float | None:
    """Share by which both fall off in the window, or far above it, if alike; else None."""
    shapes = facts.shapes
    inside = _alike(shapes.along_bend, shapes.hall_bend)
    return inside if inside is not None else _alike(*(shapes.falls_beyond or (None, None)))


def _alike(along: tuple[float, float] | None, hall: tuple[float, float] | None) -> float | None:
    """The mean share of two falls, if they are clear and alike."""
    if along is None or hall is None:
        return None
    (a, error_a), (b, error_b) = along, hall
    if a < SAG_CLEAR * error_a or b < SAG_CLEAR * error_b:
        return None
    if abs(a - b) > 3 * math.hypot(error_a, error_b) + 0.3 * max(a, b):
        return None
    return (a + b) / 2


def _exchanged(facts: FitFacts) -> bool:
    """Whether the longitudinal readings look like a Hall line and the Hall readings level."""
    line, level = facts.shapes.along_line, facts.shapes.hall_line
    if line is None or level is None:
        return False
    rise, rise_error, start = line
    slope, _, offset = level
    grows = abs(rise) > 10 * rise_error and abs(start) < 0.3 * abs(rise)
    return grows and abs(slope) < 0.5 * abs(offset)


def _sweeps(facts: FitFacts, target: Target) -> Iterator[Caution]:
    apart = facts.shapes.sweeps_apart
    if apart is None or not facts.bounds_high_T:
        return
    size = abs(apart.field_T)
    if size < 5 * apart.error_T or size < 0.5 * target.sheet_density * facts.bounds_high_T:
        return
    cause = "the time constant or the poles are not what is stated, the clocks are apart, or the "
    cause += "field meter is slow" if apart.delay_s is None else (
        f"field meter is slow (as if by {abs(apart.delay_s):.2g} s)"
    )
    yield Caution(
        "sweeps_differ",
        f"up and down sweep are {1e3 * size:.3g} mT apart after the filter's delay was taken "
        f"out: {cause}.",
    )


def _offset(facts: FitFacts) -> Iterator[Caution]:
    fit = facts.fit
    slope, rho_0, offset = fit.slope, fit.rho_0, fit.offset_ohm
    if slope is None or rho_0 is None or offset is None or slope.effective < FEWEST_EFFECTIVE:
        return
    clear = OFFSET_CLEAR * fit.offset_error_ohm * heavy_tails(slope.evidence.nu)
    if abs(offset) < clear or not facts.density_per_m2:
        return
    squares = offset / rho_0.value if rho_0.value else 0.0
    field_T = offset * facts.density_per_m2 * e
    if facts.zero_passed and abs(field_T) > SMALLEST_OFFSET_T:
        yield Caution(
            "field_offset",
            f"the Hall resistivity is zero where the field reading is {-1e3 * field_T:.3g} mT: a "
            "remanent field or the meter's zero, or contacts that are not quite opposite; it is "
            "taken out by the fit.",
            touches_answer=False,
        )
    if abs(squares) > SMALLEST_OFFSET_SQUARES:
        yield Caution(
            "contacts_misaligned",
            f"at zero field the Hall voltage is not zero: as if its contacts were {squares:.2g} "
            "squares apart along the current, or the field reading off; it is taken out by the "
            "fit.",
            touches_answer=False,
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
        if coefficient.effective < MIN_EFFECTIVE or not coefficient.half_width < KNOWN * size:
            continue
        certain = BEND_CERTAIN * heavy_tails(coefficient.evidence.nu - 1)
        if abs(coefficient.bend) - certain * coefficient.bend_error > limit * size:
            yield Caution(
                "not_straight",
                f"the {what} bends within the window; taking the bend into account moves the "
                f"{number} by {100 * abs(coefficient.bend) / size:.2g} %: a second kind of "
                "carrier, a current that depends on field, or heating.",
            )


def _short_bar(density_per_m2: float | None, setup: Setup) -> Iterator[Caution]:
    excitation = setup.excitation
    if density_per_m2 is None or excitation is None or excitation.source_to_drain_squares is None:
        return
    taken = 1.0 - finite_length_factor(excitation.source_to_drain_squares)
    if taken > setup.target.sheet_density:
        yield Caution(
            "short_bar",
            f"the bar is {excitation.source_to_drain_squares:.3g} squares long from end to end: half-way "
            f"between contacts over its whole width {100 * taken:.2g} % of the Hall voltage is missing at "
            "small fields, less at fields far above that where rho_xx = rho_xy; it is not corrected for.",
            touches_answer=False,
        )


def _coarse_digit(fit: TransportFit, target: Target) -> Iterator[Caution]:
    for role, coefficient, limit in (
        ("Hall", fit.slope, target.sheet_density),
        ("longitudinal", fit.rho_0, target.mobility),
    ):
        if coefficient is None or coefficient.effective < FEWEST_EFFECTIVE:
            continue
        if coefficient.rounding > DIGIT_MATTERS * limit * abs(coefficient.value) > 0.0:
            yield Caution(
                "coarse_digit",
                f"the last digit of the {role} readings is coarser than their noise and leaves the "
                "result open by "
                f"{100 * coefficient.rounding / abs(coefficient.value):.2g} %: set a smaller range, "
                "or more digits; the intervals reckon with it.",
                touches_answer=False,
            )


def _second_carrier(shapes: Shapes, target: Target) -> Iterator[Caution]:
    rise = shapes.square_rise
    if rise is not None and rise[0] > SAG_CLEAR * rise[1] and 2 * rise[0] > target.sheet_density:
        yield Caution(
            "not_straight",
            f"the longitudinal resistivity has risen as B^2 by {100 * rise[0]:.2g} % where it "
            "equals the Hall resistivity; if a second kind of carrier does that, the sheet density "
            f"is wrong by about {200 * rise[0]:.2g} %: go on to higher field.",
        )
    beyond = shapes.beyond
    if beyond is None:
        return
    mean, error = beyond
    if abs(mean) > SAG_CLEAR * error and abs(mean) > target.sheet_density:
        yield Caution(
            "not_straight",
            f"above the window the Hall resistivity departs steadily from the line, by "
            f"{100 * mean:.2g} %: a second kind of carrier, or a current that depends on field.",
        )


def _quick(facts: FitFacts) -> Iterator[Caution]:
    slope, rho_0 = facts.fit.slope, facts.fit.rho_0
    if slope is None or rho_0 is None or not rho_0.value:
        return
    offset = abs(facts.fit.offset_ohm or 0.0)
    noise = math.hypot(slope.noise, rho_0.noise)
    cases = (
        ("sheet density", "at 6.25 kOhm", facts.density_per_m2, facts.quick_density,
         "density_per_m2", (offset + 3 * slope.noise) / HALL_MARK_OHM),
        ("mobility", "where rho_xx = rho_xy", facts.mobility_m2_per_V_s, facts.quick_mobility,
         "mobility_m2_per_V_s", (offset + 3 * noise) / abs(rho_0.value)),
    )
    for name, where, fitted, reading, attribute, explained in cases:
        if fitted is None or reading is None:
            continue
        apart = abs(getattr(reading, attribute) / fitted - 1.0)
        if apart > 0.05 + 5 * reading.relative_uncertainty + 1.2 * explained:
            yield Caution(
                "quick_readings_apart",
                f"the {name} read off the curve {where} is {100 * apart:.0f} % away from the fit: "
                "look for a plateau, a bend or a wrong scale.",
                touches_answer=False,
            )
