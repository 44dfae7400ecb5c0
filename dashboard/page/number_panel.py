"""What a person reads first: the verdict and the three numbers."""

from __future__ import annotations

import math

from acquire.config import Rig
from dashboard.page.caution_panel import touching
from dashboard.page.html import Html, div, element, span
from dashboard.page.list_panel import clock
from dashboard.page.store import BarFacts, RunFacts
from dashboard.quantities import (
    NOT_KNOWN,
    QUANTITIES,
    Quantity,
    grouped,
    percent,
    power_and_unit,
    write,
    write_interval,
)
from dashboard.words import duration, signed

JUST = 1.1  # times what is wanted
GAUGE_TARGETS = 4.0
"""How many times the target the gauge reaches to either side."""

_WIDE = " known to "  # as in "mobility known to 3 %, wanted 1 %"

_ICONS = {
    "unknown": "M4 8 H44 M4 40 H44",
    "converging": "M4 6 C18 18 28 21 44 21 M4 42 C18 30 28 27 44 27",
    "stable": "M4 18 H44 M4 30 H44 M14 24 L21 31 L35 15",
}
"""Two edges of an interval: far apart, closing in, close together with a tick."""


def verdict_panel(bar: BarFacts, run: RunFacts) -> Html:
    """The verdict in a word, and what it waits for or since when it holds."""
    state, word = _verdict(bar)
    notes = [_why(state, bar, run), *_flags(bar)]
    if stale := _stale(run):
        notes.append(div("flag loud", f"■ {stale}"))
    top = div("top", _icon(state), div("word", word))
    return div(f"card verdict {state}", top, *notes, div("facts", *_facts(bar)))


def number_panel(column: str, bar: BarFacts, rig: Rig) -> Html:
    """One number: value with uncertainty, units, interval, and how far it is from the target."""
    quantity, curves = QUANTITIES[column], bar.curves
    value, uncertainty = curves.number(column), curves.number(f"{column}_u")
    low, high = curves.number(f"{column}_low"), curves.number(f"{column}_high")
    name, target = div("name", quantity.name), target_of(rig, column)
    if value is None or uncertainty is None or low is None or high is None:
        wanted = div("distance", span("soft", f"wanted to {100 * target:g} %"))
        return div("card number", name, div("notyet", NOT_KNOWN), wanted)
    written = write(quantity, value, uncertainty)
    digits, _, spread = written.digits.partition("(")
    share = half_width(value, low, high)
    return div(
        "card number",
        name,
        element(
            "div",
            span("digits", digits, span("spread", f"({spread}")),
            span("unit", written.units[0]),
            class_="value",
            style=f"--ems:{_ems(bar):.2f}",
        ),
        div("also", *(f"= {text}" for text in written.texts[1:])),
        _gauge(value, low, high, target),
        _distance(share, target),
        _interval(quantity, value, low, high, rig.target.confidence),
    )


def _ems(bar: BarFacts) -> float:
    """About how wide the widest of the numbers is, in heights of its digits; all are set to fit."""
    widths = [5.0]
    for column, quantity in QUANTITIES.items():
        value, uncertainty = bar.curves.number(column), bar.curves.number(f"{column}_u")
        if value is not None and uncertainty is not None:
            written = write(quantity, value, uncertainty)
            digits, _, spread = written.digits.partition("(")
            unit = 0.22 * len(written.units[0])
            widths.append(0.56 * len(digits) + 0.34 * (len(spread) + 1) + unit + 0.2)
    return max(widths)


def target_of(rig: Rig, column: str) -> float:
    """The relative half-width that is wanted of a number."""
    target = rig.target
    return {
        "sheet_density_per_m2": target.sheet_density_relative,
        "mobility_m2_per_V_s": target.mobility_relative,
        "scattering_time_s": target.scattering_time_relative or target.mobility_relative,
    }[column]


def half_width(value: float, low: float, high: float) -> float:
    """The larger side of an interval relative to the value."""
    return max(high - value, value - low) / abs(value)


def _verdict(bar: BarFacts) -> tuple[str, str]:
    if any(bar.curves.number(column) is None for column in QUANTITIES):
        return "unknown", "Not known yet"
    if bar.curves.text("verdict") == "stable":
        return "stable", "Stable"
    return "converging", "Converging"


