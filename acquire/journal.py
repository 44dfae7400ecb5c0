"""A table of a run on disk: one line of CSV a row, complete or not there.

What survives: every row that :meth:`Journal.append` has returned for, whatever happens to the
process; after a power cut all rows up to the last :meth:`Journal.sync`.
"""

from __future__ import annotations

import errno
import fcntl
import os
import threading
from array import array
from bisect import bisect_right
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from acquire.cells import RowCodec
from acquire.closing import Closing
from acquire.disk import sync_folder, write_whole
from acquire.errors import JournalError
from acquire.journal_place import put_back, stands_at
from acquire.journal_reader import check_header, read_rows, whole_lines
from acquire.tables import Row, Table

__all__ = ["Journal", "Piece", "read_rows"]

IN_USE = "in use"
"""The reason of a JournalError where another process has the journal."""
_FULL = {errno.ENOSPC: "disk full", errno.EDQUOT: "disk full: the quota is used up"}


@dataclass(frozen=True)
class Piece:
    """Consecutive lines out of a journal: ``lines`` as on disk, ``first`` the number of the
    first of them, ``next_seq`` the number of rows in the journal when it was cut out."""

    first: int
    lines: bytes
    next_seq: int


class Journal(Closing):
    """The writing end of one table. Opens or makes the file; one process at a time.

    A torn last line, left by a killed process or a power cut, is cut away on opening;
    ``torn`` is the number of bytes cut. ``append`` belongs to one thread; ``piece`` and
    ``sync`` may be used by another at the same time. Raises JournalError if the file can't be
    opened, is in use by another process, or is not this table.
    """

    def __init__(self, path: str | Path, table: Table) -> None:
        self.path = Path(path)
        self.table = table
        self.torn = 0
        self._codec = RowCodec(table)
        self._lock = threading.Lock()
        self._sync_lock = threading.Lock()
        self._unsure = False  # bytes after _end() may be left of a write that failed
        self._unsynced = True  # a killed predecessor may have left rows that are not on disk yet
        try:
            self._fd = os.open(
                self.path, os.O_RDWR | os.O_APPEND | os.O_CREAT | os.O_CLOEXEC, 0o644
            )
        except OSError as error:
            raise self._error("can't be opened", error) from None
        try:
            self._reopen()
        except OSError as error:
            os.close(self._fd)
            raise self._error("can't be used", error) from None
        except BaseException:
            os.close(self._fd)
            raise

    @property
    def next_seq(self) -> int:
        """The number that the next row gets: how many rows there are."""
        return len(self._ends)

    def append(self, cells: Row) -> int:
        """Write one row (given without ``seq``) to the operating system; returns its number.

        Raises JournalError if a cell is not of its column's kind or the write fails; the journal
        is then as before, and the row may be tried again.
        """
        return self.record(cells)[0]  # type: ignore[return-value]

    def record(self, cells: Row) -> Row:
        """As :meth:`append`, but returns the whole row as it will read back."""
        clean = self._codec.canonical(cells)
        with self._lock:
            self._check_open()
            row: Row = (len(self._ends), *clean)
            line = self._codec.line(row)
            self._write(line)
            self._ends.append(self._end() + len(line))  # now the row is there
            self._unsure = False
        return row

    def piece(self, start: int, most_rows: int = 1000, most_bytes: int = 1 << 20) -> Piece:
        """The lines from row ``start`` on (-1: the newest), within both limits, at least one.

        Empty, with ``first = next_seq``, when there is nothing from ``start`` on. Its cost does
        not depend on how long the journal is. Raises JournalError if it can't be read.
        """
        with self._lock:
            self._check_open()
            count = len(self._ends)
            first = min(start, count) if start >= 0 else max(count - 1, 0)
            begin = self._ends[first - 1] if first else self._head
            last = min(first + most_rows, count)
            stop = bisect_right(self._ends, begin + most_bytes, first, last)
            stop = min(max(stop, first + 1), last)
            size = self._ends[stop - 1] - begin if stop > first else 0
        return Piece(first, self._read(begin, size), count)

    def cut_back(self, count: int) -> None:
        """Keep the first ``count`` rows; those after them are kept beside, in ``*.cut``.

        Only while nobody else uses this journal. Raises JournalError.
        """
        with self._lock:
            self._check_open()
            keep = self._ends[count - 1] if count else self._head
            try:
                self._set_aside(self._read(keep, self._end() - keep))
                os.ftruncate(self._fd, keep)
            except OSError as error:
                raise self._error("can't be cut back", error) from None
            del self._ends[count:]
            self._unsynced = True

    def sync(self) -> None:
        """Have everything written so far survive a power cut, in the place where it belongs.

        Raises JournalError, also once when the file had been taken away and was put back.
        """
        with self._sync_lock:
            if self._fd < 0:
                return
            self._keep_place()
            if not self._unsynced:
                return
            self._unsynced = False
            try:
                os.fsync(self._fd)
            except OSError as error:
                self._unsynced = True
                raise self._error("can't be synced to disk", error) from None

    def close(self) -> None:
        """Sync and close. Closing twice is no mistake. Raises JournalError if syncing fails."""
        try:
            self.sync()
        finally:
            with self._lock, self._sync_lock:
                fd, self._fd = self._fd, -1
                if fd >= 0:
                    os.close(fd)

    def _keep_place(self) -> None:
        if stands_at(self._fd, self.path):
            return
        with self._lock:
            try:
                new, what = put_back(self._fd, self.path, self._end())
                try:
                    with suppress(OSError):  # a file system without locks
                        fcntl.flock(new, fcntl.LOCK_EX | fcntl.LOCK_NB)
                    os.dup2(new, self._fd, inheritable=False)
                finally:
                    os.close(new)
            except OSError as error:
                raise self._error("was taken away and can't be put back", error) from None
        raise JournalError(f"{self.path}: {what} while it was written, and has been put back.")

    def _reopen(self) -> None:
        self._claim()
        with open(self.path, "rb") as file:
            self._head, self._ends = _scan(file, self.path, self._codec.header)
        self.torn = os.fstat(self._fd).st_size - self._end()
        if self.torn:
            self._cut_torn()
        if not self._head:
            self._write(self._codec.header)
            self._head = len(self._codec.header)
            self._unsure = False
            sync_folder(self.path.parent)

    def _cut_torn(self) -> None:
        """Cut away what is not whole. More than one torn line is kept beside, in ``*.cut``."""
        torn = self._read(self._end(), self.torn)
        if b"\n" in torn:
            self._set_aside(torn)
        os.ftruncate(self._fd, self._end())

    def _set_aside(self, data: bytes) -> None:
        """Add to what was cut out of this table."""
        path = self.path.with_name(self.path.name + ".cut")
        before = path.read_bytes() if path.exists() else b""
        write_whole(path, before + data)

    def _claim(self) -> None:
        try:
            fcntl.flock(self._fd, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            if error.errno not in (errno.EWOULDBLOCK, errno.EACCES):
                return  # a file system without locks
            text = f"{self.path}: somebody else is writing it; end that process first."
            raise JournalError(text, IN_USE) from None

    def _write(self, data: bytes) -> None:
        """All of ``data`` or nothing of it. ``_unsure`` stays set until the caller has counted it,
        so that an interrupt at any place is mended by the next write."""
        if self._unsure:
            self._cut_tail()
        self._unsure = self._unsynced = True
        try:
            written = os.write(self._fd, data)
            while written < len(data):  # the second write tells why the first was short
                written += os.write(self._fd, data[written:])
        except OSError as error:
            with suppress(JournalError):
                self._cut_tail()
            raise self._error("can't be written", error) from None

    def _check_open(self) -> None:
        if self._fd < 0:
            raise JournalError(f"{self.path}: is closed; open it again.")

    def _cut_tail(self) -> None:
        try:
            os.ftruncate(self._fd, self._end())
        except OSError as error:
            raise self._error("can't be mended after a failed write", error) from None
        self._unsure = False

    def _end(self) -> int:
        """Where the last row that counts ends."""
        return self._ends[-1] if self._ends else self._head

    def _read(self, begin: int, size: int) -> bytes:
        data = b""
        try:
            while len(data) < size:
                more = os.pread(self._fd, size - len(data), begin + len(data))
                if not more:
                    raise JournalError(f"{self.path}: has become shorter; put it back from a copy.")
                data += more
        except OSError as error:
            raise self._error("can't be read", error) from None
        return data

    def _error(self, what: str, error: OSError) -> JournalError:
        reason = error.strerror or str(error)
        text = f"{self.path}: {what} ({reason}); see to the disk, then try again."
        return JournalError(text, _FULL.get(error.errno or 0, reason[:1].lower() + reason[1:]))


def _scan(file: BinaryIO, path: Path, header: bytes) -> tuple[int, array[int]]:
    """Where the header ends (0: not complete) and where each complete row ends."""
    ends = array("q")
    first = file.readline()
    if not check_header(first, path, header):
        return 0, ends
    position = len(first)
    for number, line in enumerate(whole_lines(file)):
        if not line.startswith(b"%d," % number):
            raise JournalError(
                f"{path}, line {number + 2}: not the row number {number}; "
                "put it back from a copy before anything is added to it."
            )
        position += len(line)
        ends.append(position)
    return len(first), ends
