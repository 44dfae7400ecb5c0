"""From the bytes of a file to its lines."""

from __future__ import annotations

import codecs

from acquire.errors import TableError

# The longer ones first: the mark of UTF-32 begins with that of UTF-16.
_MARKS = (
    (codecs.BOM_UTF8, "utf-8-sig"),
    (codecs.BOM_UTF32_LE, "utf-32"),
    (codecs.BOM_UTF32_BE, "utf-32"),
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)
_CONTROLS = frozenset(map(chr, range(32))) - frozenset("\t\n\v\f\r\x1a\x1b")
SAMPLE = 1 << 16  # characters looked at, from the top, for what no text has
MOST_CONTROLS = 0.01  # of them; old instruments leave one in a heading now and then
ZERO_HALF = 0.7  # of every second byte are zero, at least, in numbers of two bytes a character
NO_TEXT = "is not text; export the table as delimited text."


def decode(data: bytes, encoding: str, allowed: str = "") -> tuple[str, str]:
    """The text in some bytes and the encoding that it was in.

    ``auto`` obeys a byte order mark, sees two-byte characters by their zero bytes, and else takes
    UTF-8 if all of it is, Windows-1252 if that can be, Latin-1 at last. ``allowed`` are characters
    that count as text even though they are control characters. Raises TableError for what is
    empty, no text, or in another encoding than was given.
    """
    if not data:
        raise TableError("is empty.")
    text, used = _decoded(data, encoding)
    text = text.removeprefix("\ufeff").rstrip("\x1a")
    if _is_binary(text, allowed):
        raise TableError(NO_TEXT)
    if not text.strip():
        raise TableError("has only blank lines.")
    return text, used


def lines_of(text: str) -> list[str]:
    """Its lines, whichever of CR LF, LF and CR ends them."""
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    return text.split("\n")


def _decoded(data: bytes, encoding: str) -> tuple[str, str]:
    for name in _guesses(data) if encoding == "auto" else (encoding,):
        try:
            return data.decode(name), name
        except (UnicodeError, LookupError, ValueError) as error:
            reason = error
    if encoding == "auto":
        raise TableError(NO_TEXT)
    place = f" (byte {reason.start})" if isinstance(reason, UnicodeDecodeError) else ""
    raise TableError(f'is not text in {encoding}{place}; try encoding = "auto".')


def _guesses(data: bytes) -> tuple[str, ...]:
    for mark, name in _MARKS:
        if data.startswith(mark):
            return (name,)
    head = data[:SAMPLE]
    if b"\0" not in head:
        return ("utf-8", "cp1252", "latin-1")
    even, odd = head[::2].count(0), head[1::2].count(0)
    if max(even, odd) < ZERO_HALF * len(head) / 2:
        raise TableError(NO_TEXT)
    return ("utf-16-le",) if odd > even else ("utf-16-be",)


def _is_binary(text: str, allowed: str) -> bool:
    head = text[:SAMPLE]
    strange = sum(head.count(control) for control in _CONTROLS if control not in allowed)
    return "\0" in head or strange > MOST_CONTROLS * len(head)
