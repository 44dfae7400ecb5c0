"""A subscriber of its own: what it has heard was published, and must be on record."""

from __future__ import annotations

import threading

from acquire.bus import StreamHealth, Subscriber
from acquire.closing import Closing
from acquire.run_folder import LiveRun, RunFolder
from acquire.tables import Row
from dashboard.streams import run_tables


class Listener(Closing):
    """Listens to all streams of a run, in a thread, until it is closed."""

    def __init__(self, run: RunFolder, live: LiveRun) -> None:
        self.heard: dict[str, list[Row]] = {stream: [] for stream in live.endpoints}
        self.health: dict[str, StreamHealth] = {}
        self._run, self._live = run, live
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._listen, daemon=True)
        self._thread.start()

    def close(self) -> None:
        """Listen no more."""
        self._over.set()
        self._thread.join(20.0)
        assert not self._thread.is_alive()

    def _listen(self) -> None:
        tables = run_tables(self._run.rig)
        with Subscriber(self._run.run_id, self._live.endpoints, tables) as subscriber:
            while not self._over.is_set():
                for stream, row in subscriber.receive(0.1):
                    self.heard[stream].append(row)
            self.health = subscriber.health()
