"""How the three numbers are written: value and uncertainty in the GUM's concise way, units, powers.

``2.401(12) × 10¹⁵ m⁻²`` means a value of 2.401 with a standard uncertainty of 0.012 in the last
digits (JCGM 100:2008, 7.2.2, second form); two digits of the uncertainty are given (7.2.6). An
uncertainty that reaches across the decimal point keeps it, as in ``27.0(1.2)``.

A number and its interval share one power of ten, and the two units of a number share its digits:
2.4 × 10¹⁵ m⁻² = 2.4 × 10¹¹ cm⁻², 27 m²/Vs = 27 × 10⁴ cm²/Vs.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal

NOT_KNOWN = "not known yet"
MOST_DECIMALS = 12  # a double holds no more digits worth showing

_SUPERSCRIPTS = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")


@dataclass(frozen=True)
class Unit:
    """``symbol``, and the decimal exponent that turns the number in SI into one in this unit."""

    symbol: str
    exponent: int = 0


@dataclass(frozen=True)
class Quantity:
    """One of the numbers: the column that has it in SI, and how it is written.

    ``units``: the first is the one that plots use. ``powers``: from which size on (in the first
    unit, descending) which power of ten of the first unit is used; few, so that a number that
    narrows keeps its own, and chosen so that both units read well.
    """

    column: str
    name: str
    units: tuple[Unit, ...]
    powers: tuple[tuple[float, int], ...]

    def power(self, value: float) -> int:
        """The power of ten, in the first unit, with which a value in SI is written."""
        size = abs(value) * 10.0 ** self.units[0].exponent
        return next((power for least, power in self.powers if size >= least), self.powers[-1][1])

    def factor(self, power: int) -> float:
        """What a value in SI is multiplied by to stand before this power of ten."""
        return 10.0 ** (self.units[0].exponent - power)

    def unit_texts(self, power: int) -> tuple[str, ...]:
        """What follows the digits, for each unit: ``× 10¹⁵ m⁻²``, or ``m²/Vs``."""
        first = self.units[0].exponent
        return tuple(
            power_and_unit(power + unit.exponent - first, unit.symbol) for unit in self.units
        )


QUANTITIES = {
    quantity.column: quantity
    for quantity in (
        Quantity(
            "sheet_density_per_m2",
            "sheet density",
            (Unit("m⁻²"), Unit("cm⁻²", -4)),
            ((1e21, 21), (1e18, 18), (1e13, 15), (0.0, 12)),
        ),
        Quantity(
            "mobility_m2_per_V_s",
            "mobility",
            (Unit("m²/Vs"), Unit("cm²/Vs", 4)),
            ((0.1, 0), (0.0, -4)),
        ),
        Quantity("scattering_time_s", "scattering time", (Unit("ps", 12),), ((0.0, 0),)),
    )
}
"""By their column in the table of estimates."""


@dataclass(frozen=True)
class Written:
    """A number as text: ``digits``, and what follows them in each of its units."""

    digits: str
    units: tuple[str, ...]

    @property
    def texts(self) -> tuple[str, ...]:
        """The number in each of its units."""
        return tuple(f"{self.digits} {unit}" for unit in self.units)


def write(quantity: Quantity, value: float, uncertainty: float) -> Written:
    """A value and its standard uncertainty, both in SI and finite."""
    power = quantity.power(value)
    factor = quantity.factor(power)
    return Written(concise(value * factor, uncertainty * factor), quantity.unit_texts(power))


def write_interval(quantity: Quantity, value: float, low: float, high: float) -> tuple[str, str]:
    """The ends of a value's interval, all in SI, as digits before the power of ten of the value.

    They are rounded outwards, so that what is printed holds all that the interval holds.
    """
    factor = quantity.factor(quantity.power(value))
    decimals = decimals_for((high - low) * factor / 2)
    return (
        _rounded(low * factor, decimals, ROUND_FLOOR),
        _rounded(high * factor, decimals, ROUND_CEILING),
    )


def concise(value: float, uncertainty: float) -> str:
    """A value with two digits of its standard uncertainty in brackets.

    Both finite and in the same unit; the uncertainty's sign does not matter.

    >>> concise(100.02147, 0.00035)
    '100.02147(35)'
    >>> concise(27.04, 1.23)
    '27.0(1.2)'
    """
    uncertainty = abs(uncertainty)
    if uncertainty == 0:
        return f"{value:.10g}(0)"
    decimals = decimals_for(uncertainty)
    spread = _rounded(uncertainty, decimals, ROUND_HALF_EVEN)
    if decimals > 0 and float(spread) < 1:
        spread = spread.lstrip("0.") or "0"
    return f"{_rounded(value, decimals, ROUND_HALF_EVEN)}({spread})"


def decimals_for(uncertainty: float) -> int:
    """How many decimals show two digits of an uncertainty; negative: zeros before the point."""
    if not uncertainty > 0 or not math.isfinite(uncertainty):
        return 3
    exponent = int(f"{uncertainty:.1e}".partition("e")[2])
    return min(1 - exponent, MOST_DECIMALS)


def percent(share: float) -> str:
    """A share with two digits: ``0.53 %``, ``12 %``.

    >>> percent(0.00534)
    '0.53 %'
    """
    decimals = max(0, decimals_for(100 * share))
    return f"{100 * share:.{decimals}f} %"


def grouped(number: int) -> str:
    """A count with thin spaces between its thousands."""
    return f"{number:,}".replace(",", "\u2009")


def power_and_unit(power: int, symbol: str) -> str:
    """``× 10¹⁵ m⁻²``; the unit alone for the power 0."""
    return symbol if power == 0 else f"× 10{str(power).translate(_SUPERSCRIPTS)} {symbol}"


def ascii_text(text: str) -> str:
    """The same for a terminal that knows ASCII only: ``2.401(12) x 10^15 m^-2``."""
    plain, raised = [], False
    for letter in text:
        position = "⁰¹²³⁴⁵⁶⁷⁸⁹⁻".find(letter)
        if position >= 0 and not raised:
            plain.append("^")
        raised = position >= 0
        plain.append("0123456789-"[position] if raised else letter)
    return "".join(plain).replace("×", "x").replace("±", "+/-")


def _rounded(value: float, decimals: int, rounding: str) -> str:
    step = Decimal(1).scaleb(-decimals)
    rounded = Decimal(repr(value)).quantize(step, rounding)
    return f"{rounded if rounded else abs(rounded):f}"  # never -0.00
