"""The other text panels: the head of the page, streams, events, the banner."""

from __future__ import annotations

from acquire.config import Rig
from analyse.cautions import NOTES
from dashboard.page.html import NOTHING, Html, div, element, join, span
from dashboard.page.presence import StreamLine
from dashboard.page.store import Event, RunFacts
from dashboard.quantities import grouped
from dashboard.words import duration

EVENTS_SHOWN = 60
NEARLY_NOW_S = 10.0

_SHAPES = {"good": "●", "waiting": "○", "warning": "▲", "ended": "■"}
_KINDS = {
    "verdict": "verdict",
    "caution": "caution",
    "caution_over": "passed",
    "setting": "setting",
    "note": "note",
    "process": "process",
    "run": "run",
}


def head_panel(run_id: str, rig: Rig, run: RunFacts) -> Html:
    """Which run this is, and how it stands."""
    who = " · ".join(text for text in (rig.run.sample, rig.run.operator, rig.run.note) if text)
    return div(
        "head",
        div("run", span("title", run_id), span("soft", who)),
        div(f"phase {run.phase}", _phase(run)),
    )


def stream_panel(run: RunFacts) -> Html:
    """A line for each stream: state, age of its last usable row, how many rows it has."""
    head = element("tr", *(element("th", text) for text in ("stream", "state", "age", "rows")))
    rows = [_stream_rows(line) for line in run.streams]
    return div("streams", element("table", element("thead", head), element("tbody", *rows)))


def event_panel(run: RunFacts, several_bars: bool) -> Html:
    """What happened, newest first."""
    if not run.events:
        return div("events", div("none", "Nothing has happened yet."))
    return div("events", *(_event(event, several_bars) for event in run.events[:EVENTS_SHOWN]))


def banner_panel(run: RunFacts) -> Html:
    """What is wrong with the page itself or the whole run; empty if nothing is."""
    banners = []
    if run.failures:
        times = "once" if run.failures == 1 else f"{run.failures} times"
        banners.append(
            f"This page failed {times}; the readers and the estimator go on without it. "
            f"Last: {run.failure}"
        )
    if run.phase == "crashed":
        banners.append(
            "This run ended badly: the process that watched it is gone. What was recorded is here; "
            "rampside replay makes the estimates complete."
        )
    if run.bad_end:
        banners.append(f"This run ended badly. {run.bad_end}")
    return join(*(div("banner", text) for text in banners)) if banners else NOTHING


def age(seconds: float) -> str:
    """An age, in tenths of seconds while it is small."""
    return f"{seconds:.1f} s" if seconds < NEARLY_NOW_S else duration(seconds)


def clock(seconds: float) -> str:
    """A time of the run as minutes and seconds, or with hours."""
    whole = int(seconds)
    hours, minutes = whole // 3600, whole % 3600 // 60
    rest = f"{minutes:02d}:{whole % 60:02d}"
    return f"{hours}:{rest}" if hours else rest


def _phase(run: RunFacts) -> str:
    if run.now_s is not None:
        return f"● live {clock(run.now_s)}"
    if run.phase == "opening":
        return "○ opening"
    what = "ended" if run.phase == "ended" and not run.bad_end else "ended badly"
    return f"■ {what} after {clock(run.last_s)}"


def _stream_rows(line: StreamLine) -> Html:
    """A row of facts, and one below it for what went wrong, if anything did."""
    identity = element("span", line.identity, class_="identity", title=line.identity)
    facts = element(
        "tr",
        element("td", span("stream", line.name), identity),
        element("td", span("shape", _SHAPES[line.level]), f" {line.state}"),
        element("td", "" if line.age_s is None else age(line.age_s), class_="figure"),
        element("td", grouped(line.rows), class_="figure"),
        class_=line.level,
    )
    if not line.note:
        return facts
    note = element("td", line.note, colspan="4")
    return join(facts, element("tr", note, class_=f"aside {line.level}"))


def _event(event: Event, several_bars: bool) -> Html:
    words = [event.text] if event.kind in ("note", "process", "run") else _coded(event)
    where = [span("bar", event.hall_bar)] if several_bars and event.hall_bar else []
    loud = event.kind in _KINDS and event.code not in NOTES
    return div(
        f"event of-{event.kind}" if loud else "event",
        span("when", clock(event.time_s)),
        span("kind", _KINDS.get(event.kind, event.kind)),
        span("said", *where, *words),
    )


def _coded(event: Event) -> list[str]:
    return [element("b", event.code.replace("_", " ")), f" {event.text}"]
