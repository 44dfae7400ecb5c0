"""What browsers send to the page, and what they do not take: nothing grows, nothing is believed."""

from __future__ import annotations

import asyncio
import gc
import weakref
from typing import Any

import pytest
from bokeh.document import Document
from bokeh.models import Button, TextInput, Toggle
from made_run import config, estimates, ramp
from page_server import Served, apart, heard, say, serving, until

from acquire.config import parse
from dashboard.page import door, session
from dashboard.page.incoming import LONGEST_TEXT, may_take
from dashboard.page.store import RunStore

RIG = parse(config(("bar3", "other")))
LARGEST_BUFFER = 4 << 20


@pytest.fixture
def store() -> RunStore:
    made = RunStore("run", RIG)
    for seq, cells in enumerate(estimates(ramp(3.0, 400))):
        made.take("estimates", (seq, *cells))
    return made


def changed(model: Any, attribute: str, new: object) -> dict[str, object]:
    """A browser's message that it has changed something."""
    return {"kind": "ModelChanged", "model": {"id": model.id}, "attr": attribute, "new": new}


def clicked(model: Any) -> dict[str, object]:
    """A browser's message that a button was pressed."""
    values = {"type": "map", "entries": [["model", {"id": model.id}]]}
    data = {"type": "event", "name": "button_click", "values": values}
    return {"kind": "MessageSent", "msg_type": "bokeh_event", "msg_data": data}


@pytest.fixture
def document(store: RunStore) -> Document:
    made = Document()
    session.Session(store).open(made)
    made.add_root(Button(name="press", label="press"))
    made.add_root(TextInput(name="words"))
    made.add_root(Toggle(name="switch"))
    return made


def test_what_a_person_can_do_is_taken(document: Document) -> None:
    plot, chooser = (document.get_model_by_name(name) for name in ("resistivity", "chooser"))
    press, words = (document.get_model_by_name(name) for name in ("press", "words"))
    good = (
        changed(plot.x_range, "start", -0.5), changed(plot.y_range, "end", 7000),
        changed(chooser, "active", 1), changed(words, "value", "yes"), clicked(press),
        changed(document.get_model_by_name("switch"), "active", True),
    )  # fmt: skip
    assert [may_take(event, document) for event in good] == [True] * len(good)


def test_nothing_else_is_taken(document: Document) -> None:
    plot, chooser, verdict = (
        document.get_model_by_name(name) for name in ("resistivity", "chooser", "verdict")
    )
    words = document.get_model_by_name("words")
    axis = plot.x_range
    stranger = {"type": "object", "name": "Div", "id": "p9", "attributes": {"text": "<b>"}}
    bad: list[object] = [
        *(changed(axis, "start", value) for value in (None, "1", True, 1e300, [1.0], {"id": "x"})),
        *(changed(axis, "end", {"type": "number", "value": word}) for word in ("nan", "+inf")),
        *(changed(chooser, "active", value) for value in (2, -1, 0.5, True, None, "0")),
        changed(chooser, "labels", ["x"]), changed(axis, "js_property_callbacks", {}),
        changed(verdict, "text", "<img>"), changed(plot.renderers[0].data_source, "data", {}),
        changed(words, "value", "x" * (LONGEST_TEXT + 1)), changed(words, "value", None),
        clicked(verdict), clicked(chooser),
        {"kind": "ModelChanged", "model": {"id": "nobody"}, "attr": "start", "new": 1.0},
        {"kind": "ModelChanged", "model": stranger, "attr": "start", "new": 1.0},
        {"kind": "ModelChanged", "model": [], "attr": [], "new": 1.0},
        {"kind": "RootAdded", "model": stranger}, {"kind": "RootRemoved", "model": {"id": axis.id}},
        {"kind": "TitleChanged", "title": "mine"}, {"kind": "MessageSent", "msg_type": "x"},
        {"kind": "MessageSent", "msg_type": "bokeh_event", "msg_data": {"name": "button_click"}},
        {"kind": "ColumnsStreamed", "model": {"id": axis.id}, "data": {}}, {}, [], "x", None,
    ]  # fmt: skip
    assert [event for event in bad if may_take(event, document)] == []


