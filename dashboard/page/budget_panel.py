"""What the uncertainty of each number is made of, by source: the budget, after the GUM.

The uncertain parts of the fit stand in each row of the estimates, the systematic ones follow from
the configuration, so the budget is known wherever the row is, also of a run of last year.
"""

from __future__ import annotations

from acquire.config import Rig
from analyse.budget import combined, systematic_lines
from analyse.estimate import BudgetLine
from analyse.rig import RigEstimator
from dashboard.page.curves import Curves
from dashboard.page.html import Html, div, element

Lines = tuple[BudgetLine, ...]

_HEADS = ("density", "mobility", "time")


def systematic_by_bar(rig: Rig) -> dict[str, Lines]:
    """The part of each Hall bar's budget that does not change during a run."""
    estimators = RigEstimator(rig).estimators
    return {name: systematic_lines(one.bar, one.setup) for name, one in estimators.items()}


def budget(curves: Curves, systematic: Lines) -> Lines:
    """All lines, the greatest first; empty while mobility, or the fit itself, is not known."""
    slope, slope_u = curves.number("hall_slope_ohm_per_T"), curves.number("hall_slope_u")
    rho_0, rho_0_u = curves.number("rho_0_ohm"), curves.number("rho_0_u")
    if curves.number("mobility_m2_per_V_s") is None:
        return ()
    if not slope or not rho_0 or slope_u is None or rho_0_u is None:
        return ()
    hall, along = abs(slope_u / slope), abs(rho_0_u / rho_0)
    lines = (
        BudgetLine("Hall slope: scatter, bend", "fit", hall, hall, hall),
        BudgetLine("ρ₀: scatter, bend", "fit", 0.0, along, along),
        *systematic,
    )
    return tuple(sorted(lines, key=lambda line: -max(_parts(line))))


def budget_panel(lines: Lines) -> Html:
    """A row a source: relative standard uncertainties in percent, each with its share as a bar."""
    if not lines:
        return div("budget", div("none", "Known once the three numbers are."))
    total = combined(lines)
    head = element("tr", *(element("th", text) for text in ("± in %", *_HEADS)))
    rows = [
        element("tr", element("td", line.source), *map(_cell, _parts(line), total))
        for line in lines
    ]
    last = element("tr", element("td", "together"), *map(_cell, total), class_="total")
    table = element("table", element("thead", head), element("tbody", *rows, last))
    return div("budget", table)


def _parts(line: BudgetLine) -> tuple[float, float, float]:
    return line.sheet_density, line.mobility, line.scattering_time


def _cell(part: float, whole: float | None = None) -> Html:
    """A relative uncertainty in percent; behind it its share of the square of the whole."""
    if not part:
        return element("td", "–", class_="figure")
    share = 0.0 if not whole else 100 * (part / whole) ** 2
    bar = f"--share:{share:.0f}%" if share else ""
    return element("td", f"{100 * part:.2g}", class_="figure", style=bar)
