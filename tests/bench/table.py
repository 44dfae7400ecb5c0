"""Outcomes of many ramps to a table, with Monte Carlo errors."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterable, Sequence

import numpy as np

from bench.naive import RULES
from bench.trial import NUMBERS, Outcome

COVERAGE, STOP_RATIO, ALMOST_NEVER, ALMOST_ALWAYS, EFFICIENCY = 0.95, 1.6, 0.01, 0.99, 1.05
BEYOND = 2.0
"""Monte Carlo errors by which a share may miss its bar."""

Rows = list[list[str]]


def share(hits: int, total: int) -> str:
    """A share in per cent with its standard error; that of Wilson's centre, never zero."""
    if total == 0:
        return "-"
    centre = (hits + 2.0) / (total + 4.0)
    error = math.sqrt(centre * (1.0 - centre) / (total + 4.0))
    return f"{100 * hits / total:.1f} ± {100 * error:.1f}"


def at_least(hits: int, total: int, bar: float) -> bool:
    """Whether a share meets a bar within its Monte Carlo error (that of the bar itself)."""
    return total == 0 or hits / total >= bar - BEYOND * math.sqrt(bar * (1 - bar) / total)


def at_most(hits: int, total: int, bar: float) -> bool:
    """The same from above."""
    return at_least(total - hits, total, 1.0 - bar)


def _count(ramps: Iterable[Outcome], true: Callable[[Outcome], bool]) -> int:
    return sum(1 for one in ramps if true(one))


def promises(ramps: Sequence[Outcome]) -> list[str]:
    """One line: what was promised, and whether it was kept."""
    stopped = [one for one in ramps if one.stopped]
    total, covered = len(ramps), ramps[0].covered
    line = [ramps[0].scenario, str(total), share(len(stopped), total)]
    if covered:
        held = [share(sum(one.kept[name].held_at_stop for one in stopped), len(stopped))
                for name in NUMBERS]
        line += [*held, share(_count(stopped, lambda one: one.held_at_stop), len(stopped)),
                 share(_count(ramps, lambda one: one.always_held), total)]
    else:
        line += ["not promised"] * 5
    line += [ratios(stopped, "precise"), ratios(stopped, "fair"), errors(stopped)]
    required = ramps[0].required
    line.append(share(_count(ramps, lambda one: one.said), total) if required else "none due")
    line.append(share(_count(ramps, lambda one: bool(one.false_cautions)), total))
    return [*line, "; ".join(failings(ramps)) or "kept"]


def failings(ramps: Sequence[Outcome]) -> list[str]:
    """Which bars of a scenario are missed, in words; empty if none."""
    stopped = [one for one in ramps if one.stopped]
    total, first, missed = len(ramps), ramps[0], []
    if first.covered:
        if not at_least(_count(stopped, lambda one: one.held_at_stop), len(stopped), COVERAGE):
            missed.append("coverage at stopping")
        always = _count(ramps, lambda one: one.always_held)
        if first.always and not at_least(always, total, COVERAGE):
            missed.append("coverage at every point")
        fair = _ratios(stopped, "fair")
        if len(fair) and np.median(fair) > STOP_RATIO:
            missed.append("stops late")
    if first.forbidden and not at_most(len(stopped), total, ALMOST_NEVER):
        missed.append("called stable")
    if first.required and not at_least(_count(ramps, lambda one: one.said), total, ALMOST_ALWAYS):
        missed.append("caution not shown")
    false = _count(ramps, lambda one: bool(one.false_cautions))
    if first.clean and not first.forbidden and not at_most(false, total, ALMOST_NEVER):
        missed.append("false cautions")
    excess = [one.excess for one in ramps if one.excess is not None]
    if excess and any(1.0 + np.mean(part) > EFFICIENCY for part in zip(*excess)):
        missed.append("efficiency")
    if any(one.failure for one in ramps):
        missed.append("the estimator broke")
    return missed


