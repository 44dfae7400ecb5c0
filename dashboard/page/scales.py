"""Ranges of axes that hold still: they grow in steps, and a single wild point does not stretch them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Ends = tuple[float, float]

MARGIN = 0.08
GROWTH = 0.35
LEAST_FILLED = 0.45


def steady(low: float, high: float, current: Ends | None) -> Ends:
    """A range that holds ``low`` to ``high``.

    The ``current`` one stays while it holds them and they fill enough of it; otherwise the new
    one has room on the sides on which the old one was left.
    """
    span = (high - low) or 0.1 * abs(high) or 1.0
    if current is not None:
        inside = current[0] <= low and high <= current[1]
        if inside and span >= LEAST_FILLED * (current[1] - current[0]):
            return current
    down, up = MARGIN, MARGIN
    if current is not None:
        down = GROWTH if low < current[0] else MARGIN
        up = GROWTH if high > current[1] else MARGIN
    return low - down * span, high + up * span


def sensible(values: NDArray[np.float64]) -> Ends | None:
    """The lowest and highest of the values that an axis must show; None without values.

    Values that lie farther off than the whole spread of the middle 96 % are left out.
    """
    if not len(values):
        return None
    low, high = np.quantile(values, (0.02, 0.98))
    spread = (high - low) or abs(high) or 1.0
    near = values[(values >= low - spread) & (values <= high + spread)]
    return float(near.min()), float(near.max())
