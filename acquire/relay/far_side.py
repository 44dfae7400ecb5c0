"""Listening to a reader that runs elsewhere, whichever run it has just now."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

from acquire.bus import Endpoint, Introducer, Introduction, RoundTrip, Subscriber
from acquire.bus.keys import KeyFolder
from acquire.closing import Closing
from acquire.config import Rig
from acquire.config.reader import ReaderSection
from acquire.errors import RunError
from acquire.relay.clocks import ClockComparison, Difference
from acquire.tables import Row, Table

SILENT_S = 2.0  # after which it is asked whether another run is there now
COMPARE_EVERY_S = 2.0
TRIP_S = 0.5  # a longer round trip would tell nothing of use
FIRST_TRIPS, FIRST_TRIPS_S = 8, 1.5  # before the first row is taken, and how long they may take
LONGEST_RUN, LONGEST_START = 200, 100  # characters; a row of the journal has to take them

Adopt = Callable[[str, str, Difference], int]
"""Takes a run's id, its start in UTC and how far its clock is from ours, when it is first heard
of; returns the number of the row that is wanted first."""


def endpoint_elsewhere(rig: Rig, reader: ReaderSection) -> Endpoint:
    """Where a reader of the configuration is heard. Its section must say so by ``elsewhere``."""
    assert reader.elsewhere is not None
    given = reader.elsewhere
    if given.computer is None:
        return Endpoint(given.publish, given.answer)
    folder = str(KeyFolder(rig.keys.folder).path)
    return Endpoint(given.publish, given.answer, folder, given.computer)


class FarSide(Closing):
    """The reader elsewhere. Belongs to one thread.

    Parameters
    ----------
    table : what its table must be.
    endpoint : where it publishes, and where it answers.
    adopt : see :data:`Adopt`.
    now_s : the clock of this run.
    wait : makes the calls that may take long and can be broken off without loss (Stop.wait).
    """

    def __init__(
        self,
        table: Table,
        endpoint: Endpoint,
        adopt: Adopt,
        now_s: Callable[[], float],
        wait: Callable[..., Any] = lambda call, *args: call(*args),
    ) -> None:
        self._table = table
        self._endpoint = endpoint
        self._adopt = adopt
        self._now_s = now_s
        self._wait = wait
        self._introducer = Introducer(endpoint)
        self._subscriber: Subscriber | None = None
        self._clocks = ClockComparison()
        self._run = ""
        self._since = self._compared = time.monotonic()

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

    def compare_clocks(self) -> Difference | None:
        """How far the clocks are apart, if it was time to ask and somebody has answered."""
        now = time.monotonic()
        if self._subscriber is None or now - self._compared < COMPARE_EVERY_S:
            return None
        self._compared = now
        return self._difference() if self._ask_the_time(self._run) else None

    def last_rows(self, within_s: float) -> list[Row]:
        """All that is there by now, as far as it can be had in ``within_s`` seconds."""
        if self._subscriber is None:
            return []
        return [row for _, row in self._subscriber.catch_up(within_s)]

    @property
    def silent(self) -> bool:
        """Whether nothing has proved for some time that the reader elsewhere lives."""
        heard = None
        if self._subscriber is not None:
            heard = self._subscriber.health()[self._table.stream].last_heard_monotonic
        return time.monotonic() - max(heard or 0.0, self._since) > SILENT_S

    @property
    def trouble(self) -> str:
        """Why it is not heard: it or we are refused; empty if neither is."""
        health = {} if self._subscriber is None else self._subscriber.health()
        texts = [self._introducer.trouble, *(one.trouble for one in health.values())]
        return next(filter(None, texts), "")

    def close(self) -> None:
        """Close all sockets, at once. Closing twice is no mistake."""
        self._introducer.close()
        if self._subscriber is not None:
            self._subscriber.close()

    def _meet(self, introduction: Introduction) -> None:
        self._check(introduction)
        self._clocks = ClockComparison()
        deadline = time.monotonic() + FIRST_TRIPS_S
        trips = 0
        while trips < FIRST_TRIPS and time.monotonic() < deadline:
            trips += self._ask_the_time(introduction.run)
        difference = self._difference()
        if difference is None:
            return  # it has gone again, or the line is too slow just now
        stream = self._table.stream
        first = self._adopt(introduction.run, introduction.started_utc, difference)
        if self._subscriber is not None:
            self._subscriber.close()
        self._run, self._since = introduction.run, time.monotonic()
        self._subscriber = Subscriber(
            introduction.run, {stream: self._endpoint}, {stream: self._table}, first
        )

    def _ask_the_time(self, run: str) -> bool:
        trip: RoundTrip | None = self._wait(self._introducer.round_trip, self._now_s, TRIP_S)
        if trip is None or trip.run != run:
            return False
        self._clocks.add(trip)
        return True

    def _difference(self) -> Difference | None:
        return self._clocks.difference(self._now_s())

    def _check(self, introduction: Introduction) -> None:
        where = f"the reader elsewhere ({self._endpoint.answer})"
        if introduction.stream != self._table.stream:
            raise RunError(
                f"{where} publishes {introduction.stream!r}, not {self._table.stream!r}; "
                "see to the addresses in its [elsewhere]."
            )
        named = len(introduction.run) <= LONGEST_RUN and len(introduction.started_utc) <= LONGEST_START
        if introduction.time_s is None or not named:
            raise RunError(f"{where} does not say what is needed; is it started by rampside read?")
        ours = [(one.name, one.kind, one.unit, one.description) for one in self._table.columns]
        if list(introduction.columns) != ours:
            different = [pair for pair in zip(introduction.columns, ours) if pair[0] != pair[1]]
            there, here = different[0] if different else (introduction.columns[-1:], ours[-1:])
            raise RunError(
                f"{where} has other columns ({there} there, {here} here): its configuration must "
                "have the same values, names, scales and units as this run's."
            )
