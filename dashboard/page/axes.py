"""What all plots of the page have in common: figure, axes that hold still, points off the scale."""

from __future__ import annotations

import math

import numpy as np
from bokeh.models import BasicTickFormatter, Range1d
from bokeh.models.annotations import Title
from bokeh.plotting import figure

from dashboard.page import colours
from dashboard.page.scales import Ends, steady
from dashboard.page.thinning import Array

FONT = "Inter, 'Segoe UI', 'Helvetica Neue', Helvetica, Arial, 'Liberation Sans', sans-serif"
TOOLS = "pan,box_zoom,wheel_zoom,reset,save"


class Follower:
    """Keeps an axis on its data in calm steps, unless the person has zoomed; reset hands it back."""

    def __init__(self, axis: Range1d) -> None:
        self.axis = axis
        self._ends: Ends | None = None

    @property
    def ends(self) -> Ends:
        """Where the axis would begin and end by itself."""
        return self._ends or (0.0, 1.0)

    def follow(self, low: float, high: float) -> None:
        """Have the axis hold ``low`` to ``high``."""
        begin, end = steady(low, high, self._ends)
        if self._untouched():
            self.axis.update(start=begin, end=end)
        self.axis.update(reset_start=begin, reset_end=end)
        self._ends = begin, end

    def forget(self) -> None:
        """Begin anew, as for other data."""
        if self._ends is not None:
            self.axis.update(start=self._ends[0], end=self._ends[1])
        self._ends = None

    def _untouched(self) -> bool:
        if self._ends is None:
            return True
        tolerance = 1e-9 * (self._ends[1] - self._ends[0])
        shown = (self.axis.start, self.axis.end)
        return all(
            is_number(a) and math.isclose(a, b, rel_tol=0, abs_tol=tolerance)
            for a, b in zip(shown, self._ends)
        )


def is_number(value: object) -> bool:
    """Whether it is a finite number. A browser may send anything."""
    return isinstance(value, int | float) and math.isfinite(value)


def new_figure(name: str, x_range: Range1d, title: str, last: bool = False) -> figure:
    """A figure in the page's style; only the last one of a column names the field axis."""
    plot = figure(
        name=name,
        x_range=x_range,
        y_range=Range1d(start=0.0, end=1.0),
        tools=TOOLS,
        active_drag=None,
        sizing_mode="stretch_both",
        min_border_left=64,
        min_border_right=16,
        min_border_top=4,
        min_border_bottom=4,
        background_fill_color=colours.CARD,
        border_fill_color=colours.CARD,
        outline_line_color=colours.LINE,
        lod_threshold=None,
    )
    plot.toolbar.logo = None
    plot.toolbar.autohide = True
    plot.toolbar_inner = True
    plot.title = Title(
        text=title,
        text_font=FONT,
        text_font_size="12.5px",
        text_font_style="bold",
        text_color=colours.INK,
        standoff=4,
    )
    plot.grid.grid_line_color = colours.GRID
    for axis in plot.axis:
        style_axis(axis)
    plot.xaxis.major_label_text_font_size = "12px" if last else "0px"
    plot.xaxis.axis_label = "field (T)" if last else None
    return plot


def style_axis(axis: object, colour: str = colours.SOFT) -> None:
    """Give an axis the page's look."""
    axis.update(  # type: ignore[attr-defined]
        axis_line_color=None,
        major_tick_line_color=colours.LINE,
        minor_tick_line_color=None,
        major_tick_in=0,
        major_label_text_font=FONT,
        major_label_text_font_size="12px",
        major_label_text_color=colour,
        axis_label_text_font=FONT,
        axis_label_text_font_size="12.5px",
        axis_label_text_font_style="normal",
        axis_label_text_color=colour,
        axis_label_standoff=6,
        formatter=BasicTickFormatter(use_scientific=False),
    )


def off_scale(x: Array, y: Array, ends: Ends) -> dict[str, object]:
    """Points beyond the ends of an axis, moved to its edge, with a marker that points outwards."""
    below, above = y < ends[0], y > ends[1]
    out = below | above
    return {
        "x": x[out],
        "y": np.where(below[out], ends[0], ends[1]),
        "angle": np.where(below[out], np.pi, 0.0),
    }
