"""Who lives but does not work: decided by how long nothing was heard of it."""

from __future__ import annotations

from collections.abc import Mapping

from acquire.bus import StreamHealth
from acquire.config import Rig
from acquire.readings import stream_of
from analyse.estimate_table import ESTIMATES
from dashboard import roles

HUNG_S = 60.0
ANSWERS_S = 5.0  # who has no room says so when asked, once a second


class Hangs:
    """Times are in seconds of one monotonic clock; ``now`` is its present state.

    A reader says at least once a second that it has nothing, so it hangs when it has published
    nothing for a minute; unless it answers that it can't record, for then its readings wait in
    its memory. The estimator may have nothing to publish for hours, but answers questions. A relay
    has nothing to say while its reader elsewhere is silent, so nothing is concluded there.
    """

    def __init__(self, rig: Rig, now: float) -> None:
        here = [reader for reader in rig.readers if reader.elsewhere is None]
        self._readers = {
            stream_of(one.name): (roles.reader_role(one), HUNG_S + 2 * one.period_s) for one in here
        }
        self._since = dict.fromkeys((*self._readers, ESTIMATES.stream), now)
        self._looked = now

    def news(self, stream: str, now: float) -> None:
        """A row of the stream has come."""
        self._since[stream] = now

    def begins_anew(self, role: str, now: float) -> None:
        """The process of a role died or came back: its time begins anew, for a dead one can't
        publish, and its successor needs a while to start."""
        for stream, (reader, _) in self._readers.items():
            if reader == role:
                self._since[stream] = now
        if role == roles.ESTIMATOR:
            self._since[ESTIMATES.stream] = now

    def look(self, health: Mapping[str, StreamHealth], now: float) -> list[tuple[str, str]]:
        """Who hangs, by role, and why that is concluded; told once, and again a minute later."""
        late_s, self._looked = now - self._looked, now
        if late_s > ANSWERS_S:  # it is we who were frozen, and could hear nobody
            self._since = {stream: since + late_s for stream, since in self._since.items()}
        for stream, one in health.items():
            heard = one.last_heard_monotonic or float("-inf")
            if stream == ESTIMATES.stream or (one.trouble and now - heard < ANSWERS_S):
                self._since[stream] = max(self._since.get(stream, now), heard)
        found = []
        for stream, (role, allowed_s) in self._readers.items():
            if self._silent(stream, allowed_s, now):
                found.append((role, f"published nothing for {allowed_s:g} s"))
        if self._silent(ESTIMATES.stream, HUNG_S, now):
            found.append((roles.ESTIMATOR, f"answered nothing for {HUNG_S:g} s"))
        return found

    def _silent(self, stream: str, allowed_s: float, now: float) -> bool:
        silent = now - self._since[stream] > allowed_s
        if silent:
            self._since[stream] = now
        return silent
