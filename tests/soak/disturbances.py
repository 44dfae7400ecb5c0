"""What is done to whom, at random but for the seed, and undone after a while."""

from __future__ import annotations

import heapq
import itertools
import random
import time
from collections import Counter
from collections.abc import Callable
from contextlib import suppress

import psutil

from soak.full_disk import FullDisk
from soak.laboratory import Laboratory
from soak.link import Link
from soak.rig import INSTRUMENTS, PERIOD_S
from soak.watched import ROLES, Watched

WEIGHTS = {
    "killed": 24,
    "killed together": 3,
    "frozen": 20,
    "link cut": 12,
    "link held up": 9,
    "misbehaving": 22,
    "disk full": 6,
    "laboratory frozen": 3,
    "laboratory killed": 1,
}
MISBEHAVIOURS = (
    "delay", "split", "drop", "garble", "duplicate", "overload", "disconnect", "silence", "off",
)  # fmt: skip
LABORATORY, DISK = "laboratory", "disk"

Undo = Callable[[], None]


class Disturbances:
    """Disturbs, one after the other and several at a time. ``counts``: how often what was done."""

    def __init__(
        self,
        seed: int,
        watched: Watched,
        laboratory: Laboratory,
        links: dict[str, Link],
        disk: FullDisk,
    ) -> None:
        self.counts: Counter[str] = Counter()
        self._random = random.Random(seed)
        self._watched = watched
        self._laboratory = laboratory
        self._links = links
        self._disk = disk
        self._busy: set[str] = set()  # what is being disturbed: roles, links, LABORATORY, DISK
        self._undone: list[tuple[float, int, str, Undo]] = []
        self._number = itertools.count()

    def go_on(self, count: int, mean_s: float, tell: Callable[[str], None]) -> None:
        """Disturb so often, every ``mean_s`` seconds in the mean; at the end all is undone."""
        done, due = 0, time.monotonic()
        while done < count:
            self._undo_until(time.monotonic())
            now = time.monotonic()
            if now >= due:
                due = now + min(self._random.expovariate(1 / mean_s), 5 * mean_s)
                what = self._disturb()
                if what:
                    done += 1
                    tell(f"{done:4}: {what}")
            time.sleep(0.02)
        while self._undone:
            self._undo_until(time.monotonic())
            time.sleep(0.02)
        self._end_misbehaviour()

    def _disturb(self) -> str:
        """Do something to somebody; what it was, empty if it could not be done now."""
        kind = self._random.choices(list(WEIGHTS), list(WEIGHTS.values()))[0]
        target = self._random.choice(ROLES)
        instrument = self._random.choice(INSTRUMENTS)
        lasts_s = self._random.uniform(0.1, 4.0)
        what = {
            "killed": lambda: self._kill(target),
            "killed together": self._kill_several,
            "frozen": lambda: self._freeze(target, lasts_s),
            "link cut": lambda: self._break(instrument, lasts_s, self._links[instrument].cut),
            "link held up": lambda: self._break(instrument, lasts_s, self._links[instrument].hold),
            "misbehaving": lambda: self._misbehave(instrument, lasts_s),
            "disk full": lambda: self._fill(lasts_s + 1.0),
            "laboratory frozen": lambda: self._freeze_laboratory(lasts_s),
            "laboratory killed": lambda: self._kill_laboratory(lasts_s),
        }[kind]()
        if not what:
            return ""
        self.counts[what if kind == "misbehaving" else kind] += 1
        where = instrument if kind in ("link cut", "link held up", "misbehaving") else ""
        return " ".join(filter(None, (kind, where, what)))

    def _kill(self, role: str) -> str:
        process = self._watched.processes().get(role)
        if process is None:
            return ""
        with suppress(psutil.NoSuchProcess):
            process.kill()
        return role

    def _kill_several(self) -> str:
        roles = self._random.sample(ROLES, self._random.randint(2, len(ROLES)))
        return " ".join(filter(None, [self._kill(role) for role in roles]))

    def _freeze(self, role: str, lasts_s: float) -> str:
        process = self._watched.processes().get(role)
        if process is None or role in self._busy:
            return ""
        with suppress(psutil.NoSuchProcess):
            process.suspend()
        self._later(lasts_s, role, lambda: _resume(process))
        return role

    def _break(self, instrument: str, lasts_s: float, how: Callable[[], None]) -> str:
        name = f"link {instrument}"
        if name in self._busy:
            return ""
        how()
        self._later(lasts_s, name, self._links[instrument].mend)
        return f"for {lasts_s:.1f} s"

    def _misbehave(self, instrument: str, lasts_s: float) -> str:
        if LABORATORY in self._busy:
            return ""
        what = self._random.choice(MISBEHAVIOURS)
        if what == "overload" and instrument == "lockin_xy":
            return ""  # it would tell by another answer than its values: in between it may begin
        words = [what, f"instrument={instrument}", f"lasts_s={lasts_s:.3f}"]
        if what != "off":
            words.append(f"probability={self._random.uniform(0.2, 1.0):.3f}")
        if what in ("delay", "split"):
            words.append(f"delay_s={self._random.uniform(0.01, 1.0):.3f}")
        if what == "duplicate":
            words.append(f"delay_s={self._random.uniform(0.0005, PERIOD_S):.4f}")
        return what if self._tell(f"BEGIN {','.join(words)}") else ""

    def _end_misbehaviour(self) -> None:
        for instrument in INSTRUMENTS:
            self._tell(f"END {instrument}")

    def _tell(self, command: str) -> bool:
        """Over the line of an instrument that takes one: some may be off."""
        for instrument in INSTRUMENTS:
            with suppress(OSError):
                answer = self._laboratory.tell(instrument, command)
                assert answer in ("OK", ""), f"{command}: {answer}"
                if answer:  # else it has gone off just now
                    return True
        return False

    def _fill(self, lasts_s: float) -> str:
        if DISK in self._busy:
            return ""
        self._disk.fill()
        self._later(lasts_s, DISK, self._disk.empty)
        return f"for {lasts_s:.1f} s"

    def _freeze_laboratory(self, lasts_s: float) -> str:
        if LABORATORY in self._busy:
            return ""
        process = psutil.Process(self._laboratory.pid)
        process.suspend()
        self._later(lasts_s, LABORATORY, lambda: _resume(process))
        return f"for {lasts_s:.1f} s"

    def _kill_laboratory(self, lasts_s: float) -> str:
        if LABORATORY in self._busy:
            return ""
        self._laboratory.kill()
        self._later(lasts_s, LABORATORY, self._laboratory.start)
        return f"for {lasts_s:.1f} s"

    def _later(self, seconds: float, name: str, undo: Undo) -> None:
        self._busy.add(name)
        at = time.monotonic() + seconds
        heapq.heappush(self._undone, (at, next(self._number), name, undo))

    def _undo_until(self, now: float) -> None:
        while self._undone and self._undone[0][0] <= now:
            _, _, name, undo = heapq.heappop(self._undone)
            undo()
            self._busy.discard(name)


def _resume(process: psutil.Process) -> None:
    with suppress(psutil.NoSuchProcess):
        process.resume()
