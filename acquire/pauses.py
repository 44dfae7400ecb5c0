"""How long a reader waits between two attempts to reach its instrument."""

from __future__ import annotations

import zlib

SHORTEST_PAUSE_S, LONGEST_PAUSE_S = 0.5, 10.0


def pause_s(reader: str, attempt: int) -> float:
    """How long to wait before the next attempt after ``attempt`` failures in a row, in seconds.

    Doubles from 0.5 s up to 10 s; shorter by up to a fifth, by the reader's name and the attempt,
    so that readers of one dead gateway do not all call at once.
    """
    full = min(SHORTEST_PAUSE_S * 2.0 ** min(attempt - 1, 10), LONGEST_PAUSE_S)
    return full * (1.0 - 0.2 * zlib.crc32(f"{reader} {attempt}".encode()) / 2**32)
