"""What a browser may change: values of its own controls, each looked at before it is taken.

A browser, or whoever poses as one, can send a change of any property of any part of its page. Taken
are those that the page offers a person, with values that make sense; all others are passed over.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from bokeh.document import Document
from bokeh.model import Model
from bokeh.models import Button, RadioButtonGroup, Range1d, TextInput, Toggle
from bokeh.protocol.message import Message
from bokeh.server.views.ws import WSHandler

from dashboard.page.axes import is_number

WANTED = ("PULL-DOC-REQ", "SERVER-INFO-REQ", "PATCH-DOC")
LARGEST_NUMBER = 1e12  # in the unit of any axis; what is larger is no zoom of a person
LONGEST_TEXT = 500
MOST_EVENTS = 200  # a change of all axes at once has some twenty


def _is_end(model: Any, value: object) -> bool:
    return is_number(value) and not isinstance(value, bool) and abs(value) <= LARGEST_NUMBER  # type: ignore[arg-type]


def _is_choice(model: Any, value: object) -> bool:
    whole = isinstance(value, int) and not isinstance(value, bool)
    return whole and 0 <= value < len(model.labels)  # type: ignore[operator]


def _is_text(model: Any, value: object) -> bool:
    return isinstance(value, str) and len(value) <= LONGEST_TEXT


def _is_switch(model: Any, value: object) -> bool:
    return isinstance(value, bool)


_CHANGES: Mapping[tuple[type[Model], str], Callable[[Any, object], bool]] = {
    (Range1d, "start"): _is_end,
    (Range1d, "end"): _is_end,
    (RadioButtonGroup, "active"): _is_choice,
    (TextInput, "value"): _is_text,
    (Toggle, "active"): _is_switch,
}


def may_take(event: object, document: Document) -> bool:
    """Whether one event of a change that a browser sent is to be carried out."""
    if not isinstance(event, dict):
        return False
    if event.get("kind") == "ModelChanged":
        model = _model(event.get("model"), document)
        fits = _CHANGES.get((type(model), str(event.get("attr")))) if model is not None else None
        return fits is not None and fits(model, event.get("new"))
    if event.get("kind") == "MessageSent" and event.get("msg_type") == "bokeh_event":
        return _is_click(event.get("msg_data"), document)
    return False


def _is_click(data: object, document: Document) -> bool:
    """A person pressed one of the page's own buttons."""
    if not isinstance(data, dict) or data.get("name") != "button_click":
        return False
    values = data.get("values")
    entries = values.get("entries") if isinstance(values, dict) else None
    if not isinstance(entries, list) or len(entries) != 1:
        return False
    (entry,) = entries
    if not isinstance(entry, list) or len(entry) != 2 or entry[0] != "model":
        return False
    return isinstance(_model(entry[1], document), Button)


def _model(reference: object, document: Document) -> Model | None:
    """The part of the page that is meant; a browser can't bring one of its own."""
    if not isinstance(reference, dict) or set(reference) != {"id"}:
        return None
    name = reference["id"]
    return document.models.get_by_id(name) if isinstance(name, str) else None


class CarefulSocket(WSHandler):
    """The page's end of a websocket: passes on what may be taken, refuses what makes no sense."""

    async def on_message(self, fragment: str | bytes) -> None:
        """Take a piece of a message. Pages send text only; there is no end to pieces of others."""
        if isinstance(fragment, bytes):
            self.close(1003, "text only")
            return
        await super().on_message(fragment)

    async def _handle(self, message: Message[Any]) -> Any | None:
        content = message.content if isinstance(message.content, dict) else {}
        events = content.get("events") if message.msgtype == "PATCH-DOC" else []
        if message.msgtype not in WANTED or self.connection is None or not isinstance(events, list):
            self.close(1008, "not expected here")
            return None
        if message.msgtype == "PATCH-DOC":
            document = self.connection.session.document
            taken = [event for event in events[:MOST_EVENTS] if may_take(event, document)]
            message.content["events"] = taken
        return await super()._handle(message)
