"""One line typed in the terminal, or coming through a pipe, without being stuck on it."""

from __future__ import annotations

import os
import select
import sys
import time
from threading import Event

LOOK_S = 0.1
LONGEST = 1000


def typed_line(wish: Event, within_s: float) -> str | None:
    """The line, without its end. None if there is no input, if none comes in time, or if ``wish``
    is set meanwhile."""
    try:
        fd = sys.stdin.fileno()
    except (AttributeError, OSError, ValueError):  # there is no standard input
        return None
    typed, deadline = b"", time.monotonic() + within_s
    while not wish.is_set() and time.monotonic() < deadline and len(typed) < LONGEST:
        try:
            if not select.select([fd], [], [], LOOK_S)[0]:
                continue
            more = os.read(fd, 1)
        except (OSError, ValueError):
            return None
        if more in (b"", b"\n", b"\r"):
            return typed.decode("utf-8", "replace") if more or typed else None
        typed += more
    return None
