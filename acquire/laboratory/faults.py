"""Misbehaviour of one instrument: which of it acts now, and what it does to a reply."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, replace

import numpy as np

from acquire.laboratory.scenario import Misbehaviour

OF_REPLIES = ("delay", "split", "drop", "garble", "duplicate", "overload", "disconnect")
GARBLED_SHARE = 0.2  # of the bytes of a reply, but at least one


@dataclass
class _Fault:
    """One misbehaviour with what is left of it."""

    what: Misbehaviour
    began_s: float
    generator: np.random.Generator
    hits: int = 0

    def acts(self, time_s: float, asked: bool) -> bool:
        """Whether it may hit the line that came at this moment."""
        since = time_s - self.began_s
        if since < 0 or self.what.what == "off":
            return False
        if self.what.lasts_s is not None and since >= self.what.lasts_s:
            return False
        if self.what.replies is not None and self.hits >= self.what.replies:
            return False
        return asked or self.what.what not in OF_REPLIES

    def hit(self) -> bool:
        """Draw whether it does, and count it."""
        hit = self.what.probability == 1 or self.generator.random() < self.what.probability
        self.hits += hit
        return hit


@dataclass(frozen=True)
class Piece:
    """Bytes of a reply, to be sent ``after_s`` from the moment when the question came."""

    after_s: float
    data: bytes


@dataclass(frozen=True)
class Treatment:
    """What is to be done with one line and with the reply to it."""

    hears: bool = True
    obeys: bool = True
    overload: bool = False
    cut: bool = False
    drop: bool = False
    delay_s: float = 0.0
    split_s: float | None = None
    again_s: float | None = None
    garble: np.random.Generator | None = None

    def pieces(self, reply: bytes) -> tuple[Piece, ...]:
        """The reply (with its line end) as it is to be sent; nothing if it is to be lost."""
        if self.drop or not reply:
            return ()
        if self.garble is not None:
            reply = garbled(reply, self.garble)
        again = () if self.again_s is None else (Piece(self.delay_s + self.again_s, reply),)
        if self.split_s is None or len(reply) < 2:
            return (Piece(self.delay_s, reply), *again)
        half = len(reply) // 2
        later_s = self.delay_s + self.split_s
        return (Piece(self.delay_s, reply[:half]), Piece(later_s, reply[half:]), *again)


@dataclass
class Faults:
    """All misbehaviour of one instrument, that of the scenario and that begun by hand.

    ``seed`` is for those that have none of their own.
    """

    seed: int
    _faults: list[_Fault] = field(default_factory=list)
    _begun: int = 0

    def begin(self, misbehaviour: Misbehaviour, time_s: float) -> None:
        """Let it act from ``from_s`` after ``time_s``."""
        seed = self.seed if misbehaviour.seed is None else misbehaviour.seed
        generator = np.random.default_rng([seed, self._begun])
        self._begun += 1
        self._faults.append(_Fault(misbehaviour, time_s + misbehaviour.from_s, generator))

    def end(self) -> None:
        """Behave again."""
        self._faults.clear()

    def treatment(self, time_s: float, asked: bool) -> Treatment:
        """What becomes of a line that came now; draws and counts what acts on it."""
        found = Treatment()
        for fault in self._faults:
            if fault.acts(time_s, asked) and fault.hit():
                found = _add(found, fault)
        return found

    def is_off(self, time_s: float) -> bool:
        """Whether the instrument has no power."""
        return any(
            fault.what.what == "off"
            and 0 <= time_s - fault.began_s < (fault.what.lasts_s or float("inf"))
            for fault in self._faults
        )

    def acting(self, time_s: float) -> Iterable[str]:
        """Names of what may act at a moment."""
        for fault in self._faults:
            if fault.acts(time_s, True):
                yield fault.what.what
        if self.is_off(time_s):
            yield "off"


def garbled(data: bytes, generator: np.random.Generator) -> bytes:
    """The data with some bytes replaced by others, one at least not ASCII, so that it can't pass
    for another number; the line end at its end stays."""
    body = data.rstrip(b"\r\n")
    if not body:
        return data
    changed = np.frombuffer(body, np.uint8).copy()
    count = max(1, round(GARBLED_SHARE * len(body)))
    places = generator.choice(len(body), count, replace=False)
    changed[places] ^= generator.integers(1, 256, count, dtype=np.uint8)
    changed[places[0]] |= 0x80
    changed[(changed == 10) | (changed == 13)] = 0xFF
    return changed.tobytes() + data[len(body) :]


def _add(found: Treatment, fault: _Fault) -> Treatment:
    later_s = fault.what.delay_s
    match fault.what.what:
        case "delay":
            return replace(found, delay_s=found.delay_s + later_s)
        case "split":
            return replace(found, split_s=later_s)
        case "duplicate":
            return replace(found, again_s=later_s)
        case "drop":
            return replace(found, drop=True)
        case "garble":
            return replace(found, garble=fault.generator)
        case "overload":
            return replace(found, overload=True)
        case "disconnect":
            return replace(found, cut=True)
        case "silence":
            return replace(found, hears=False)
        case _:
            return replace(found, obeys=False)
