"""Making HTML so that text stays text: only what was made here is markup."""

from __future__ import annotations

import html


class Html(str):
    """A piece of markup made by :func:`element`."""

    __slots__ = ()


def element(name: str, *content: str, **attributes: str) -> Html:
    """An element. What is not :class:`Html` is escaped; ``class_`` stands for ``class``.

    >>> element("b", "<script>", class_="loud")
    '<b class="loud">&lt;script&gt;</b>'
    """
    written = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{html.escape(value)}"'
        for key, value in attributes.items()
        if value
    )
    inside = "".join(piece if isinstance(piece, Html) else html.escape(piece) for piece in content)
    return Html(f"<{name}{written}>{inside}</{name}>")


def div(class_: str, *content: str) -> Html:
    """A block with a class."""
    return element("div", *content, class_=class_)


def span(class_: str, *content: str) -> Html:
    """A run of text with a class."""
    return element("span", *content, class_=class_)


def join(*pieces: Html) -> Html:
    """Pieces one after the other."""
    return Html("".join(pieces))


NOTHING = Html("")
