"""Open cautions: loud where they touch the answer, quiet where they are only told."""

from __future__ import annotations

from analyse.cautions import NOTES
from dashboard.page.curves import Curves
from dashboard.page.html import Html, div, span
from dashboard.page.store import BarFacts

_OPEN = "open caution: "


def touching(bar: BarFacts) -> list[str]:
    """Codes of the open cautions that keep the answer from being called stable."""
    return [code for code in bar.cautions if _touches(code, bar.curves)]


def caution_panel(bar: BarFacts) -> Html:
    """The open cautions, each with its sentence; those that touch the answer first."""
    if not bar.cautions:
        return div("cautions", div("none", "No open cautions."))
    loud = touching(bar)
    cards = [
        div("caution", div("code", f"▲ {_words(code)}"), div("text", bar.cautions[code] or "…"))
        for code in loud
    ]
    quiet = [code for code in bar.cautions if code not in loud]
    notes = [
        div("noted", span("code", _words(code)), span("text", f" {bar.cautions[code] or '…'}"))
        for code in quiet
    ]
    names = ", ".join(map(_words, quiet))
    if not loud:  # all names in the first line, since there may be no room for the sentences
        notes.insert(0, div("none", f"None that touches the answer. Also seen: {names}"))
    return div("cautions", *cards, *notes)


def _touches(code: str, curves: Curves) -> bool:
    """What the verdict waits for names the codes that hold it up, once the numbers are known."""
    if curves.number("mobility_m2_per_V_s") is None:
        return code not in NOTES
    for reason in curves.text("waiting_for").split("; "):
        if reason.startswith(_OPEN):
            return code in reason.removeprefix(_OPEN).split(", ")
    return False


def _words(code: str) -> str:
    return code.replace("_", " ")
