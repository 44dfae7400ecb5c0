"""A file that is taken away or replaced while it is open: noticed, and put back in its place.

Whoever tidies up a folder, or saves a table from a spreadsheet while it is written, leaves the
writer with a file that has no name any more; what is written then is gone when it is closed.
"""

from __future__ import annotations

import os
from contextlib import suppress
from pathlib import Path

from acquire.disk import sync_folder

_PIECE = 1 << 20


def stands_at(fd: int, path: Path) -> bool:
    """Whether the open file is the one of that name; True, too, where that can't be told."""
    try:
        there = os.stat(path)
    except (FileNotFoundError, NotADirectoryError):
        return False
    except OSError:
        return True
    here = os.fstat(fd)
    return (here.st_dev, here.st_ino) == (there.st_dev, there.st_ino)


def put_back(fd: int, path: Path, size: int) -> tuple[int, str]:
    """Copy the first ``size`` bytes of the open file to its place. What stands there is kept as
    ``*.other``. Returns the new file, open as the old one, and what had happened. Raises OSError.
    """
    new = path.with_name(f".{path.name}.new")
    copy = os.open(new, os.O_RDWR | os.O_APPEND | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
    try:
        for begin in range(0, size, _PIECE):
            piece = os.pread(fd, min(_PIECE, size - begin), begin)
            while piece:
                piece = piece[os.write(copy, piece) :]
        os.fsync(copy)
        what = "was removed"
        if path.exists():
            other = _free_name(path)
            os.rename(path, other)
            what = f"was replaced by another file (now {other.name})"
        os.rename(new, path)
        sync_folder(path.parent)
    except BaseException:
        os.close(copy)
        with suppress(OSError):
            new.unlink()
        raise
    return copy, what


def _free_name(path: Path) -> Path:
    number, other = 1, path.with_name(f"{path.name}.other")
    while other.exists():
        number += 1
        other = path.with_name(f"{path.name}.other-{number}")
    return other
