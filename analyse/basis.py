"""The regressors of the two fits, in units of u = B / scale, and the models made of them.

Hall resistivity: 1, u, u^3, u|u|, |u|. The line is (1, u). A bend of the sample's own is odd and
smooth in field, so it begins as u^3 (a second kind of carrier does); u|u| is what a current that
sags with the Hall voltage gives; |u| is the part even in field, that contacts which are not quite opposite bring in, and is told apart from the rest only
where both directions of the field were measured.
Longitudinal resistivity: 1, |u|, u^2, |u|^3, u. Level, sloping and curved magnetoresistance, each
even in field; u is the part odd in field, that the Hall voltage brings in.
"""

from __future__ import annotations

COLUMNS = 5
"""Regressors of each role."""

HALL_LINE = (0, 1)
HALL_BENT = (0, 1, 2)
HALL_SAGGING = (0, 1, 3)
LEVEL = (0,)
SLOPING = (0, 1)
CURVED = (0, 1, 2)
CUBIC = (0, 1, 2, 3)
SQUARE = (0, 2)
OTHER_PARITY = 4
"""The regressor of the other parity, in both roles."""


def regressors(role: str, u: float) -> tuple[float, ...]:
    """The row of regressors of a role ("hall" or "longitudinal") at u."""
    size = abs(u)
    if role == "hall":
        return (1.0, u, u * u * u, u * size, size)
    return (1.0, size, u * u, u * u * size, u)
