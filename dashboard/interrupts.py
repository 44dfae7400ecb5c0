"""Ctrl-C, SIGTERM and a closed terminal, turned into a wish that a loop can look at."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

SIGNALS = tuple(
    getattr(signal, name) for name in ("SIGINT", "SIGTERM", "SIGHUP") if hasattr(signal, name)
)


@contextmanager
def asked_to_end() -> Iterator[threading.Event]:
    """Within the block these signals set the event and do nothing else."""
    wish = threading.Event()

    def note(number: int, frame: FrameType | None) -> None:
        wish.set()

    before = {number: signal.signal(number, note) for number in SIGNALS}
    try:
        yield wish
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
