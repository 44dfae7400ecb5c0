"""The curves of one Hall bar out of its rows of the table of estimates, thinned for plots."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from acquire.tables import Cell, Row
from analyse.estimate_table import ESTIMATES
from analyse.sweeps import Sweep, Sweeps
from dashboard.page.thinning import Array, Thinned
from dashboard.quantities import QUANTITIES

KEPT = 900
"""Points kept of a curve when it is thinned; it grows to twice that in between."""

HALL_MARK_OHM = 6250.0
_INDEX = {name: index for index, name in enumerate(ESTIMATES.names)}
_PARTS = {column: (column, f"{column}_low", f"{column}_high") for column in QUANTITIES}


@dataclass(frozen=True)
class Path:
    """One of the numbers against field: rows of ``points`` are field in T, value, low and high."""

    points: Array
    sweeps: NDArray[np.int64]


@dataclass(frozen=True)
class Mark:
    """A quick reading of the trade: the field in T, signed, at which it was read off.

    ``kind``: ``density`` (rho_xy reaches 6.25 kOhm) or ``mobility`` (rho_xx = rho_xy).
    """

    kind: str
    field_T: float


@dataclass(frozen=True)
class Curves:
    """What there is to plot. Rows of ``xx`` and ``xy`` are field in T and resistivity in ohm.

    ``newest`` has the cells of the newest row by column; it is empty before the first.
    """

    version: int
    newest: Mapping[str, Cell]
    xx: Array
    xy: Array
    paths: Mapping[str, Path]
    marks: tuple[Mark, ...]
    sweeps: tuple[Sweep, ...]

    def number(self, column: str) -> float | None:
        """A numeric cell of the newest row; None where not known yet."""
        cell = self.newest.get(column)
        return float(cell) if isinstance(cell, int | float) else None

    def text(self, column: str) -> str:
        """A cell of the newest row as text; empty where not known yet."""
        cell = self.newest.get(column)
        return "" if cell is None else str(cell)


class CurveKeeper:
    """Brought up to date row by row; the cost of a row and the memory do not grow with the ramp.

    ``turn_T``: by how much the field must come back to begin a new sweep.
    """

    def __init__(self, turn_T: float = 0.01) -> None:
        self.version = 0
        self._newest: Row | None = None
        self._sweeps = Sweeps(turn_T)
        self._xx, self._xy = Thinned(2, KEPT), Thinned(2, KEPT)
        self._paths = {column: Thinned(4, KEPT) for column in QUANTITIES}
        self._marks: dict[str, Mark] = {}
        self._curves: Curves | None = None

    def add(self, row: Row) -> None:
        """Take the next row of this Hall bar."""
        self.version += 1
        self._newest = row
        field_T = _number(row, "field_T")
        if field_T is None:
            return
        sweep = self._sweeps.add(_number(row, "time_s") or 0.0, field_T)
        for column, thinned in (("rho_xx_ohm", self._xx), ("rho_xy_ohm", self._xy)):
            value = _number(row, column)
            if value is not None:
                thinned.add((field_T, value), sweep)
        for column, parts in _PARTS.items():
            cells = [_number(row, part) for part in parts]
            if None not in cells:
                self._paths[column].add((field_T, *cells), sweep)  # type: ignore[arg-type]
        self._note_marks(row, field_T)

    def curves(self) -> Curves:
        """What there is now; the same object until a row is added. Not to be changed."""
        if self._curves is None or self._curves.version != self.version:
            newest = {} if self._newest is None else dict(zip(ESTIMATES.names, self._newest))
            paths = {
                column: Path(thinned.columns(), thinned.sweeps())
                for column, thinned in self._paths.items()
            }
            self._curves = Curves(
                self.version,
                MappingProxyType(newest),
                self._xx.columns(),
                self._xy.columns(),
                MappingProxyType(paths),
                tuple(self._marks.values()),
                self._sweeps.all(),
            )
        return self._curves

    def _note_marks(self, row: Row, field_T: float) -> None:
        """A quick reading is unsigned; it belongs to the side on which the ramp was at its first."""
        density = _number(row, "quick_density_per_m2")
        mobility = _number(row, "quick_mobility_m2_per_V_s")
        fields = {"density": density and density / 1e15, "mobility": mobility and 1 / mobility}
        for kind, size_T in fields.items():
            if not size_T:
                self._marks.pop(kind, None)
                continue
            known = self._marks.get(kind)
            sign = math.copysign(1.0, field_T if known is None else known.field_T)
            self._marks[kind] = Mark(kind, sign * size_T)


def _number(row: Row, column: str) -> float | None:
    cell = row[_INDEX[column]]
    return float(cell) if isinstance(cell, int | float) else None
