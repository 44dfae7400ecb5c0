"""The sweeps of a ramp in words: which way, from where to where."""

from __future__ import annotations

from acquire.config import Rig
from analyse.sweeps import Sweep
from dashboard.page.html import Html, div, span
from dashboard.words import signed

SHOWN = 4
_DIRECTIONS = {1: "↑ up", -1: "↓ down"}


def threshold_T(rig: Rig) -> float:
    """By how much the field must come back for a turn; the same as the estimator's."""
    largest_T = max(map(abs, rig.ramp.path_T)) if rig.ramp is not None else 1.0
    return max(2e-3, 0.01 * largest_T)


def sweep_panel(sweeps: tuple[Sweep, ...], live: bool) -> Html:
    """The sweeps that were recognised, the last ones."""
    moved = [sweep for sweep in sweeps if sweep.direction]
    if not moved:
        return div("sweeps", span("soft", "No sweep yet: the field has not moved."))
    pieces = [span("soft", "Sweeps")]
    if len(moved) > SHOWN:
        pieces.append(span("soft", f"… of {moved[-1].number + 1}, the last"))
    for sweep in moved[-SHOWN:]:
        goes_on = live and sweep is moved[-1]
        pieces.append(
            span(
                "sweep now" if goes_on else "sweep",
                span("arrow", _DIRECTIONS[sweep.direction]),
                f" {signed(sweep.from_T, 3)} to {signed(sweep.to_T, 3)} T",
            )
        )
    return div("sweeps", *pieces)
