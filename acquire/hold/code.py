"""The code of a run: what a person types to show that this run is meant, and that it is meant.

It is drawn at the run's start, kept in the memory of the process that watches the run, and shown
in its terminal alone: it stands in no file, so whoever types it on the page can see that terminal.
"""

from __future__ import annotations

import hmac
import secrets

LETTERS = "ABCDEFGHJKLMNPQRSTUVWXYZ"  # without I and O, which look like figures
LENGTH = 4


def new_code() -> str:
    """A code for a new run."""
    return "".join(secrets.choice(LETTERS) for _ in range(LENGTH))


def is_code(typed: object, code: str) -> bool:
    """Whether somebody typed the code; blanks around it and small letters don't matter."""
    if not isinstance(typed, str):
        return False
    return hmac.compare_digest(typed.strip().upper().encode("utf-8", "replace"), code.encode())
