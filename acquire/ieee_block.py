"""Definite-length blocks of binary numbers: ``#`` a digit, so many digits of a length, so many bytes.

IEEE 488.2-1992, 8.7.9. The same with ``#0`` and no length (8.7.10) ends by a mark of the bus that a
socket or a serial line does not carry: it is refused.
"""

from __future__ import annotations

from acquire.errors import BadReply
from acquire.reply import escaped

LONGEST_BLOCK = 4_000_000  # bytes


def header_length(start: bytes) -> int:
    """How many digits of the length follow the two bytes that a block begins with.

    Raises BadReply if it is no such block.
    """
    if start == b"#0":
        raise BadReply(
            "a block of indefinite length (#0) came: set the instrument to definite-length blocks"
        )
    if len(start) != 2 or start[:1] != b"#" or not start[1:].isdigit():
        raise BadReply(f"{escaped(start)!r} came where a block (#, digit, length) should begin")
    return int(start[1:])


def payload_length(digits: bytes) -> int:
    """How many bytes the block holds. Raises BadReply if that is no number, or too large."""
    if not digits.isdigit():
        raise BadReply(f"a block's length is {escaped(digits)!r}, which is no number")
    size = int(digits)
    if size > LONGEST_BLOCK:
        raise BadReply(f"a block of {size} bytes is announced; at most {LONGEST_BLOCK} are taken")
    return size
