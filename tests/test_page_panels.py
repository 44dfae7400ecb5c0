"""The words of the page, its guard against markup, and what a failing session shows."""

from __future__ import annotations

import doctest
import re
from collections.abc import Iterator

import pytest
from bokeh.document import Document
from bokeh.models import Div
from made_run import config, estimates, ramp

from acquire.config import parse
from dashboard.page import html
from dashboard.page.caution_panel import caution_panel
from dashboard.page.field_panel import field_panel
from dashboard.page.html import Html, div, element
from dashboard.page.list_panel import banner_panel, clock, event_panel, stream_panel
from dashboard.page.number_panel import number_panel, verdict_panel
from dashboard.page.session import PANELS, Session
from dashboard.page.store import RunStore

RIG = parse(config(("bar3", "other")))
HARM = "<script>alert(1)</script>"


@pytest.fixture
def store() -> RunStore:
    return RunStore("run", RIG)


def fill(store: RunStore, points: int, top_T: float = 3.0) -> None:
    for seq, cells in enumerate(estimates(ramp(top_T, points))):
        store.take("estimates", (seq, *cells))


def words(panel: Html) -> str:
    return re.sub(r"\s+", " ", re.sub(r"<[^>]*>", " ", panel)).strip()


def text_of(document: Document, name: str) -> str:
    model = document.get_model_by_name(name)
    assert isinstance(model, Div)
    return model.text


def test_text_is_escaped_and_markup_is_not() -> None:
    assert doctest.testmod(html).failed == 0
    assert div("a", HARM, element("b", "x")) == (
        '<div class="a">&lt;script&gt;alert(1)&lt;/script&gt;<b>x</b></div>'
    )
    assert element("td", "", title='"><script>') == '<td title="&quot;&gt;&lt;script&gt;"></td>'


def test_nothing_known_is_said_in_words(store: RunStore) -> None:
    store.begin("live", lambda: 1.0)
    bar, run = store.bar("bar3"), store.run()
    assert words(verdict_panel(bar, run)).startswith("Not known yet waiting for the first")
    for column in ("sheet_density_per_m2", "mobility_m2_per_V_s", "scattering_time_s"):
        said = words(number_panel(column, bar, RIG))
        assert "not known yet" in said and "wanted to 1 %" in said
    assert "no field yet" in words(field_panel(bar, run, RIG))
    assert not re.search(r"nan|None|\b0\.0", words(number_panel("scattering_time_s", bar, RIG)))


def test_a_number_is_told_with_its_units_interval_and_distance(store: RunStore) -> None:
    fill(store, 300)
    said = words(number_panel("sheet_density_per_m2", store.bar("bar3"), RIG))
    assert re.fullmatch(
        r"sheet density 2\.\d+ \(\d+\) × 10¹⁵ m⁻² = 2\.\d+\(\d+\) × 10¹¹ cm⁻² "
        r"± 0\.\d+ % wanted 1 % ✓ met 95 % interval 2\.\d+ to 2\.\d+ × 10¹⁵ m⁻²",
        said,
    )


def test_the_verdict_says_what_is_missing_or_since_when(store: RunStore) -> None:
    fill(store, 60, top_T=0.5)
    said = words(verdict_panel(store.bar("bar3"), store.run()))
    assert said.startswith("Converging sheet density known to 3 %, wanted 1 %")
    assert said.endswith("60 field points · window 0 to 0.5 T · electrons")
    store.begin("live", lambda: 24.0)
    said = words(field_panel(store.bar("bar3"), store.run(), RIG))
    assert re.search(r"to the target about .* s, near \d\.\d\d T", said)
    assert re.search(r"between \d\.\d\d and \d\.\d\d T", said)
    store.begin("ended", None)
    assert "target not met" in words(field_panel(store.bar("bar3"), store.run(), RIG))


def test_a_stopped_field_is_shown_as_the_last_one(store: RunStore) -> None:
    store.take("readings/magnet", (0, 1.0, 0.01, "ok", None, -1.5))
    store.begin("live", lambda: 21.0)
    panel = field_panel(store.bar("bar3"), store.run(), RIG)
    assert words(panel).startswith("last field −1.5000 T ▲ 20 s old")
    assert 'class="card field old"' in panel


def test_cautions_and_events_tell_their_sentence(store: RunStore) -> None:
    fill(store, 300)
    store.take("events", (0, 65.0, "caution", "bar3", "oscillations", f"wave {HARM}", 0, None))
    store.take("events", (1, 3725.0, "note", None, "note", "filled helium", 0, None))
    cautions, events = caution_panel(store.bar("bar3")), event_panel(store.run(), True)
    assert HARM not in cautions + events
    assert "Also seen: oscillations oscillations wave &lt;script&gt;" in words(cautions)
    assert words(events).startswith("1:02:05 note filled helium 01:05 caution bar3 oscillations")
    assert clock(59.9) == "00:59"


def test_streams_are_told_with_shape_word_age_and_count(store: RunStore) -> None:
    store.identify({"magnet": HARM})
    for seq in range(1200):
        store.take("readings/magnet", (seq, 0.1 * seq, 0.01, "ok", None, 1.0))
    store.begin("live", lambda: 120.3)
    panel = stream_panel(store.run())
    assert HARM not in panel
    assert "magnet &lt;script&gt;alert(1)&lt;/script&gt; ● running 0.4 s 1 200" in words(panel)
    assert "lockin_xx ▲ nothing yet 0" in words(panel)


def test_a_crashed_run_is_told(store: RunStore) -> None:
    assert banner_panel(store.run()) == ""
    store.begin("crashed", None)
    assert "ended badly" in banner_panel(store.run())


@pytest.fixture
def page(store: RunStore) -> Iterator[tuple[Document, Session]]:
    document = Document()
    session = Session(store)
    session.open(document)
    yield document, session
    document.clear()


def test_a_callback_that_fails_shows_a_banner_and_goes_on(
    page: tuple[Document, Session], store: RunStore, monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:  # fmt: skip
    document, session = page
    assert text_of(document, "banner") == ""
    with monkeypatch.context() as broken:
        broken.setattr(store, "bar", lambda name: 1 / 0)
        session.pull()
        session.pull()
    assert "failed 2 times" in text_of(document, "banner")
    assert "ZeroDivisionError" in text_of(document, "banner")
    assert capsys.readouterr().err.count("Traceback") == 1  # told once, not at every look
    fill(store, 10)
    session.pull()
    assert "10 field points" in text_of(document, "verdict")


def test_a_browser_can_choose_no_hall_bar_that_is_not_there(
    page: tuple[Document, Session], store: RunStore
) -> None:
    document, session = page
    fill(store, 30)
    session.pull()
    chooser = document.get_model_by_name("chooser")
    assert chooser is not None and chooser.labels == ["bar3", "other"]  # type: ignore[attr-defined]
    for number in (99, -1, None, 1):
        chooser.active = number  # type: ignore[attr-defined]
        shown = "0 field points" if number == 1 else "30 field points"
        assert shown in text_of(document, "verdict")
    assert store.run().failures == 0


def test_each_part_of_the_template_is_there(page: tuple[Document, Session]) -> None:
    document, _ = page
    wanted = set(re.findall(r"roots\.(\w+)", str(document.template)))
    assert wanted == {root.name for root in document.roots}
    assert set(PANELS) <= wanted
