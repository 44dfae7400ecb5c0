"""Both resistivities against field with fit, window and quick readings, and their residuals."""

from __future__ import annotations

import numpy as np
from bokeh.models import BasicTicker, ColumnDataSource, HoverTool, LinearAxis, Range1d
from bokeh.plotting import figure
from numpy.typing import NDArray

from dashboard.page import colours
from dashboard.page.axes import Follower, new_figure, off_scale, style_axis
from dashboard.page.curves import HALL_MARK_OHM, Curves, Mark
from dashboard.page.scales import sensible
from dashboard.page.thinning import Array

Mask = NDArray[np.bool_]

FAINT, FULL = 0.22, 0.75
RIGHT_AXIS = 72
"""Pixels beside the frame for the axis of rho_xy, also where there is none, so that all align."""

_SOURCES = {
    "xx": "x y alpha",
    "xy": "x y alpha",
    "xx_out": "x y angle",
    "xy_out": "x y angle",
    "xx_fit": "x0 y0 x1 y1",
    "xy_fit": "x0 y0 x1 y1",
    "xx_line": "x0 y0 x1 y1",
    "xy_line": "x0 y0 x1 y1",
    "window": "x0 x1",
    "marks": "x y label_y text align",
    "xx_residual": "x y alpha",
    "xy_residual": "x y alpha",
    "xx_residual_out": "x y angle",
    "xy_residual_out": "x y angle",
}


class ResistivityPlots:
    """Three figures over one field axis, brought up to date from the curves of a Hall bar."""

    def __init__(self, field_axis: Follower) -> None:
        self._field_axis, x_range = field_axis, field_axis.axis
        self._sources = {
            name: ColumnDataSource({column: [] for column in columns.split()})
            for name, columns in _SOURCES.items()
        }
        self.main, xy_range = self._main_figure(x_range)
        self._residuals = {
            "xx": self._residual_figure("xx", x_range, "ρxx − ρ₀ (Ω)"),
            "xy": self._residual_figure("xy", x_range, "ρxy − line (Ω)", last=True),
        }
        self._axes = {
            "xx": Follower(self.main.y_range),
            "xy": Follower(xy_range),
            "xx_residual": Follower(self._residuals["xx"].y_range),
            "xy_residual": Follower(self._residuals["xy"].y_range),
        }

    @property
    def figures(self) -> list[figure]:
        """Top to bottom."""
        return [self.main, *self._residuals.values()]

    def forget(self) -> None:
        """Begin anew, as for another Hall bar."""
        for axis in self._axes.values():
            axis.forget()

    def update(self, curves: Curves) -> None:
        """Show what there is now."""
        window = _window(curves)
        self._sources["window"].data = _strips(window, curves)
        for name, line in (("xx", _level(curves)), ("xy", _hall_line(curves))):
            x, y = getattr(curves, name)
            inside = _inside(x, window)
            alpha = np.where(inside, FULL, FAINT) if line else np.full_like(x, FULL)
            self._show(name, x, y, alpha)
            self._show_fit(name, x, line, window)
            if line is None:
                self._show(f"{name}_residual", x[:0], y[:0], alpha[:0])
            else:
                rest = y - (line[0] + line[1] * x)
                self._show(f"{name}_residual", x, rest, alpha, inside)
            self._residuals[name].yaxis.visible = line is not None
        self._show_marks(curves)

    def _show(
        self, name: str, x: Array, y: Array, alpha: Array, decide: Mask | None = None
    ) -> None:
        """Points on their axis; ``decide``: those that it must hold, if not all. Others may be cut."""
        ends = sensible(y if decide is None or not decide.any() else y[decide])
        if ends is not None:
            self._axes[name].follow(*ends)
        shown = self._axes[name].ends
        self._sources[name].data = {"x": x, "y": y, "alpha": alpha}
        if decide is not None:
            x, y = x[decide], y[decide]
        self._sources[f"{name}_out"].data = off_scale(x, y, shown)

    def _show_fit(
        self, name: str, x: Array, line: tuple[float, float] | None, window: tuple[float, float]
    ) -> None:
        inside: list[tuple[float, float]] = []
        whole: list[tuple[float, float]] = []
        if line is not None and len(x):
            inside = _sides(window, x)
            whole = [(float(x.min()), float(x.max()))]
        for source, pieces in ((f"{name}_fit", inside), (f"{name}_line", whole)):
            ends = np.array(pieces, dtype=float).reshape(-1, 2).T
            offset, slope = line or (0.0, 0.0)
            y0, y1 = offset + slope * ends
            self._sources[source].data = {"x0": ends[0], "y0": y0, "x1": ends[1], "y1": y1}

    def _show_marks(self, curves: Curves) -> None:
        low, high = self._axes["xy"].ends
        middle = sum(self._field_axis.ends) / 2
        rows = [
            (
                mark.field_T,
                _mark_height(mark, curves),
                high - (0.05 + 0.075 * index) * (high - low),
                _mark_text(mark),
                "left" if mark.field_T < middle else "right",
            )
            for index, mark in enumerate(curves.marks)
        ]
        columns = ("x", "y", "label_y", "text", "align")
        self._sources["marks"].data = {
            name: [row[index] for row in rows] for index, name in enumerate(columns)
        }

    def _main_figure(self, x_range: Range1d) -> tuple[figure, Range1d]:
        plot = new_figure("resistivity", x_range, "Resistivities")
        hall = Range1d(start=0.0, end=1.0)
        plot.min_border_right = RIGHT_AXIS
        plot.extra_y_ranges = {"xy": hall}
        right = LinearAxis(y_range_name="xy", axis_label="ρxy (Ω)")
        style_axis(right, colours.HALL)
        plot.add_layout(right, "right")
        plot.yaxis[0].axis_label = "ρxx (Ω)"
        style_axis(plot.yaxis[0], colours.LONGITUDINAL)
        self._add_window(plot)
        self._add_points(plot, "xx", colours.LONGITUDINAL)
        self._add_points(plot, "xy", colours.HALL, "xy")
        for name, colour, axis in (
            ("xx", colours.LONGITUDINAL, "default"),
            ("xy", colours.HALL, "xy"),
        ):
            ends = {"x0": "x0", "y0": "y0", "x1": "x1", "y1": "y1", "y_range_name": axis}
            plot.segment(
                **ends, source=self._sources[f"{name}_line"], color=colours.INK, line_width=1,
                line_dash="dotted", line_alpha=0.85,
            )
            plot.segment(**ends, source=self._sources[f"{name}_fit"], color=colours.INK, line_width=1.5)
        self._add_marks(plot)
        return plot, hall

    def _add_window(self, plot: figure) -> None:
        plot.vstrip(
            "x0", "x1", source=self._sources["window"], fill_color=colours.WINDOW,
            fill_alpha=0.10, line_color=None, level="underlay",
        )

    def _add_points(
        self, plot: figure, name: str, colour: str, axis: str = "default", size: float = 4.5
    ) -> None:
        points = plot.scatter(
            "x", "y", source=self._sources[name], y_range_name=axis, size=size, color=colour,
            fill_alpha="alpha", line_color=None,
        )
        plot.scatter(
            "x", "y", angle="angle", source=self._sources[f"{name}_out"], y_range_name=axis,
            marker="triangle", size=9, color=colour,
        )
        shown = [("field", "@x{+0.0000} T"), (f"ρ{name[:2]}", "@y{0.000} Ω")]
        plot.add_tools(HoverTool(renderers=[points], tooltips=shown, visible=False))

    def _add_marks(self, plot: figure) -> None:
        source = self._sources["marks"]
        plot.vspan("x", source=source, line_color=colours.SOFT, line_dash="dashed", line_width=1)
        plot.scatter(
            "x", "y", source=source, y_range_name="xy", marker="diamond", size=13,
            fill_color=colours.CARD, line_color=colours.INK, line_width=1.5,
        )
        plot.text(
            "x", "label_y", text="text", text_align="align", source=source, y_range_name="xy",
            text_font_size="12px", text_color=colours.INK, x_offset=0, text_baseline="middle",
            background_fill_color=colours.CARD, background_fill_alpha=0.85, padding=4,
        )

    def _residual_figure(
        self, which: str, x_range: Range1d, title: str, last: bool = False
    ) -> figure:
        plot = new_figure(f"residual_{which}", x_range, title, last)
        colour = colours.LONGITUDINAL if which == "xx" else colours.HALL
        plot.min_border_right = RIGHT_AXIS
        plot.yaxis.ticker = BasicTicker(desired_num_ticks=3)
        self._add_window(plot)
        plot.hspan(y=[0.0], line_color=colours.INK, line_width=1)
        self._add_points(plot, f"{which}_residual", colour, size=3.5)
        return plot


