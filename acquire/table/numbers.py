"""One cell of a table as a number: strictly, or not at all."""

from __future__ import annotations

import math
import re

_STRICT = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eEdD][+-]?[0-9]+)?")
_LOOSE = re.compile(r"[+-]?(?=[.,]?[0-9])[0-9]*(?:[.,][0-9]+)*\.?(?:[eEdD][+-]?[0-9]+)?")
_MARKED = re.compile(r"[+-]?[0-9]*(?:[.,' ][0-9]+)+(?:[eEdD][+-]?[0-9]+)?")
_EXPONENT = str.maketrans("dD", "ee")
LONGEST_SHOWN = 40


def read_number(text: str, decimal: str) -> float | None:
    """The finite number in a cell, None if it holds anything else.

    ``decimal`` is ``.`` or ``,``; the other of the two is refused, so that neither thousands nor
    decimals are ever taken for each other. The exponent may be written with e or d.
    """
    text = text.strip()
    if decimal == ",":
        if "." in text:
            return None
        text = text.replace(",", ".")
    if not _STRICT.fullmatch(text):
        return None
    value = float(text.translate(_EXPONENT))
    return value if math.isfinite(value) else None


def looks_like_number(text: str) -> bool:
    """Whether somebody who did not know the decimal mark could take a cell for a number."""
    return _LOOSE.fullmatch(text) is not None


def why_no_number(text: str, decimal: str) -> str:
    """What is wrong with a cell that :func:`read_number` refuses, in a few words."""
    text = text.strip()
    if not text:
        return "empty"
    shown = repr(text if len(text) <= LONGEST_SHOWN else text[:LONGEST_SHOWN] + "...")
    plain = text.replace(",", ".") if decimal == "," else text
    if "." not in text.replace(decimal, "") and _STRICT.fullmatch(plain):
        return f"too large a number: {shown}"
    if has_other_mark(text, decimal):
        return f'a number with other marks than decimal = "{decimal}": {shown}'
    return f"not a number: {shown}"


def has_other_mark(text: str, decimal: str) -> bool:
    """Whether a cell would be a number if its marks were not those of other decimals or of
    thousands."""
    text = text.strip()
    return _MARKED.fullmatch(text) is not None and read_number(text, decimal) is None
