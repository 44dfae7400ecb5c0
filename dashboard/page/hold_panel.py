"""Holding the field, on the page: its state, the cautions, a place for the run's code, the buttons.

Whatever is pressed here is a request: the watch decides, by the code (:mod:`dashboard.hold_watch`).
"""

from __future__ import annotations

from bokeh.models import Button, Column, Div, InlineStyleSheet, Row, TextInput, Toggle, UIElement

from acquire.config import Rig
from acquire.hold.words import (
    CAUTIONS,
    GOOD_ENOUGH,
    STATES,
    what_is_expected,
    what_is_sent,
    what_stands,
)
from dashboard.hold_link import HoldLink, HoldState, Request
from dashboard.page.field_now import FieldNow
from dashboard.page.html import NOTHING, Html, div, element, span

LONGEST_CODE = 16
MOVING = 0.05  # of the planned rate: below it there is no ramp to pause
NOT_KNOWN = "not known: no answer from the watch"


class HoldPanel:
    """The strip below the head of the page, and the box that it opens."""

    def __init__(self, rig: Rig, link: HoldLink | None, sheet: InlineStyleSheet) -> None:
        self._rig, self._link = rig, link
        self._request: Request | None = None
        self._strip = _text("hold_state", sheet)
        self._cautions = _text("hold_cautions", sheet, cautions_text(rig))
        self._answer = _text("hold_answer", sheet)
        self._code = TextInput(
            name="hold_code", placeholder="code", max_length=LONGEST_CODE, width=90
        )
        self._open = Toggle(name="hold_open", label="Hold the field …", width=130, visible=False)
        buttons = [
            _button("hold_arm", "Arm", "default"),
            _button("hold_now", "Hold now", "danger"),
            _button("hold_disarm", "Disarm", "default"),
        ]
        for button, do in zip(buttons, ("arm", "hold_now", "disarm")):
            button.on_click(lambda event, do=do: self._ask_for(do))
        typing = Row(children=[self._code, *buttons])
        parts = [self._cautions, typing, self._answer]
        self._box = Column(children=parts, name="hold_box", visible=False)
        self._open.on_change("active", self._show_box)
        self._row = Row(
            children=[self._strip, self._open], name="hold", sizing_mode="stretch_width",
            visible=False,
        )  # fmt: skip

    @property
    def roots(self) -> tuple[UIElement, ...]:
        """What the page's template places."""
        return self._row, self._box

    def update(self, live: bool, good: bool, field: FieldNow | None) -> None:
        """Show how it stands. ``good``: all Hall bars are stable."""
        possible = live and self._rig.hold is not None and self._link is not None
        state = self._link.state if possible and self._link is not None else None
        text = strip_text(possible, state, live and good and moves(self._rig, field))
        self._strip.text = text
        self._open.visible = possible
        self._row.visible = bool(text)
        if not possible:
            self._open.active = False
        if self._request is not None:
            self._answer.text = div("answer", self._request.text)

    def _ask_for(self, do: str) -> None:
        if self._link is not None:
            self._request = self._link.request(do, str(self._code.value or ""))
            self._answer.text = div("answer", self._request.text)

    def _show_box(self, attribute: str, old: object, new: object) -> None:
        self._box.visible = bool(new)


def strip_text(possible: bool, state: HoldState | None, pause: bool) -> Html:
    """The strip: an alarm, what to do, or how holding stands; empty if there is nothing to say."""
    if possible and state is not None and state.state != "off":
        return div(
            f"hold {state.state}",
            span("word", f"Holding the field: {STATES.get(state.state, state.state)}"),
            span("told", state.told),
        )
    if pause:
        return div("hold pause", span("word", GOOD_ENOUGH))
    if not possible:
        return NOTHING
    return div(
        "hold",
        span("word", f"Holding the field: {STATES['off'] if state else NOT_KNOWN}"),
        span("told", state.told if state else ""),
    )


def cautions_text(rig: Rig) -> Html:
    """What has to be read before it is armed."""
    if rig.hold is None:
        return NOTHING
    return div(
        "cautionary",
        element("p", element("b", "Before you arm it, read this.")),
        element("ul", *(element("li", text) for text in CAUTIONS)),
        element("p", element("b", "Sent once: "), what_is_sent(rig.hold)),
        element("p", element("b", "Expected: "), what_is_expected(rig.hold)),
        element("p", element("b", "Held if: "), what_stands(rig.hold)),
        element("p", "Type the run's code, which the terminal of the watch shows. Arm: on stable the "
                "supply is asked. Hold now: it is asked at once, if it is armed."),
    )  # fmt: skip


def moves(rig: Rig, field: FieldNow | None) -> bool:
    """Whether there is a ramp to be paused, as far as that is known."""
    if field is None or field.rate_T_per_min is None:
        return False
    return rig.ramp is None or abs(field.rate_T_per_min) > MOVING * rig.ramp.rate_T_per_min


def _text(name: str, sheet: InlineStyleSheet, text: Html = NOTHING) -> Div:
    return Div(name=name, text=text, disable_math=True, stylesheets=[sheet], margin=0,
               sizing_mode="stretch_width")  # fmt: skip


def _button(name: str, label: str, kind: str) -> Button:
    return Button(name=name, label=label, button_type=kind, width=90)