def _ratios(stopped: Sequence[Outcome], which: str) -> list[float]:
    found = []
    for one in stopped:
        against = getattr(one.reference, which) if one.reference is not None else math.inf
        if math.isfinite(against) and against > 0:
            found.append(one.stop_T / against)
    return found


def ratios(stopped: Sequence[Outcome], which: str) -> str:
    """Median and 90 % quantile of the stopping field over the oracle's."""
    found = _ratios(stopped, which)
    if not found:
        return "-"
    return f"{np.median(found):.2f} ({np.quantile(found, 0.9):.2f})"


def errors(stopped: Sequence[Outcome]) -> str:
    """Root mean square error in per cent of density and mobility at the moment of stopping."""
    if not stopped:
        return "-"
    both = [[one.kept[name].error_at_stop for one in stopped] for name in NUMBERS[:2]]
    return ", ".join(f"{100 * math.sqrt(np.nanmean(np.square(part))):.2f}" for part in both)


def comparisons(ramps: Sequence[Outcome]) -> list[str]:
    """One line: the naive rules on the same ramps, and the efficiency at the end."""
    line = [ramps[0].scenario]
    for rule in RULES:
        stops = [(one.naive[rule], one.reference) for one in ramps if rule in one.naive]
        made = [(stop, known) for stop, known in stops if math.isfinite(stop.swept_T)]
        against = [stop.swept_T / known.precise for stop, known in made
                   if known is not None and 0 < known.precise < math.inf]
        where = f"{np.median(against):.2f}" if against else "-"
        line.append(f"{share(sum(stop.held for stop, _ in made), len(made))} at {where}")
    excess = [one.excess for one in ramps if one.excess is not None]
    for part in zip(*excess) if excess else ():
        spread = np.std(part) / math.sqrt(len(part))
        line.append(f"{1 + np.mean(part):.3f} ± {spread:.3f}")
    return line + ["-"] * (len(RULES) + 3 - len(line))


def notes(ramps: Sequence[Outcome]) -> list[str]:
    """What a person who repairs things wants to know: counts of cautions, waits, breakages."""
    found = []
    false = Counter(code for one in ramps for code in one.false_cautions)
    silent = [one.index for one in ramps if not one.said]
    missed = [one.index for one in ramps if one.covered and not one.always_held]
    wrong = [one.index for one in ramps if one.covered and one.stopped and not one.held_at_stop]
    stable = [one.index for one in ramps if one.forbidden and one.stopped]
    waits = Counter(_plain(text) for one in ramps if not one.stopped for text in one.waiting_for)
    broken = Counter(one.failure for one in ramps if one.failure)
    for what, value in (
        ("false cautions", dict(false)), ("due caution not shown in", silent[:12]),
        ("truth outside at some point in", missed[:12]),
        ("truth outside at stopping in", wrong[:12]), ("called stable in", stable[:12]),
        ("never stable, waiting for", dict(waits.most_common(6))), ("broke", dict(broken)),
    ):
        if value:
            found.append(f"{what}: {value}")
    return found


def _plain(text: str) -> str:
    """A sentence without its numbers, for counting."""
    return "".join(c for c in text if not (c.isdigit() or c in ".%+-")).replace("  ", " ")


PROMISES = ["scenario", "ramps", "stable", "density held at stop", "mobility", "time", "all three",
            "all three at every point", "stop / oracle", "stop / fair", "rms error at stop n, mu",
            "caution shown", "false caution", "verdict"]
COMPARISONS = ["scenario", *(f"rule: {rule}" for rule in RULES), "variance / bound: density",
               "mobility"]


def markdown(header: list[str], rows: Rows) -> str:
    """A table in Markdown with columns lined up."""
    widths = [max(len(row[k]) for row in [header, *rows]) for k in range(len(header))]

    def line(cells: list[str]) -> str:
        return "| " + " | ".join(cell.ljust(w) for cell, w in zip(cells, widths)) + " |"

    return "\n".join([line(header), line(["-" * w for w in widths]), *map(line, rows)])
