"""The page in a real browser, served by a real process, fed by real publishers."""

from __future__ import annotations

import json
import os
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from made_run import MadeRun, PageProcess, estimates, ramp
from playwright.sync_api import Browser, ConsoleMessage, Dialog, Page, Request, expect

SOON_MS = 15_000
SCRIPT = "<script>window.harmed=1</script><img src=x onerror='window.harmed=1'>"
PICTURES = {"resistivity": "x", "residual_xx": "x", "path_mobility": "xs"}

expect.set_options(timeout=SOON_MS)


class Watched:
    """A page in the browser, and everything that it should not do."""

    def __init__(self, page: Page) -> None:
        self.page = page
        self.complaints: list[str] = []
        self.foreign: list[str] = []
        self.dialogs: list[str] = []
        page.on("console", self._console)
        page.on("pageerror", lambda error: self.complaints.append(str(error)))
        page.on("request", self._request)
        page.on("dialog", self._dialog)

    def section(self, name: str) -> Any:
        """A part of the page, by its class."""
        return self.page.locator(f"section.{name}")

    def row(self, stream: str) -> Any:
        """The row of a stream."""
        rows = self.section("streams").locator("tr:not(.aside)")
        return rows.filter(has=self.page.get_by_text(stream, exact=True))

    def points(self, plot: str) -> int:
        """How many points (or lines) the fullest glyph of a plot has."""
        return int(
            self.page.evaluate(
                """([name, column]) => Math.max(0, ...Bokeh.documents[0].get_model_by_name(name)
                .renderers.map(r => (r.data_source.data[column] ?? []).length))""",
                [plot, PICTURES[plot]],
            )
        )

    def axis(self, plot: str, which: str = "x_range") -> list[float]:
        """Both ends of a plot's axis."""
        script = """([name, which]) => {
            const range = Bokeh.documents[0].get_model_by_name(name)[which];
            return [range.start, range.end];
        }"""
        found: list[float] = self.page.evaluate(script, [plot, which])
        return found

    def zoom(self, plot: str, low: float, high: float) -> None:
        """Zoom a plot's field axis as a person does with a tool, and let the server hear of it."""
        self.page.evaluate(
            """([name, low, high]) => Bokeh.documents[0].get_model_by_name(name)
            .x_range.setv({start: low, end: high})""",
            [plot, low, high],
        )
        beat = "Number(Bokeh.documents[0].get_model_by_name('beat').text)"
        self.page.wait_for_function(
            "last => Number(Bokeh.documents[0].get_model_by_name('beat').text) >= last + 3",
            arg=self.page.evaluate(beat),
        )

    def _console(self, message: ConsoleMessage) -> None:
        if message.type in ("error", "warning"):
            self.complaints.append(message.text)

    def _dialog(self, dialog: Dialog) -> None:
        self.dialogs.append(dialog.message)
        dialog.dismiss()

    def _request(self, request: Request) -> None:
        if not request.url.startswith(("http://127.0.0.1:", "data:", "blob:")):
            self.foreign.append(request.url)


@contextmanager
def opened(browser: Browser, address: str, spotless: bool = True) -> Iterator[Watched]:
    """A page of its own, which must complain of nothing and ask no other host for anything."""
    with browser.new_context(viewport={"width": 1440, "height": 790}) as context:
        watched = Watched(context.new_page())
        watched.page.goto(address)
        expect(watched.section("verdict")).to_contain_text("field point")
        yield watched
        assert watched.foreign == []
        if spotless:
            assert watched.complaints == []


@contextmanager
def served(run: Path) -> Iterator[PageProcess]:
    """The page's process, which must end in order and have nothing to complain about."""
    process = PageProcess(run)
    try:
        yield process
    except BaseException:
        process.kill()
        raise
    assert process.end() == 0
    assert process.unread() == []
    assert "".join(process.errors) == ""


def assert_in_sight(page: Page) -> None:
    """Every part of the page is within a laptop's screen, and large enough to be read."""
    boxes = page.evaluate(
        """JSON.stringify([...document.querySelectorAll('section')]
        .filter(s => getComputedStyle(s).display !== 'none')
        .map(s => [s.className, s.getBoundingClientRect().toJSON()]))"""
    )
    for name, box in json.loads(boxes):
        assert box["right"] <= 1440 and box["bottom"] <= 790, name
        if "plot" in name or name in ("verdict", "number", "field"):
            assert box["width"] > 150 and box["height"] > 60, name


