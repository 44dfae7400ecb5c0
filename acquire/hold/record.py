"""The two files of a run that say that the command is about to be sent, and what came of it.

``hold_sending.json`` is made before the first byte goes out, and can be made once: whoever finds it
there sends nothing. It and its name are on the disk before the command is on the line.
``hold_sent.json`` follows when the exchange is over. The first without the second: it is not known
whether the command was sent.
"""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from pathlib import Path

from acquire.disk import sync_folder, write_whole
from acquire.errors import RunError

SENDING, SENT = "hold_sending.json", "hold_sent.json"


def claim(folder: Path, content: Mapping[str, object]) -> None:
    """Write down that the command is about to be sent, on the disk when this returns.

    Raises RunError, after which nothing may be sent: it was claimed before, or can't be written.
    """
    path = folder / SENDING
    try:
        fd = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o644)
    except FileExistsError:
        raise RunError(f"{path}: is there already; the command goes out once in a run.") from None
    except OSError as error:
        raise _not_recorded(path, error) from None
    try:
        with open(fd, "wb") as file:
            file.write(_json(content))
            file.flush()
            os.fsync(fd)
        sync_folder(folder)
    except OSError as error:
        raise _not_recorded(path, error) from None


def conclude(folder: Path, content: Mapping[str, object]) -> None:
    """Write down what came of it. Raises RunError."""
    try:
        write_whole(folder / SENT, _json(content))
    except OSError as error:
        raise RunError(f"{folder / SENT}: can't be written ({error.strerror}).") from None


def was_claimed(folder: Path) -> bool:
    """Whether the command was about to be sent in this run, or was."""
    return (folder / SENDING).exists()


def was_concluded(folder: Path) -> bool:
    """Whether the exchange came to an end."""
    return (folder / SENT).exists()


def left_open(folder: Path) -> str:
    """What whoever comes to a run that ended badly has to know of the magnet; empty: nothing."""
    if not was_claimed(folder):
        return ""
    if not was_concluded(folder):
        return (
            "The magnet supply was about to be asked to hold the field, and it is not known whether "
            "it was; it is not asked again. Look at the magnet."
        )
    return "The magnet supply had been asked to hold the field. Look at the magnet."


def _not_recorded(path: Path, error: OSError) -> RunError:
    return RunError(f"{path}: can't be written ({error.strerror}), so nothing was sent.")


def _json(content: Mapping[str, object]) -> bytes:
    return (json.dumps(dict(content), indent=2) + "\n").encode()
