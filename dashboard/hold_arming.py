"""Arming in the terminal: the cautions are shown, and the run's code is to be typed."""

from __future__ import annotations

from threading import Event

from acquire.hold.words import CAUTIONS, what_is_expected, what_is_sent, what_stands
from acquire.run_folder import RunFolder
from dashboard.typed_line import typed_line
from dashboard.view import View

TYPING_S = 300.0


def typed_code(run: RunFolder, view: View, code: str, wish: Event) -> str:
    """What a person typed who has read the cautions; empty if nothing, or not in time."""
    view.say(arming_text(run, code))
    return typed_line(wish, TYPING_S) or ""


def arming_text(run: RunFolder, code: str) -> str:
    """What a person reads who is about to arm it in the terminal."""
    hold = run.rig.hold
    assert hold is not None
    lines = [f"- {text}" for text in CAUTIONS]
    return "\n".join(
        [
            "To be armed: on stable, the magnet supply is asked once to hold the field.",
            f"Sent:     {what_is_sent(hold)}",
            f"Expected: {what_is_expected(hold)}",
            f"Held if:  {what_stands(hold)}",
            *lines,
            f"Code: {code}",
            "Type this code and Enter to arm it for this run, or Enter alone to go on without.",
        ]
    )
