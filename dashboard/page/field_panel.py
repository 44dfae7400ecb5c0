"""The field now, and how far it is to the target: in seconds and tesla, or in words what for."""

from __future__ import annotations

from acquire.config import Rig
from dashboard.page.html import Html, div, span
from dashboard.page.number_panel import reasons
from dashboard.page.store import BarFacts, RunFacts
from dashboard.quantities import NOT_KNOWN, QUANTITIES
from dashboard.words import duration, signed

STANDING_T_PER_MIN = 5e-4  # slower than this is told as no rate at all
NEAR_FARTHEST = 0.95
"""Share of the largest field so far below which the estimator forecasts nothing: going back over
fields that were swept already makes the answer better in a way that is not forecast."""

AT_ONCE_S = 0.5


def field_panel(bar: BarFacts, run: RunFacts, rig: Rig) -> Html:
    """The field now, its rate or how old it is, and what is left to the target."""
    old = next((line for line in run.streams if line.name == rig.field.reader), None)
    stopped = old is not None and old.level == "warning"
    if run.field is None:
        field = [div("notyet", "no field yet")]
    else:
        field = [
            div("value", span("digits", signed(run.field.field_T, 4)), span("unit", "T")),
            div("also", _moving(run) if not stopped else f"▲ {_age(run)} old"),
        ]
    headline, more = ahead(bar, run)
    return div(
        "card field old" if stopped else "card field",
        div("name", "last field" if run.now_s is None or stopped else "field now"),
        *field,
        div("name second", "to the target"),
        div("left", headline),
        div("soft", more),
    )


def ahead(bar: BarFacts, run: RunFacts) -> tuple[str, str]:
    """What is left to the target: a few words, and some more of them (may be empty)."""
    curves = bar.curves
    if curves.text("verdict") == "stable":
        return "target met", ""
    if run.now_s is None:
        return "target not met", ""
    seconds, field_T = curves.number("time_to_target_s"), curves.number("field_to_target_T")
    if seconds is None:
        return _awaited(bar, run)
    if seconds < AT_ONCE_S:
        return "precise enough", "what is in the way stands under the verdict"
    where = "" if field_T is None else f", near {field_T:.2f} T"
    return f"about {duration(seconds)}{where}", _range(bar)


def _awaited(bar: BarFacts, run: RunFacts) -> tuple[str, str]:
    """Why there is no forecast, as what it waits for."""
    curves = bar.curves
    if any(curves.number(column) is None for column in QUANTITIES):
        return NOT_KNOWN, "the three numbers come first"
    rate = None if run.field is None else run.field.rate_T_per_min
    if rate is None or abs(rate) < STANDING_T_PER_MIN:
        return "the field must move", "it stands, and a forecast goes by its rate"
    field_T, fields = curves.number("field_T"), curves.xx[0] if curves.xx.size else curves.xy[0]
    farthest_T = float(abs(fields).max()) if fields.size else 0.0
    if field_T is not None and abs(field_T) < NEAR_FARTHEST * farthest_T:
        return f"when |B| is past {farthest_T:.2f} T", "the ramp has been at these fields already"
    found = reasons(curves.text("waiting_for"))
    return "no forecast yet", f"waits: {found[0]}" if found else ""


def _range(bar: BarFacts) -> str:
    """Between which fields the target is expected; empty while that is not known."""
    low, high = (bar.curves.number(f"field_to_target_{end}_T") for end in ("low", "high"))
    if low is None:
        return ""
    return f"between {low:.2f} and {high:.2f} T" if high is not None else f"not before {low:.2f} T"


def _moving(run: RunFacts) -> str:
    """The rate of the field; empty where it is not known or nothing moves any more."""
    if run.field is None or run.field.rate_T_per_min is None or run.now_s is None:
        return ""
    rate = run.field.rate_T_per_min
    return "standing" if abs(rate) < STANDING_T_PER_MIN else f"{signed(rate, 3)} T/min"


def _age(run: RunFacts) -> str:
    assert run.field is not None and run.now_s is not None
    return duration(max(run.now_s - run.field.time_s, 0.0))