def test_numbers_appear_and_narrow_as_rows_arrive_and_a_reload_shows_the_whole_run(
    browser: Browser, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    rows = list(estimates(ramp(3.0, 300)))
    with MadeRun(tmp_path) as made:
        made.estimate(*rows[:3])
        made.readings(0.02)
        with served(made.path) as process, opened(browser, process.address()) as seen:
            expect(seen.section("verdict")).to_contain_text("Not known yet")
            for name in ("sheet density", "mobility", "scattering time"):
                card = seen.section("number").filter(has_text=name)
                expect(card).to_contain_text("not known yet")
            expect(seen.section("field")).to_contain_text("+0.0200T")
            assert "NaN" not in seen.page.locator("main").inner_text()
            assert seen.points("resistivity") == 3

            made.estimate(*rows[3:60])
            made.event("caution", "noise_high", "the readings scatter more than they should")
            expect(seen.section("verdict")).to_contain_text("Converging")
            expect(seen.section("verdict")).to_contain_text("60 field points")
            density = seen.section("number").nth(0)
            expect(density).to_contain_text("× 10¹⁵ m⁻²")
            expect(density).to_contain_text("× 10¹¹ cm⁻²")
            expect(density).to_contain_text("too wide")
            expect(seen.section("events")).to_contain_text("scatter more than they should")
            expect(seen.section("field")).to_contain_text("about")
            wait_for(lambda: seen.points("path_mobility") > 0, "the mobility's path")
            wide = seen.axis("path_mobility", "y_range")

            made.estimate(*rows[60:])
            made.readings(3.0)
            expect(seen.section("verdict")).to_contain_text("Stable")
            expect(seen.section("verdict")).to_contain_text("good enough since +")
            expect(density).to_contain_text("✓ met")
            expect(seen.section("field")).to_contain_text("target met")
            wait_for(lambda: seen.points("resistivity") == 300, "all points")
            narrow = seen.axis("path_mobility", "y_range")
            assert narrow[1] - narrow[0] < wide[1] - wide[0]

            seen.page.reload()
            expect(seen.section("verdict")).to_contain_text("300 field points")
            wait_for(lambda: seen.points("resistivity") == 300, "the whole run after a reload")
            wait_for(lambda: seen.points("residual_xx") == 300, "its residuals")
            expect(seen.section("events")).to_contain_text("scatter more than they should")


def test_a_stream_that_stops_looks_stopped_and_comes_back(
    browser: Browser, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    ended = threading.Event()
    with MadeRun(tmp_path) as made:
        made.estimate(*estimates(ramp(1.0, 20), seconds_per_point=0.01))
        made.readings(1.0)

        def go_on() -> None:
            while not ended.wait(0.2):
                made.reading("magnet", 1.0)
                made.reading("lockin_xy", None, "no_answer", "no reply within 1000 ms")

        thread = threading.Thread(target=go_on)
        with served(made.path) as process, opened(browser, process.address()) as seen:
            thread.start()
            try:
                expect(seen.row("magnet")).to_have_class("good")
                expect(seen.row("lockin_xy")).to_contain_text("▲ no answer")
                expect(seen.section("streams")).to_contain_text("no reply within 1000 ms")
                expect(seen.row("lockin_xx")).to_contain_text("▲ stopped")
                expect(seen.row("lockin_xx")).to_have_class("warning")
                expect(seen.row("estimates")).to_contain_text("▲ stopped")
                expect(seen.section("verdict")).to_contain_text("no new field point for")
                first = seen.row("lockin_xx").inner_text()
                wait_for(lambda: seen.row("lockin_xx").inner_text() != first, "its age grows")
                expect(seen.row("magnet")).to_have_class("good")
            finally:
                ended.set()
                thread.join()
            made.reading("lockin_xx", 1e-5)
            expect(seen.row("lockin_xx")).to_have_class("good")


def test_what_instruments_and_people_say_is_shown_as_text(browser: Browser, tmp_path: Path) -> None:
    turned = f"\u202e{SCRIPT}\u2066\x1b[31m"
    with MadeRun(tmp_path, sample=turned) as made:
        made.estimate(*estimates(ramp(1.0, 20)))
        made.identify("magnet", turned)
        made.reading("magnet", None, "bad_reply", SCRIPT)
        made.event("note", "note", f"$$x$$ {turned}", None)
        made.event("note", "note", "long" * 15_000, None)
        made.event("caution", "oscillations", SCRIPT)
        made.event(SCRIPT, SCRIPT, SCRIPT)
        with served(made.path) as process, opened(browser, process.address()) as seen:
            for place in ("streams", "events", "headline"):
                expect(seen.section(place)).to_contain_text(SCRIPT)
            expect(seen.section("headline")).to_contain_text("\\u202e<script>")
            expect(seen.section("events")).to_contain_text("$$x$$ \\u202e<script>")
            expect(seen.section("events")).to_contain_text("… (60000 characters)")
            assert_harmless(seen)
            for plot in seen.page.locator("section.plot").all():  # hovering raises what hangs on it
                plot.hover()
            assert_harmless(seen)


def test_what_a_folder_and_a_configuration_are_called_is_shown_as_text(
    browser: Browser, tmp_path: Path
) -> None:
    """A run that came from elsewhere: a megabyte of markup as its sample, a name to fit."""
    long = SCRIPT + "\u202e" + SCRIPT * (2**20 // len(SCRIPT))
    with MadeRun(tmp_path, live=False, sample=long) as made:
        made.estimate(*estimates(ramp(1.0, 20)))
    name = b"</title><script>window.harmed=1<script><img src=x onerror=window.harmed=1>\xff"
    path = Path(os.fsdecode(os.fsencode(tmp_path) + b"/" + name.replace(b"/", b"")))
    made.path.rename(path)
    with served(path) as process, opened(browser, process.address()) as seen:
        expect(seen.section("headline")).to_contain_text("<img src=x onerror=window.harmed=1>\\udcff")
        expect(seen.section("headline")).to_contain_text("characters)")
        assert "<img src=x onerror=window.harmed=1>" in seen.page.title()
        assert_harmless(seen)
        assert len(seen.page.content()) < 300_000


def assert_harmless(seen: Watched) -> None:
    """Nothing that somebody said has become a part of the page, or a window over it."""
    assert seen.dialogs == []
    assert seen.page.evaluate("window.harmed ?? 0") == 0
    assert seen.page.evaluate(
        """(() => {
            const within = (root) => [...root.querySelectorAll('*')].flatMap(
                e => e.shadowRoot ? [e, ...within(e.shadowRoot)] : [e]);
            return within(document).filter(
                e => e.matches('img, iframe, object, embed, a[href^="javascript"]')
                || (e.matches('script') && !e.nonce && !e.src)
                || [...e.attributes].some(a => a.name.startsWith('on'))).map(e => e.outerHTML);
        })()"""
    ) == []


def test_a_long_run_that_has_ended_is_shown_from_disk_in_few_points(
    browser: Browser, tmp_path: Path
) -> None:
    rows = [list(row) for row in estimates(ramp(12.0, 20_000))]
    rows[12_345][3] = 1e5  # a wild point
    made = MadeRun(tmp_path, live=False)
    made.estimate(*map(tuple, rows))
    made.readings(12.0)
    made.end()
    with served(made.path) as process, opened(browser, process.address()) as seen:
        expect(seen.section("headline")).to_contain_text("ended after")
        expect(seen.section("verdict")).to_contain_text("20\u2009000 field points")
        expect(seen.section("field")).to_contain_text("+12.0000T")
        expect(seen.row("magnet")).to_contain_text("■ ended")
        assert 500 < seen.points("resistivity") < 4000
        assert seen.points("path_mobility") == 1  # one sweep
        low, high = seen.axis("resistivity")
        assert low <= 0.0 and 12.0 <= high < 18.0
        assert seen.axis("resistivity", "y_range")[1] < 1e4  # the wild point is at the edge
        wild = """Bokeh.documents[0].get_model_by_name('resistivity').renderers
            .filter(r => r.glyph.marker?.value === 'triangle')
            .flatMap(r => [...r.data_source.data.x])"""
        assert seen.page.evaluate(wild) == pytest.approx([rows[12_345][2]])
        assert_in_sight(seen.page)


def test_a_run_may_end_and_its_page_too_while_it_is_looked_at(
    browser: Browser, tmp_path: Path
) -> None:
    bars = ("bar3", "other")
    rows = {
        bar: list(estimates(ramp(2.0, 40), bar, density))
        for bar, density in zip(bars, (2.4e15, 3.1e16))
    }
    with MadeRun(tmp_path, bars=bars) as made:
        for both in zip(*rows.values()):
            made.estimate(*both)
        process = PageProcess(made.path)
        with opened(browser, process.address(), spotless=False) as seen:
            expect(seen.section("headline")).to_contain_text("live")
            expect(seen.section("number").nth(0)).to_contain_text("2.4")
            seen.page.get_by_text("other", exact=True).click()
            expect(seen.section("number").nth(0)).to_contain_text("31.")
            seen.zoom("resistivity", 0.5, 0.6)
            made.estimate(*estimates(ramp(2.2, 41), "other", 3.1e16))
            made.end()
            expect(seen.section("headline")).to_contain_text("■ ended after")
            expect(seen.section("verdict")).to_contain_text("41 field points")
            assert seen.axis("resistivity") == [0.5, 0.6]  # what a person chose stays
            assert seen.complaints == []
            assert_looks_old_without_its_server(seen, process, made.path)


def assert_looks_old_without_its_server(seen: Watched, process: PageProcess, run: Path) -> None:
    """The page says that it is old while its server is gone, and comes back with a new one."""
    port = int(process.address().rstrip("/").rpartition(":")[2])
    assert process.end() == 0
    assert "".join(process.errors) == ""  # also with a page that is open
    again = PageProcess(run, port)
    try:
        expect(seen.page.locator("#silent")).to_contain_text("what is shown here is old")
        expect(seen.page.locator("#silent")).to_be_hidden()
        expect(seen.section("headline")).to_contain_text("■ ended after")
    finally:
        assert again.end() == 0