def _why(state: str, bar: BarFacts, run: RunFacts) -> Html:
    if state == "stable" and bar.stable_at is not None:
        time_s, field_T = bar.stable_at
        return div("why", f"good enough since {signed(field_T, 3)} T (at {clock(time_s)})")
    if not bar.curves.newest:
        waits = run.now_s is not None
        return div("why", "waiting for the first field point" if waits else "no field points")
    if state == "unknown" and run.now_s is None:
        return div("why", "the run ended before the numbers meant anything")
    if state == "unknown":
        return div("why", "the field must move on before the numbers mean anything")
    found = reasons(bar.curves.text("waiting_for")) or ["narrowing towards the target"]
    return div("why", *(div("reason", reason) for reason in found))


def reasons(waiting: str) -> list[str]:
    """What is in the way, one line each; several numbers that are too wide share a line."""
    found = [reason.replace(" %", "\u00a0%") for reason in waiting.split("; ") if reason]
    wide = [reason.partition(_WIDE)[0] for reason in found if _WIDE in reason]
    if len(wide) < 2:
        return found
    names = f"{', '.join(wide[:-1])} and {wide[-1]} not yet as well known as wanted"
    return [names, *(reason for reason in found if _WIDE not in reason)]


def _flags(bar: BarFacts) -> list[Html]:
    """How many cautions are open: loud for those that touch the answer, quiet for the others."""
    loud = len(touching(bar))
    quiet = len(bar.cautions) - loud
    flags = []
    if loud:
        flags.append(div("flag", f"▲ {loud} open caution{'s' if loud > 1 else ''}"))
    if quiet:
        flags.append(div("flag quiet", f"{quiet} note{'s' if quiet > 1 else ''}"))
    return flags


def _facts(bar: BarFacts) -> list[str]:
    curves = bar.curves
    points = int(curves.number("field_points") or 0)
    facts = [f"{grouped(points)} field point{'' if points == 1 else 's'}"]
    low, high = curves.number("window_low_T"), curves.number("window_high_T")
    if low is not None and high is not None:
        decimals = 2 - math.floor(math.log10(high)) if high > 0 else 0
        facts.append(f"window {round(low, decimals):g} to {round(high, decimals):g} T")
    if carriers := curves.text("carriers"):
        facts.append(carriers)
    pieces: list[str] = []
    for fact in facts:
        pieces += [" · "] * bool(pieces) + [span("fact", fact)]
    return pieces


def _stale(run: RunFacts) -> str:
    for line in run.streams:
        if line.name == "estimates" and line.level == "warning" and line.age_s is not None:
            return f"no new field point for {duration(line.age_s)}"
    return ""


def _interval(quantity: Quantity, value: float, low: float, high: float, confidence: float) -> Html:
    first, last = write_interval(quantity, value, low, high)
    unit = quantity.unit_texts(quantity.power(value))[0]
    return div(
        "interval",
        span("soft", f"{100 * confidence:g} % interval"),
        " ",
        span("ends", f"{first} to {last}"),
        " ",
        span("soft", unit),
    )


def _distance(share: float, target: float) -> Html:
    met = share <= target
    times = share / target
    how = "✓ met" if met else f"{times:.2g} × too wide" if times > JUST else "just too wide"
    return div(
        "distance met" if met else "distance",
        span("now", f"± {percent(share)}"),
        span("soft", f"wanted {100 * target:g} %"),
        span("how", how),
    )


def _gauge(value: float, low: float, high: float, target: float) -> Html:
    """The interval over the zone where it must lie, on a scale that fits the target."""

    def place(number: float) -> float:
        share = (number / value - 1.0) / (GAUGE_TARGETS * target)
        return 50.0 + 50.0 * min(max(share, -1.0), 1.0)

    left, right = place(low), place(high)
    zone = 50.0 / GAUGE_TARGETS
    ends = (" open-left" if left <= 0 else "") + (" open-right" if right >= 100 else "")
    return div(
        "gauge",
        element("div", class_="zone", style=f"left:{50 - zone:.2f}%;width:{2 * zone:.2f}%"),
        element("div", class_=f"bar{ends}", style=f"left:{left:.2f}%;width:{right - left:.2f}%"),
        element("div", class_="middle"),
    )


def _icon(state: str) -> Html:
    path = element("path", d=_ICONS[state])
    return element("svg", path, viewBox="0 0 48 48", aria_hidden="true")


def axis_unit(quantity: Quantity, value: float) -> tuple[str, float]:
    """How an axis of a number is named near a value, and what SI values are multiplied by."""
    power = quantity.power(value)
    unit = power_and_unit(power, quantity.units[0].symbol).removeprefix("× ")
    return f"{quantity.name} ({unit})", quantity.factor(power)