def test_forged_values_change_nothing_on_the_server(store: RunStore) -> None:
    async def forge() -> None:
        async with serving(store) as served:
            token = await served.token()
            line = await served.connect(token)
            (page,) = served.documents
            plot = page.get_model_by_name("resistivity")
            verdict = page.get_model_by_name("verdict")
            begin = plot.x_range.start, verdict.text, len(page.roots), page.title
            forged = [
                changed(plot.x_range, "start", 1e300), changed(verdict, "text", "<script>"),
                {"kind": "TitleChanged", "title": "mine"},
                {"kind": "RootAdded", "model": {"type": "object", "name": "Div", "id": "p9"}},
            ]  # fmt: skip
            assert await say(line, "PATCH-DOC", {"events": forged}) == "OK"
            assert (plot.x_range.start, verdict.text, len(page.roots), page.title) == begin
            zoom = [*forged, changed(plot.x_range, "start", 0.5)]
            assert await say(line, "PATCH-DOC", {"events": zoom}) == "OK"
            assert plot.x_range.start == 0.5
            await _refused(served, token, "PATCH-DOC", ["nonsense"])
            await _refused(served, token, "PATCH-DOC", {"events": 5})
            await _refused(served, token, "PUSH-DOC", {"doc": {"roots": [], "title": "x"}})
            await _refused(served, token, "ERROR", {})
            await _refused(served, token, "no such thing", {})
            binary = await served.connect(token)
            await binary.write(b"\0" * 1000)
            assert await binary.read() is None
            deep = await served.connect(token)
            for _ in range(3):
                await deep.write("[" * 100_000)
            assert (await heard(deep))[0]["msgtype"] == "CLOSED"
            assert (await served.get())[0] == 200
        assert store.run().failures == 0

    apart(forge)


async def _refused(served: Served, token: str, msgtype: str, content: object) -> None:
    """A message that no page sends closes the connection and leaves the document as it is."""
    line = await served.connect(token)
    titles = [page.title for page in served.documents]
    assert await say(line, msgtype, content) == "CLOSED"
    assert [page.title for page in served.documents] == titles


def test_two_hundred_requests_make_no_more_pages_than_are_allowed(
    store: RunStore, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(door, "UNUSED_S", 1000)  # none goes while they are counted

    async def flood() -> None:
        async with serving(store, most_pages=3) as served:
            answers = await asyncio.gather(*(served.get() for _ in range(200)))
            assert sorted(status for status, _ in answers) == [200] * 3 + [503] * 197
            assert len(served.server.get_sessions("/")) == 3 == len(served.pages)

    apart(flood)


def test_a_tab_that_stops_reading_makes_its_own_page_wait_and_nothing_grow(
    store: RunStore, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(session, "PULL_MS", 20)

    async def freeze() -> None:
        async with serving(store) as served:
            line = await served.frozen()
            reading = await served.connect()
            frozen, healthy = served.pages
            reader = asyncio.create_task(reading.read_all())
            rows = enumerate(estimates(ramp(6.0, 100_000, 3.0)), 400)

            async def look(times: int) -> None:
                """Give both pages so many new things to show, of which one shows them all."""
                end = healthy._beats + times

                def shown() -> bool:
                    for _ in range(5):
                        seq, cells = next(rows)
                        store.take("estimates", (seq, *cells))
                    return healthy._beats >= end

                await until(shown, "the page that is read from goes on")

            seen = -1
            while seen != frozen._beats:
                seen = frozen._beats
                await look(5)
            waiting = served.buffered(0)
            assert 0 < waiting < LARGEST_BUFFER
            await look(20)
            assert frozen._beats == seen
            assert served.buffered(0) == waiting
            line.close()
            reading.hang_up()
            await reader

    apart(freeze)


def test_of_a_page_that_was_closed_nothing_is_left(
    store: RunStore, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(door, "UNUSED_S", 1)

    async def come_and_go() -> None:
        async with serving(store) as served:
            opened = [await served.connect() for _ in range(2)]
            left = [weakref.ref(page) for page in served.pages]
            served.pages.clear()
            for line in opened:
                await line.close()
            await until(lambda: not served.server.get_sessions("/"), "their sessions end")

            def gone() -> bool:
                gc.collect()
                return all(page() is None for page in left)

            await until(gone, "nothing refers to them")

    apart(come_and_go)
