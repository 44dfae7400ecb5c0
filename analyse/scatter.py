"""Scatter of a few readings about their own straight line."""

from __future__ import annotations

import math
from collections.abc import Sequence


def scatter_about_line(points: Sequence[tuple[float, float]]) -> float:
    """Standard deviation of y about the straight line through three or more points (x, y)."""
    n = len(points)
    x0, y0 = sum(x for x, _ in points) / n, sum(y for _, y in points) / n
    sxx = sum((x - x0) ** 2 for x, _ in points)
    sxy = sum((x - x0) * (y - y0) for x, y in points)
    syy = sum((y - y0) ** 2 for _, y in points)
    left = syy - sxy * sxy / sxx if sxx > 0 else syy
    return math.sqrt(max(0.0, left) / (n - 2))
