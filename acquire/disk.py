"""Files that are whole or not there, also after a power cut."""

from __future__ import annotations

import os
from contextlib import suppress
from pathlib import Path


def write_whole(path: Path, data: bytes) -> None:
    """Replace a file in one step: whoever reads sees the old bytes or the new ones.

    Written to a hidden file beside it, synced, renamed. One writer at a time. Raises OSError.
    """
    new = path.with_name(f".{path.name}.new")
    try:
        with open(new, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.replace(new, path)
    except OSError:
        with suppress(OSError):  # a full disk: what there is of it only takes room
            new.unlink()
        raise
    sync_folder(path.parent)


def sync_folder(folder: Path) -> None:
    """Make the names in a folder survive a power cut. Raises OSError."""
    fd = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(fd)
    finally:
        os.close(fd)
