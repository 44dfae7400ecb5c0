"""The exchange with the magnet supply: prove who it is, be allowed, write it down, send once.

Each step is said before the next is done. The last one said is one of :data:`LAST`.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from typing import Any, Protocol

from acquire.config.hold import HoldSection
from acquire.errors import InstrumentError, RunError
from acquire.hold.words import what_is_sent
from acquire.reply import escaped

SENDING, ANSWERED, TROUBLE, NOT_SENT, REACHED, NOT_REACHED = (
    "sending", "answered", "trouble", "not_sent", "reached", "not_reached",
)  # fmt: skip
LAST = (ANSWERED, TROUBLE, NOT_SENT, REACHED, NOT_REACHED)

HINT = "Does it take another connection beside its reader's?"

Say = Callable[[str, str], None]


class Supply(Protocol):
    """The part of :class:`acquire.instrument.Instrument` that is used here."""

    def open(self, known_identity: str | None = None) -> str: ...
    def ask(self, query: str) -> str: ...
    def tell(self, command: str) -> None: ...
    def close(self) -> None: ...


def reach(supply: Supply, say: Say, wait: Callable[..., Any]) -> str:
    """See whether the supply can be asked: nothing is sent but the identity query."""
    try:
        identity = wait(supply.open)
    except InstrumentError as error:
        say(NOT_REACHED, f"{_full(error)} {HINT}")
        return NOT_REACHED
    finally:
        supply.close()
    say(REACHED, f"The magnet supply can be asked: {escaped(identity)}.")
    return REACHED


def hold(
    section: HoldSection,
    supply: Supply,
    may_send: Callable[[str], bool],
    claim: Callable[[Mapping[str, object]], None],
    say: Say,
    wait: Callable[..., Any] = lambda call, *args: call(*args),
) -> str:
    """Ask the supply once to hold the field; returns the last step.

    Nothing is sent but the identity query unless ``may_send``, told who is there, says yes and
    ``claim`` (see :func:`acquire.hold.record.claim`) returns. ``wait`` makes the call that can be
    broken off (see :class:`acquire.stop.Stop`); what comes after the claim can't. Raises no error
    of ours.
    """

    def last(step: str, text: str) -> str:
        say(step, text)
        return step

    try:
        try:
            identity = wait(supply.open)
            if not may_send(f"The magnet supply is there: {escaped(identity)}."):
                return last(NOT_SENT, "it was not allowed any more.")
            claim({"command": section.command, "resource": section.resource, "who": identity})
        except InstrumentError as error:
            return last(NOT_SENT, f"{_full(error)} {HINT}")
        except RunError as error:
            return last(NOT_SENT, _full(error))
        say(SENDING, f"Sending {what_is_sent(section)}.")
        try:
            return last(*_exchange(section, supply, identity))
        except InstrumentError as error:
            return last(TROUBLE, f"The supply did not answer as configured: {_full(error)}")
    finally:
        supply.close()


def _exchange(section: HoldSection, supply: Supply, identity: str) -> tuple[str, str]:
    if section.reply:
        reply = supply.ask(section.command)
        if re.fullmatch(section.reply, reply):
            return ANSWERED, f"The supply answered as configured: {escaped(reply)}."
        return TROUBLE, f"The supply answered {escaped(reply)}, which {section.reply!r} is not."
    supply.tell(section.command)
    again = supply.ask(section.identity.query)
    if again == identity:
        return ANSWERED, "The supply took it, and still answers."
    return TROUBLE, f"Asked who it is after the command, the supply said {escaped(again)}."


def _full(error: Exception) -> str:
    text = str(error)
    return text if text.endswith((".", "?", "!")) else f"{text}."
