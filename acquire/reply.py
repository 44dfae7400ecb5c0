"""What an instrument's replies say, read strictly; pure text to numbers.

A field that is used must be a number from its first to its last character (blanks around it
aside), in the plain notation of IEEE 488.2: ``-1.25E-06``. Everything else is told apart:

- The instrument says that it can't measure: one of the configured ``overload_texts``, ``INF``,
  or at least 9.9e37 in magnitude, which is how SCPI (1999.0, volume 1, 7.2.1.4 and 7.2.1.5)
  writes infinity and "not a number". These are overloads, whatever the configuration says.
- ``NAN`` as text: a bad reply, but one that was sent in order.
- Anything else: a bad reply after which the line can't be trusted, since half a reply or another
  question's answer looks just so.

``overload_above`` (a magnitude), ``lowest`` and ``highest`` are in the value's unit: they are
compared with the number as read times ``scale``.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

from acquire.config.reader import ReaderSection, Setting, Value

SENTINEL = 9.9e37 * (1 - 2**-22)  # also as a number of single precision has it
LONGEST_TEXT = 256  # characters of an identity or a setting: they must fit a row of the journal

_NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?", re.ASCII)
_INFINITE = re.compile(r"[+-]?(?:INF|INFINITY|NINF)", re.IGNORECASE)
_NOT_A_NUMBER = re.compile(r"[+-]?NAN", re.IGNORECASE)
_LONGEST_NUMBER = 64
_SHOWN = 80


@dataclass(frozen=True)
class Reply:
    """One reading. ``status`` is ok, overload, range or bad_reply (see acquire.readings).

    ``values`` has the finite numbers as read, None where there is none. ``in_order`` is False
    when the reply can't be what was asked for, so that the session must not be used again.
    """

    status: str
    values: tuple[float | None, ...]
    detail: str = ""
    in_order: bool = True


class _Unreadable(Exception):
    """A field that can't be used: text, status, and whether the line may still be trusted."""

    def __init__(self, text: str, status: str = "bad_reply", in_order: bool = False) -> None:
        super().__init__(text)
        self.status = status
        self.in_order = in_order


def parse_replies(section: ReaderSection, replies: Sequence[str]) -> Reply:
    """Read one reading out of the replies to all of a reader's queries. Never raises."""
    fields = [field for reply in replies for field in split_fields(section, reply)]
    if len(fields) != section.fields:
        return _miscounted(section, replies, len(fields))
    return parse_fields(section, fields)


def parse_fields(section: ReaderSection, fields: Sequence[str | float]) -> Reply:
    """Read one reading out of its fields, texts or numbers, as many as there must be."""
    found: list[tuple[str, str]] = []
    values: list[float | None] = []
    in_order = True
    for value in section.values:
        try:
            number, problem = _read_value(value, fields[value.position - 1])
        except _Unreadable as error:
            number, problem = None, (error.status, str(error))
            in_order = in_order and error.in_order
        values.append(number)
        found += [problem] if problem else []
    try:
        found += _status_word(section, fields)
    except _Unreadable as error:
        found.append((error.status, str(error)))
        in_order = False
    return _judged(values, found, in_order)


def split_fields(section: ReaderSection, reply: str) -> list[str]:
    """The fields of one reply, blanks around them removed; blanks in a row separate once."""
    if not section.separator.strip():
        return reply.split()
    return [field.strip() for field in reply.split(section.separator)]


def read_number(text: str) -> float | None:
    """The finite number that the whole of ``text`` is, or None."""
    text = text.strip(" \t")
    if len(text) > _LONGEST_NUMBER or not _NUMBER.fullmatch(text):
        return None
    number = float(text)
    return number if math.isfinite(number) else None


def read_setting(setting: Setting, raw: str) -> float | int | str | None:
    """What a setting's raw reply means; None if the configured codes don't have it.

    Numbers, also those out of the table of codes, are multiplied by ``scale``. A code is found
    by its text or by its number (``9``, ``+9`` and ``9.0`` are one code).
    """
    text = raw.strip()
    value: float | int | str | None
    if setting.codes is None:
        number = read_number(text)
        value = text if number is None else number
    else:
        value = setting.codes.get(text, _by_number(setting.codes, text))
    if isinstance(value, str) or value is None or setting.scale == 1:
        return value
    scaled = value * setting.scale
    return scaled if math.isfinite(scaled) else None


