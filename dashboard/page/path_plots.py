"""Each number's path against field: its value, the band of its interval, the band of the target."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from bokeh.models import BasicTicker, ColumnDataSource, Range1d
from bokeh.plotting import figure

from acquire.config import Rig
from dashboard.page import colours
from dashboard.page.axes import Follower, new_figure
from dashboard.page.curves import Curves, Path
from dashboard.page.number_panel import axis_unit, half_width, target_of
from dashboard.page.thinning import Array
from dashboard.quantities import NOT_KNOWN, QUANTITIES, Quantity

TARGETS_SHOWN = 2.5
"""How many times the target the axis reaches to either side, once the interval is inside."""

ROOM = 1.4
FAR_AWAY = 20.0
"""Band edges farther off than so many heights of the axis are drawn there; nobody sees them."""


class PathPlot:
    """The path of one number."""

    def __init__(self, quantity: Quantity, rig: Rig, x_range: Range1d, last: bool) -> None:
        self._quantity = quantity
        self._target = target_of(rig, quantity.column)
        name = f"path_{quantity.name.replace(' ', '_')}"
        self.figure = new_figure(name, x_range, "", last)
        self.figure.yaxis.ticker = BasicTicker(desired_num_ticks=4)
        self._axis = Follower(self.figure.y_range)
        self._band = ColumnDataSource({"xs": [], "ys": []})
        self._line = ColumnDataSource({"xs": [], "ys": []})
        self._zone = ColumnDataSource({"y0": [], "y1": []})
        self._tip = ColumnDataSource({"x": [], "y": []})
        self._draw()

    def forget(self) -> None:
        """Begin anew, as for another Hall bar."""
        self._axis.forget()

    def update(self, curves: Curves) -> None:
        """Show what there is now."""
        column = self._quantity.column
        value = curves.number(column)
        low, high = curves.number(f"{column}_low"), curves.number(f"{column}_high")
        path = curves.paths[column]
        if value is None or low is None or high is None or not path.points.size:
            self._clear()
            return
        title, factor = axis_unit(self._quantity, value)
        share = max(TARGETS_SHOWN * self._target, ROOM * half_width(value, low, high))
        centre, half = value * factor, abs(value) * factor * share
        self._axis.follow(centre - half, centre + half)
        self.figure.yaxis.visible = True
        self.figure.title.text = title[:1].upper() + title[1:]
        width = abs(value) * self._target * factor
        self._zone.data = {"y0": [centre - width], "y1": [centre + width]}
        self._tip.data = {"x": [path.points[0, -1]], "y": [path.points[1, -1] * factor]}
        self._show_path(path, factor, half)

    def _show_path(self, path: Path, factor: float, half: float) -> None:
        field = path.points[0]
        values, lows, highs = path.points[1:] * factor
        lows = np.maximum(lows, values[-1] - FAR_AWAY * half)
        highs = np.minimum(highs, values[-1] + FAR_AWAY * half)
        xs, ys, band_xs, band_ys = [], [], [], []
        for piece in _stretches(path):
            xs.append(field[piece])
            ys.append(values[piece])
            band_xs.append(_there_and_back(field[piece], field[piece]))
            band_ys.append(_there_and_back(lows[piece], highs[piece]))
        self._line.data = {"xs": xs, "ys": ys}
        self._band.data = {"xs": band_xs, "ys": band_ys}

    def _clear(self) -> None:
        name = self._quantity.name
        self.figure.yaxis.visible = False
        self.figure.title.text = f"{name[:1].upper()}{name[1:]}: {NOT_KNOWN}"
        self._zone.data = {"y0": [], "y1": []}
        self._tip.data = {"x": [], "y": []}
        self._line.data = self._band.data = {"xs": [], "ys": []}

    def _draw(self) -> None:
        plot = self.figure
        plot.hstrip(
            "y0", "y1", source=self._zone, fill_color=colours.TARGET, fill_alpha=0.13,
            line_color=colours.TARGET, line_alpha=0.45, line_dash="dashed", level="underlay",
        )
        plot.patches(
            "xs", "ys", source=self._band, fill_color=colours.NUMBER, fill_alpha=0.20,
            line_color=colours.NUMBER, line_alpha=0.35,
        )
        plot.multi_line("xs", "ys", source=self._line, color=colours.NUMBER, line_width=2)
        plot.scatter(
            "x", "y", source=self._tip, size=9, fill_color=colours.NUMBER, line_color=colours.CARD,
            line_width=1.5,
        )


class PathPlots:
    """The paths of all numbers over one field axis."""

    def __init__(self, rig: Rig, x_range: Range1d) -> None:
        quantities = list(QUANTITIES.values())
        self._plots = [
            PathPlot(quantity, rig, x_range, last=quantity is quantities[-1])
            for quantity in quantities
        ]

    @property
    def figures(self) -> list[figure]:
        """Top to bottom."""
        return [plot.figure for plot in self._plots]

    def update(self, curves: Curves) -> None:
        """Show what there is now."""
        for plot in self._plots:
            plot.update(curves)

    def forget(self) -> None:
        """Begin anew, as for another Hall bar."""
        for plot in self._plots:
            plot.forget()


def _stretches(path: Path) -> Iterator[slice]:
    """The sweeps of a path, each beginning where the one before it ended."""
    turns = (np.flatnonzero(np.diff(path.sweeps)) + 1).tolist()
    begins, ends = [0, *turns], [*turns, len(path.sweeps)]
    for begin, end in zip(begins, ends):
        yield slice(max(begin - 1, 0), end)


def _there_and_back(one: Array, other: Array) -> Array:
    return np.concatenate([one, other[::-1]])
