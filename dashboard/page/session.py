"""One opened page: its models, and the callback that pulls from the store what is new.

Nothing is ever pushed into a session: a browser that does not keep up makes its own callback
wait, and nothing piles up.
"""

from __future__ import annotations

import traceback

from bokeh.document import Document
from bokeh.models import Div, InlineStyleSheet, RadioButtonGroup, Range1d

from dashboard.hold_link import HoldLink
from dashboard.page import list_panel, number_panel, style
from dashboard.page.axes import Follower
from dashboard.page.budget_panel import budget, budget_panel
from dashboard.page.caution_panel import caution_panel
from dashboard.page.field_panel import field_panel
from dashboard.page.hold_panel import HoldPanel
from dashboard.page.html import visible
from dashboard.page.path_plots import PathPlots
from dashboard.page.resistivity_plots import ResistivityPlots
from dashboard.page.store import BarFacts, RunStore
from dashboard.page.sweeps import sweep_panel
from dashboard.quantities import QUANTITIES

PULL_MS = 400

PANELS = (
    "banner", "head", "verdict", *QUANTITIES, "field", "sweeps", "cautions", "budget", "streams",
    "events",
)  # fmt: skip


class Session:
    """The models of one page. ``open`` adds them to a document and keeps them up to date.

    ``link``: to whoever decides about holding the field.
    """

    def __init__(self, store: RunStore, link: HoldLink | None = None) -> None:
        self._store = store
        self._bar = store.bars[0]
        self._shown: tuple[str, int] | None = None
        self._beats = 0
        sheet = InlineStyleSheet(css=style.PANELS)
        self._panels = {name: _panel(name, sheet) for name in PANELS}
        self._hold = HoldPanel(store.rig, link, sheet)
        self._beat = Div(name="beat", text="0", visible=False, disable_math=True)
        self._chooser = RadioButtonGroup(
            name="chooser",
            labels=list(store.bars),
            active=0,
            visible=len(store.bars) > 1,
            stylesheets=[InlineStyleSheet(css=style.CHOOSER)],
        )
        self._chooser.on_change("active", self._choose)
        field_axis = Range1d(start=0.0, end=1.0)
        self._field_axis = Follower(field_axis)
        self._resistivities = ResistivityPlots(self._field_axis)
        self._paths = PathPlots(store.rig, field_axis)

    def open(self, document: Document) -> None:
        """Put the page into a document."""
        models = [*self._panels.values(), *self._hold.roots, self._beat, self._chooser]
        with document.models.freeze():  # else each root looks through all models again
            for model in (*models, *self._resistivities.figures, *self._paths.figures):
                document.add_root(model)
        document.title = f"rampside · {visible(self._store.run_id)}"
        document.template = style.TEMPLATE
        document.template_variables["style"] = style.PAGE
        document.template_variables["script"] = style.SCRIPT
        self.pull()
        document.add_periodic_callback(self.pull, PULL_MS)

    def pull(self) -> None:
        """Show what is new. Never raises: a failure is counted and shown, and tried again."""
        try:
            self._update()
        except Exception as error:  # noqa: BLE001  whatever it is, the person must see it
            self._store.fail(f"showing the run: {error!r}")
            if self._store.run().failures == 1:
                traceback.print_exc()
        self._panels["banner"].text = list_panel.banner_panel(self._store.run())
        self._beats += 1
        self._beat.text = str(self._beats)

    def _choose(self, attribute: str, old: object, new: object) -> None:
        """Another Hall bar. The number comes from a browser, so it may be anything."""
        if isinstance(new, int) and 0 <= new < len(self._store.bars):
            self._bar = self._store.bars[new]
            self.pull()

    def _update(self) -> None:
        bar, run, rig = self._store.bar(self._bar), self._store.run(), self._store.rig
        panels = self._panels
        panels["head"].text = list_panel.head_panel(self._store.run_id, rig, run)
        panels["verdict"].text = number_panel.verdict_panel(bar, run)
        for column in QUANTITIES:
            panels[column].text = number_panel.number_panel(column, bar, rig)
        panels["field"].text = field_panel(bar, run, rig)
        panels["sweeps"].text = sweep_panel(bar.curves.sweeps, run.now_s is not None)
        panels["cautions"].text = caution_panel(bar)
        panels["budget"].text = budget_panel(budget(bar.curves, self._store.systematic[bar.name]))
        panels["events"].text = list_panel.event_panel(run, len(self._store.bars) > 1)
        panels["streams"].text = list_panel.stream_panel(run)
        self._hold.update(run.now_s is not None, self._store.all_stable(), run.field)
        self._show_curves(bar)

    def _show_curves(self, bar: BarFacts) -> None:
        shown = (bar.name, bar.curves.version)
        if shown == self._shown:
            return
        if self._shown is not None and self._shown[0] != bar.name:
            for plots in (self._field_axis, self._resistivities, self._paths):
                plots.forget()
        self._shown = shown
        fields = [x for x in (bar.curves.xx[0], bar.curves.xy[0]) if x.size]
        if fields:
            low, high = min(x.min() for x in fields), max(x.max() for x in fields)
            self._field_axis.follow(float(low), float(high))
        self._resistivities.update(bar.curves)
        self._paths.update(bar.curves)


def _panel(name: str, sheet: InlineStyleSheet) -> Div:
    return Div(
        name=name, text="", disable_math=True, stylesheets=[sheet], margin=0,
        sizing_mode="stretch_width",
    )  # fmt: skip