def fits(text: str) -> bool:
    """Whether the text of an identity or a setting is short enough to be kept."""
    return len(text) <= LONGEST_TEXT


def escaped(data: bytes | str, longest: int = _SHOWN) -> str:
    """Bytes or text for a person to look at: what can't be printed as escapes, cut if long."""
    text = data.decode("latin-1") if isinstance(data, bytes) else data
    shown = text[:longest].encode("unicode_escape").decode("ascii")
    left = len(text) - longest
    return shown if left <= 0 else f"{shown}... ({left} more)"


def _read_value(value: Value, text: str | float) -> tuple[float | None, tuple[str, str] | None]:
    if isinstance(text, float):
        if math.isfinite(text):
            return text, _out_of_bounds(value, text)
        text = str(text)
    if text in value.overload_texts:
        raise _Unreadable(f"{value.name}: the instrument says {text!r}", "overload", True)
    if _INFINITE.fullmatch(text):
        raise _Unreadable(f"{value.name}: infinite ({text!r})", "overload", True)
    if _NOT_A_NUMBER.fullmatch(text):
        raise _Unreadable(f"{value.name}: not a number ({text!r})", "bad_reply", True)
    number = read_number(text)
    if number is None:
        raise _Unreadable(f"{value.name}: {escaped(text)!r} is no number")
    return number, _out_of_bounds(value, number)


def _out_of_bounds(value: Value, number: float) -> tuple[str, str] | None:
    scaled = number * value.scale
    if abs(number) >= SENTINEL:
        return "overload", f"{value.name}: {number!r} stands for overload"
    if value.overload_above is not None and abs(scaled) > value.overload_above:
        return "overload", f"{value.name}: {scaled!r} is above {value.overload_above!r}"
    if value.lowest is not None and scaled < value.lowest:
        return "range", f"{value.name}: {scaled!r} is below {value.lowest!r}"
    if value.highest is not None and scaled > value.highest:
        return "range", f"{value.name}: {scaled!r} is above {value.highest!r}"
    return None


def _status_word(
    section: ReaderSection, fields: Sequence[str | float]
) -> list[tuple[str, str]]:
    if section.overload is None:
        return []
    text = str(fields[section.overload.position - 1])
    word = read_number(text)
    if word is None or word < 0 or word != int(word) or word >= 2**64:
        raise _Unreadable(f"{escaped(text)!r} is no status word")
    hit = int(word) & section.overload.bits
    return [("overload", f"status bits {hit} are set")] if hit else []


def _miscounted(section: ReaderSection, replies: Sequence[str], count: int) -> Reply:
    """An instrument may say "overload" in place of all its fields; else it is a bad reply."""
    nothing = (None,) * len(section.values)
    texts = {text for value in section.values for text in value.overload_texts}
    for reply in replies:
        if reply.strip() in texts:
            return Reply("overload", nothing, f"the instrument says {reply.strip()!r}")
    got = escaped(" | ".join(replies))
    detail = f"{count} fields where {section.fields} are due: {got!r}"
    return Reply("bad_reply", nothing, detail, in_order=False)


def _judged(values: list[float | None], found: list[tuple[str, str]], in_order: bool) -> Reply:
    kinds = {kind for kind, _ in found}
    detail = "; ".join(text for _, text in found)
    for status in ("bad_reply", "overload", "range"):
        if status in kinds:
            kept = [None] * len(values) if status == "bad_reply" else values
            return Reply(status, tuple(kept), detail, in_order)
    return Reply("ok", tuple(values))


def _by_number(codes: dict[str, float | int | str], text: str) -> float | int | str | None:
    number = read_number(text)
    if number is None:
        return None
    return next((value for code, value in codes.items() if read_number(code) == number), None)
