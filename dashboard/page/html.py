"""Making HTML so that text stays text: only what was made here is markup.

Text comes from instruments, configurations, tables and people, and may be anything: markup,
characters that turn the reading direction round or can't be seen, a million letters.
"""

from __future__ import annotations

import html
import unicodedata

LONGEST = 1200
"""Characters shown of one piece of text; a sentence for a person has fewer."""


class Html(str):
    """A piece of markup made by :func:`element`."""

    __slots__ = ()


def visible(text: str) -> str:
    """Text in which every character can be seen, and which has an end.

    Controls, also those that turn the direction of reading, stand there as ``\\u202e``; spaces of
    all kinds are kept.

    >>> visible("a\\u202eb")
    'a\\\\u202eb'
    """
    cut = text[:LONGEST]
    if not cut.isprintable():
        cut = "".join(map(_seen, cut))
    return cut if len(text) <= LONGEST else f"{cut}… ({len(text)} characters)"


def element(name: str, /, *content: str, **attributes: str) -> Html:
    """An element. What is not :class:`Html` is escaped; ``class_`` stands for ``class``.

    >>> element("b", "<script>", class_="loud")
    '<b class="loud">&lt;script&gt;</b>'
    """
    written = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{html.escape(visible(value))}"'
        for key, value in attributes.items()
        if value
    )
    inside = "".join(
        piece if isinstance(piece, Html) else html.escape(visible(piece)) for piece in content
    )
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


def _seen(character: str) -> str:
    if character.isprintable() or unicodedata.category(character) == "Zs":
        return character
    code = ord(character)
    return f"\\u{code:04x}" if code <= 0xFFFF else f"\\U{code:08x}"


NOTHING = Html("")
