"""Slope and zero-field resistivity at once: the region of both that holds at every moment.

The product of two e-processes of independent signals is one again, so all pairs of values for
which it stays below 1/alpha hold the true pair at every moment of the ramp with 1 - alpha, and all
that follows from the pair holds with it: density, mobility, scattering time, sign of the carriers.
The region is nearly an ellipse, so errors of the two signals add in quadrature, and nothing has to
be shared out beforehand between the one and the other.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from analyse.confidence import Evidence

REFINED = (0.1, 0.03)
"""Steps in angle in which the extreme of a ratio over the region is sought, one after the other; it
is flat there, so that little is left to find."""
ROUND = 60.0
"""Degrees of freedom above which the region is near enough to an ellipse to begin at its extreme."""
STARTS = (0.0, 0.04, 0.1, 0.2, 0.35, 0.6, 0.97, 1.22, 1.37, 1.47, 1.53, math.pi / 2)
"""Angles to begin from below it: the region then has arms along both values."""


@dataclass(frozen=True)
class Uncertain:
    """A positive value with its standard error and its evidence."""

    value: float
    error: float
    evidence: Evidence


def half_width(one: Uncertain, other: Uncertain | None, alpha: float) -> float:
    """Of the region's extent along ``one``; infinite while it has no end. ``other`` may be unknown."""
    reach = _reach(one, other, alpha)
    return one.error * reach if math.isfinite(reach) else math.inf


def ratio_range(above: Uncertain, below: Uncertain, alpha: float) -> tuple[float, float] | None:
    """Smallest and largest ratio of the two values over the region; None if it has no end."""
    far = _reach(above, below, alpha), _reach(below, above, alpha)
    a, b = above.error / above.value, below.error / below.value
    if not (math.isfinite(far[0]) and math.isfinite(far[1])):
        return None
    if not (far[0] * a < 1.0 and far[1] * b < 1.0):
        return None
    limit = -math.log(alpha)

    def edge(angle: float) -> tuple[float, float]:
        t = far[0] * math.sin(angle)
        return t * a, below.evidence.radius(limit - above.evidence.against(t)) * b

    def up(angle: float) -> float:
        t, other = edge(angle)
        return math.log1p(t) - math.log1p(-other)

    def down(angle: float) -> float:
        t, other = edge(angle)
        return math.log1p(other) - math.log1p(-t)

    starts = (math.atan2(far[0] * a, far[1] * b),)
    if min(above.evidence.nu, below.evidence.nu) < ROUND:
        starts += STARTS
    ratio = above.value / below.value
    return ratio * math.exp(-_largest(down, starts)), ratio * math.exp(_largest(up, starts))


def _reach(one: Uncertain, other: Uncertain | None, alpha: float) -> float:
    spent = other.evidence.at_estimate if other is not None else 0.0
    return one.evidence.radius(-math.log(alpha) - spent)


def _largest(function: Callable[[float], float], starts: Sequence[float]) -> float:
    """The largest value of a function of an angle between 0 and pi/2, by parabolas from the best of
    some angles."""
    top = math.pi / 2
    best, angle = max((function(start), start) for start in starts)
    for step in REFINED:
        step = min(step, angle, top - angle)
        if step <= 0.0:
            break
        left, right = function(angle - step), function(angle + step)
        bend = left - 2 * best + right
        move = max(-step, min(step, 0.5 * step * (left - right) / bend)) if bend < 0 else 0.0
        best, angle = max((best, angle), (left, angle - step), (right, angle + step),
                          (function(angle + move), angle + move))
    return best
