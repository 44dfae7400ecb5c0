"""Listening to a reader that runs elsewhere, whichever run it has just now."""

from __future__ import annotations

import time
from collections.abc import Callable

from acquire.bus import Endpoint, Introducer, Introduction, Subscriber
from acquire.closing import Closing
from acquire.errors import RunError
from acquire.tables import Row, Table

SILENT_S = 2.0  # after which it is asked whether another run is there now


class FarSide(Closing):
    """The reader elsewhere. Belongs to one thread.

    Parameters
    ----------
    table : what its table must be.
    endpoint : where it publishes, and where it answers.
    adopt : takes a run's id and start in UTC when it is first heard of; returns the number of the
        row that is wanted first.
    """

    def __init__(self, table: Table, endpoint: Endpoint, adopt: Callable[[str, str], int]) -> None:
        self._table = table
        self._endpoint = endpoint
        self._adopt = adopt
        self._introducer = Introducer(endpoint)
        self._subscriber: Subscriber | None = None
        self._run = ""
        self._since = time.monotonic()

    def receive(self, timeout_s: float) -> list[Row]:
        """Rows of the present run, in order and each once; waits for them up to ``timeout_s``.

        Raises RunError if somebody else answers there, or the columns are not the same.
        """
        rows: list[Row] = []
        if self._subscriber is not None:
            rows = [row for _, row in self._subscriber.receive(timeout_s)]
        if self._subscriber is None or (not rows and self.silent):
            introduction = self._introducer.ask(timeout_s)
            if introduction is not None and introduction.run != self._run:
                self._meet(introduction)
        return rows

    @property
    def silent(self) -> bool:
        """Whether nothing has proved for some time that the reader elsewhere lives."""
        heard = None
        if self._subscriber is not None:
            heard = self._subscriber.health()[self._table.stream].last_heard_monotonic
        return time.monotonic() - max(heard or 0.0, self._since) > SILENT_S

    def close(self) -> None:
        """Close all sockets, at once. Closing twice is no mistake."""
        self._introducer.close()
        if self._subscriber is not None:
            self._subscriber.close()

    def _meet(self, introduction: Introduction) -> None:
        self._check(introduction)
        stream = self._table.stream
        first = self._adopt(introduction.run, introduction.started_utc)
        if self._subscriber is not None:
            self._subscriber.close()
        self._run, self._since = introduction.run, time.monotonic()
        self._subscriber = Subscriber(
            introduction.run, {stream: self._endpoint}, {stream: self._table}, first
        )

    def _check(self, introduction: Introduction) -> None:
        where = f"the reader elsewhere ({self._endpoint.answer})"
        if introduction.stream != self._table.stream:
            raise RunError(
                f"{where} publishes {introduction.stream!r}, not {self._table.stream!r}; "
                "see to the addresses in its [elsewhere]."
            )
        ours = [(one.name, one.kind, one.unit, one.description) for one in self._table.columns]
        if list(introduction.columns) != ours:
            different = [pair for pair in zip(introduction.columns, ours) if pair[0] != pair[1]]
            there, here = different[0] if different else (introduction.columns[-1:], ours[-1:])
            raise RunError(
                f"{where} has other columns ({there} there, {here} here): its configuration must "
                "have the same values, names, scales and units as this run's."
            )
