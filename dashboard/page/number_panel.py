"""What a person reads first: the verdict, the three numbers, the field and the time left."""

from __future__ import annotations

from acquire.config import Rig
from dashboard.page.html import Html, div, element, join, span
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
from dashboard.words import duration

GAUGE_TARGETS = 4.0
"""How many times the target the gauge reaches to either side."""

STANDING_T_PER_MIN = 5e-4  # slower than this is told as no rate at all
LEAST_LOW = 1e-3  # a window that begins below this share of its end begins at zero
LONGEST = 15.5  # digits, and half of the unit's letters; longer ones are set smaller, to fit

_ICONS = {
    "unknown": "M4 8 H44 M4 40 H44",
    "converging": "M4 6 C18 18 28 21 44 21 M4 42 C18 30 28 27 44 27",
    "stable": "M4 18 H44 M4 30 H44 M14 24 L21 31 L35 15",
}
"""Two edges of an interval: far apart, closing in, close together with a tick."""


def verdict_panel(bar: BarFacts, run: RunFacts) -> Html:
    """The verdict in a word, and what it waits for or since when it holds."""
    state, word = _verdict(bar)
    notes = [div("why", _why(state, bar, run))]
    if bar.cautions:
        count = len(bar.cautions)
        notes.append(div("flag", f"▲ {count} open caution{'s' if count > 1 else ''}"))
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
    long = len(written.digits) + len(written.units[0]) / 2 > LONGEST
    size = "digits small" if long else "digits"
    share = half_width(value, low, high)
    return div(
        "card number",
        name,
        div(
            "value",
            span(size, digits, span("spread", f"({spread}")),
            span("unit", written.units[0]),
        ),
        div("also", *(f"= {text}" for text in written.texts[1:])),
        _gauge(value, low, high, target),
        _distance(share, target),
        div("interval", _interval(quantity, value, low, high, rig.target.confidence)),
    )


def field_panel(bar: BarFacts, run: RunFacts, rig: Rig) -> Html:
    """The field now, its rate or how old it is, and the time left to the target."""
    old = next((line for line in run.streams if line.name == rig.field.reader), None)
    stopped = old is not None and old.level == "warning"
    if run.field is None:
        field = [div("notyet", "no field yet")]
    else:
        field = [
            div("value", span("digits", signed(run.field.field_T, 4)), span("unit", "T")),
            div("also", _moving(run) if not stopped else f"▲ {_age(run)} old"),
        ]
    return div(
        "card field old" if stopped else "card field",
        div("name", "last field" if run.now_s is None or stopped else "field now"),
        *field,
        div("name second", "to the target"),
        div("left", _left(bar, run)),
        div("soft", _left_range(bar, run)),
    )


def _moving(run: RunFacts) -> str:
    """The rate of the field; empty where it is not known or nothing moves any more."""
    if run.field is None or run.field.rate_T_per_min is None or run.now_s is None:
        return ""
    rate = run.field.rate_T_per_min
    return "standing" if abs(rate) < STANDING_T_PER_MIN else f"{signed(rate, 3)} T/min"


def _age(run: RunFacts) -> str:
    assert run.field is not None and run.now_s is not None
    return duration(max(run.now_s - run.field.time_s, 0.0))


def target_of(rig: Rig, column: str) -> float:
    """The relative half-width that is wanted of a number."""
    target = rig.target
    return {
        "sheet_density_per_m2": target.sheet_density_relative,
        "mobility_m2_per_V_s": target.mobility_relative,
        "scattering_time_s": target.scattering_time_relative or target.mobility_relative,
    }[column]


def signed(number: float, decimals: int) -> str:
    """A number with its sign, minus as long as plus."""
    return f"{number:+.{decimals}f}".replace("-", "−")


def half_width(value: float, low: float, high: float) -> float:
    """The larger side of an interval relative to the value."""
    return max(high - value, value - low) / abs(value)


def _verdict(bar: BarFacts) -> tuple[str, str]:
    if any(bar.curves.number(column) is None for column in QUANTITIES):
        return "unknown", "Not known yet"
    if bar.curves.text("verdict") == "stable":
        return "stable", "Stable"
    return "converging", "Converging"


def _why(state: str, bar: BarFacts, run: RunFacts) -> str:
    if state == "stable" and bar.stable_at is not None:
        time_s, field_T = bar.stable_at
        return f"good enough since {signed(field_T, 3)} T (at {clock(time_s)})"
    if not bar.curves.newest:
        return "waiting for the first field point" if run.now_s is not None else "no field points"
    waiting = bar.curves.text("waiting_for")
    if state == "unknown":
        return "the field must move on before the numbers mean anything"
    return waiting.replace(" %", "\u00a0%") or "narrowing towards the target"


def _facts(bar: BarFacts) -> list[Html]:
    curves = bar.curves
    points = int(curves.number("field_points") or 0)
    facts = [f"{grouped(points)} field point{'' if points == 1 else 's'}"]
    low, high = curves.number("window_low_T"), curves.number("window_high_T")
    if low is not None and high is not None:
        from_T = 0.0 if low < LEAST_LOW * high else low
        facts.append(f"window {from_T:.3g} to {high:.3g} T")
    if carriers := curves.text("carriers"):
        facts.append(carriers)
    pieces: list[Html] = []
    for fact in facts:
        pieces += [span("", " · ")] * bool(pieces) + [span("fact", fact)]
    return pieces


def _stale(run: RunFacts) -> str:
    for line in run.streams:
        if line.name == "estimates" and line.level == "warning" and line.age_s is not None:
            return f"no new field point for {duration(line.age_s)}"
    return ""


def _left(bar: BarFacts, run: RunFacts) -> str:
    if bar.curves.text("verdict") == "stable":
        return "target met"
    if run.now_s is None:
        return "target not met"
    seconds, field_T = bar.curves.number("time_to_target_s"), bar.curves.number("field_to_target_T")
    if seconds is None:
        return NOT_KNOWN if field_T is None else f"near {field_T:.2f} T"
    where = "" if field_T is None else f", near {field_T:.2f} T"
    return f"about {duration(seconds)}{where}"


def _left_range(bar: BarFacts, run: RunFacts) -> str:
    """Between which fields the target is expected; empty while that is not known, or past."""
    low, high = (bar.curves.number(f"field_to_target_{end}_T") for end in ("low", "high"))
    if low is None or bar.curves.text("verdict") == "stable" or run.now_s is None:
        return ""
    return f"between {low:.2f} and {high:.2f} T" if high is not None else f"not before {low:.2f} T"


def _interval(quantity: Quantity, value: float, low: float, high: float, confidence: float) -> Html:
    first, last = write_interval(quantity, value, low, high)
    unit = quantity.unit_texts(quantity.power(value))[0]
    return join(
        span("soft", f"{100 * confidence:g} % interval "),
        span("", f"{first} to {last}"),
        span("soft", f" {unit}"),
    )


def _distance(share: float, target: float) -> Html:
    met = share <= target
    how = "✓ met" if met else f"{share / target:.2g} × too wide"
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
