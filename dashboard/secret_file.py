"""A secret in a file that only its owner can read: made once, never written again."""

from __future__ import annotations

import os
import secrets
import stat
import tempfile
from pathlib import Path

from acquire.errors import UsageError

BYTES = 24
SHORTEST, LONGEST = 16, 1000
"""Characters: a shorter secret could be guessed, a longer one is some other file."""


def make_if_missing(path: Path) -> bool:
    """Make the file, with a new secret in it, if there is none; whether it was made.

    It is there whole or not at all, and what is there is never written over. Raises UsageError
    if it can't be made.
    """
    if path.exists():
        return False
    try:
        with tempfile.NamedTemporaryFile(dir=path.parent) as file:  # for its owner only
            file.write(secrets.token_urlsafe(BYTES).encode() + b"\n")
            file.flush()
            os.fsync(file.fileno())
            os.link(file.name, path)
    except FileExistsError:
        return False
    except OSError as error:
        raise _refused(path, f"can't be made ({error.strerror})") from None
    return True


def read_secret(path: Path) -> str:
    """The secret. Raises UsageError if it can't be read, if others may read it, or if it is none."""
    try:
        with open(path, "rb", opener=_at_once) as file:
            found = os.fstat(file.fileno())
            if not stat.S_ISREG(found.st_mode):
                raise _refused(path, "is not a file")
            if found.st_uid != os.geteuid():
                raise _refused(path, "belongs to somebody else")
            if found.st_mode & 0o077:
                mode = stat.S_IMODE(found.st_mode)
                raise _refused(path, f"is open to others (mode {mode:o})", f"chmod 600 {path}")
            content = file.read(LONGEST + 2)
    except OSError as error:
        raise _refused(path, f"can't be read ({error.strerror})") from None
    try:
        secret = content.decode("utf-8").strip()
    except UnicodeDecodeError:
        raise _refused(path, "is not text") from None
    if not SHORTEST <= len(secret) <= LONGEST or not secret.isprintable():
        raise _refused(path, f"does not hold one line of {SHORTEST} to {LONGEST} characters")
    return secret


def _at_once(path: str, flags: int) -> int:
    """Open without waiting for the other end of a pipe."""
    return os.open(path, flags | os.O_NONBLOCK)


def _refused(path: Path, what: str, remedy: str = "name another") -> UsageError:
    return UsageError(
        f"The secret's file {path} {what}: {remedy}, or name one that is not there yet and is made."
    )
