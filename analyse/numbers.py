"""A number with its interval, and what it is made of."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from statistics import NormalDist


@dataclass(frozen=True)
class Number:
    """A result.

    ``low``..``high`` holds the truth, at the joint confidence, at every moment of the ramp at
    once, systematic parts included. ``standard_uncertainty`` is the GUM's combined one, for a
    report: statistical, model and systematic standard uncertainties added in quadrature;
    ``degrees_of_freedom`` are its effective ones (infinite where no statistics stand behind it).
    """

    value: float
    standard_uncertainty: float
    low: float
    high: float
    statistical: float
    model: float
    systematic: float
    confidence: float
    degrees_of_freedom: float = math.inf

    @property
    def expanded_uncertainty(self) -> float:
        """Twice the standard uncertainty (coverage factor k = 2)."""
        return 2.0 * self.standard_uncertainty

    @property
    def interval(self) -> tuple[float, float]:
        """(low, high)."""
        return (self.low, self.high)

    @property
    def relative_half_width(self) -> float:
        """The larger of the two sides of the interval, relative to the value."""
        return max(self.high - self.value, self.value - self.low) / abs(self.value)


def make_number(
    value: float,
    low: float,
    high: float,
    statistical: float,
    model: float,
    systematic: float,
    confidence: float,
    fitted: Sequence[tuple[float, float]] = (),
) -> Number | None:
    """A number from its statistical interval ``low``..``high`` (absolute) and its parts.

    ``statistical`` (one look), ``model`` and ``systematic`` are relative standard uncertainties;
    ``model`` widens the interval as it is, ``systematic`` in quadrature, expanded to the
    confidence. ``fitted``: relative standard uncertainty and degrees of freedom of each coefficient
    behind it. None if the interval has no end.
    """
    if not (math.isfinite(low) and math.isfinite(high) and 0 < low <= value <= high):
        return None
    k = NormalDist().inv_cdf(0.5 + confidence / 2)
    extra = k * systematic * value
    down = math.hypot(value - low + model * value, extra)
    up = math.hypot(high - value + model * value, extra)
    if down >= value:
        return None
    combined = value * math.sqrt(statistical**2 + model**2 + systematic**2)
    return Number(
        value, combined, value - down, value + up, value * statistical, value * model,
        value * systematic, confidence, effective_freedom(combined / value, fitted),
    )


def effective_freedom(combined: float, parts: Iterable[tuple[float, float]]) -> float:
    """Effective degrees of freedom of a combined standard uncertainty, by Welch and Satterthwaite (GUM
    G.4.1). ``parts``: standard uncertainty and degrees of freedom of each; those that are known
    exactly need not be among them."""
    spent = sum((u / combined) ** 4 / nu for u, nu in parts) if combined > 0 else 0.0
    return 1.0 / spent if spent > 0 else math.inf
