"""Whether the answer to "who is there" proves anything."""

from __future__ import annotations

import re

from acquire.config.reader import Identity
from acquire.reply import escaped, fits


def identity_problem(asked: Identity, answer: str, known: str | None = None) -> str | None:
    """What is wrong with the answer to an identity query, in words; None if it proves itself.

    An empty answer and an echo of the question prove nothing, whatever the pattern. ``known`` is
    the answer when the run began, if that is known; then it must be the very same.
    """
    who = f"{asked.query!r} was answered by {escaped(answer)!r}"
    if not fits(answer) or answer.strip() in ("", asked.query.strip()):
        return f"{who}, which proves nothing; mend identity.query, or switch the echo off"
    if not re.search(asked.pattern, answer):
        return f"{who}, which does not match {asked.pattern!r}; is it the right instrument?"
    if known is not None and answer != known:
        return (
            f"{who}, but the run began with {escaped(known)!r}: nothing that it says is used. "
            "Put that one back, or begin another run with the new one"
        )
    return None