def _window(curves: Curves) -> tuple[float, float]:
    """The window as magnitudes of field; empty while it is not known."""
    low, high = curves.number("window_low_T"), curves.number("window_high_T")
    return (0.0, -1.0) if low is None or high is None else (low, high)


def _inside(x: Array, window: tuple[float, float]) -> Mask:
    return (np.abs(x) >= window[0]) & (np.abs(x) <= window[1])


def _sides(window: tuple[float, float], x: Array) -> list[tuple[float, float]]:
    """The window as stretches of field on the sides where there are points."""
    low, high = window
    pieces = []
    for sign, reached in ((-1.0, -float(x.min())), (1.0, float(x.max()))):
        if min(high, reached) > low:
            ends = sign * low, sign * min(high, reached)
            pieces.append((min(ends), max(ends)))
    if len(pieces) == 2 and low == 0.0:
        return [(pieces[0][0], pieces[1][1])]
    return pieces


def _strips(window: tuple[float, float], curves: Curves) -> dict[str, Array]:
    x = np.concatenate([curves.xx[0], curves.xy[0]])
    pieces = _sides(window, x) if len(x) else []
    ends = np.array(pieces, dtype=float).reshape(-1, 2).T
    return {"x0": ends[0], "x1": ends[1]}


def _level(curves: Curves) -> tuple[float, float] | None:
    """Offset in ohm and slope in ohm per tesla of the longitudinal fit."""
    rho_0 = curves.number("rho_0_ohm")
    return None if rho_0 is None else (rho_0, 0.0)


def _hall_line(curves: Curves) -> tuple[float, float] | None:
    """Offset in ohm and slope in ohm per tesla of the Hall line."""
    slope, offset = curves.number("hall_slope_ohm_per_T"), curves.number("hall_offset_ohm")
    return None if slope is None else (offset or 0.0, slope)


def _mark_height(mark: Mark, curves: Curves) -> float:
    """Where on the Hall curve a quick reading lies, in ohm."""
    line = _hall_line(curves)
    if line is not None:
        return line[0] + line[1] * mark.field_T
    return HALL_MARK_OHM if mark.kind == "density" else 0.0


def _mark_text(mark: Mark) -> str:
    size = abs(mark.field_T)
    where = f"{size:.3g} T" if size >= 0.1 else f"{1000 * size:.3g} mT"
    if mark.kind == "density":
        return f"ρxy = 6.25 kΩ at {where}: {size:.3g} × 10¹⁵ m⁻²"
    return f"ρxx = ρxy at {where}: {1 / size:.3g} m²/Vs"
