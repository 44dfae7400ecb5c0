"""Reading a journal, also while another process writes it: whole rows only, never a torn end."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

from acquire.cells import RowCodec
from acquire.errors import JournalError
from acquire.tables import Row, Table


def read_rows(path: str | Path, table: Table, start: int = 0) -> Iterator[Row]:
    """The complete rows of a journal from number ``start`` on, also while another writes it.

    A torn end is left out. Raises JournalError if the file can't be read, or where a line is not
    what it must be.
    """
    codec = RowCodec(table)
    try:
        with open(path, "rb") as file:
            check_header(file.readline(), path, codec.header)
            for _ in range(start):
                if is_torn(file.readline()):
                    return
            lines = (str(line, "utf-8") for line in whole_lines(file))
            yield from codec.rows(lines, start)
    except OSError as error:
        raise _unreadable(path, error) from None


def rows_with(path: str | Path, table: Table, text: bytes) -> Iterator[Row]:
    """The complete rows whose line has ``text`` in it, of a journal however long: the others are
    passed over unread, some ten times faster. Raises JournalError as :func:`read_rows`."""
    codec = RowCodec(table)
    try:
        with open(path, "rb") as file:
            check_header(file.readline(), path, codec.header)
            for number, line in enumerate(whole_lines(file)):
                if text in line:
                    yield from codec.rows_in(line, number)
    except OSError as error:
        raise _unreadable(path, error) from None


class JournalFollower:
    """Reads a journal bit by bit, each time from where it came to; holds no file open.

    ``next_seq`` is the number of the row that comes next.
    """

    def __init__(self, path: str | Path, table: Table) -> None:
        self.next_seq = 0
        self._path = Path(path)
        self._codec = RowCodec(table)
        self._position = 0

    def read(self, start: int, most: int) -> list[Row]:
        """At most ``most`` rows from number ``start`` on; none if there are none yet.

        Going forward costs only what is passed over; going back begins at the top. Raises
        JournalError as :func:`read_rows`.
        """
        try:
            with open(self._path, "rb") as file:
                if start < self.next_seq or not self._position:
                    self.next_seq = 0
                    header = file.readline()
                    if not check_header(header, self._path, self._codec.header):
                        return []
                    self._position = len(header)
                file.seek(self._position)
                self._pass_over(file, start - self.next_seq)
                return self._take(file, most) if self.next_seq == start else []
        except OSError as error:
            raise _unreadable(self._path, error) from None

    def _pass_over(self, file: BinaryIO, count: int) -> None:
        lines = whole_lines(file)
        for _ in range(count):
            line = next(lines, b"")
            if not line:
                return
            self._position += len(line)
            self.next_seq += 1

    def _take(self, file: BinaryIO, most: int) -> list[Row]:
        lines = [line for line, _ in zip(whole_lines(file), range(most))]
        rows = self._codec.rows_in(b"".join(lines), self.next_seq)
        self._position += sum(map(len, lines))
        self.next_seq += len(rows)
        return rows


def whole_lines(file: BinaryIO) -> Iterator[bytes]:
    """Lines up to a torn one."""
    for line in file:
        if is_torn(line):
            return
        yield line


def is_torn(line: bytes) -> bool:
    """Whether the journal ends before this line.

    NUL bytes are never written; a power cut leaves them where the length of the file had reached
    the disk and its content had not.
    """
    return not line.endswith(b"\n") or b"\0" in line


def check_header(line: bytes, path: str | Path, header: bytes) -> bool:
    """Whether the header is complete; JournalError if it is another table's."""
    if line == header:
        return True
    if not line.endswith(b"\n") and (header.startswith(line) or not line.strip(b"\0")):
        return False
    raise JournalError(f"{path}: its first line is not the header of this table; is it another's?")


def _unreadable(path: str | Path, error: OSError) -> JournalError:
    return JournalError(f"{path}: can't be read ({error.strerror or error}).")
