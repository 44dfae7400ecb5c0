"""Cells of a table as numbers and text, and as one line of CSV; both ways without loss.

Rows are made *canonical* before they are written or sent: a number is a finite float, an
integer is an int of at most 64 bits, a string has no line breaks or other control characters
(they become text such as ``\\n``) and is never empty (that is None). A canonical row reads back
from its line as the same row, so it does not matter by which way a row came.

Lines follow RFC 4180 in quoting; they end in one line feed; a cell never holds a line break.
"""

from __future__ import annotations

import csv
import math
import operator
from collections.abc import Callable, Iterable, Iterator

from acquire.errors import JournalError, RowError
from acquire.tables import Cell, Row, Table

LONGEST_LINE = 65_536  # bytes; the csv module reads cells of up to 131 072 characters

_ESCAPES = {code: f"\\x{code:02x}" for code in (*range(0x20), *range(0x7F, 0xA0))}
_ESCAPES |= {code: f"\\u{code:04x}" for code in (0x2028, 0x2029, *range(0xD800, 0xE000))}
_ESCAPES |= {ord("\t"): "\\t", ord("\n"): "\\n", ord("\r"): "\\r"}


class RowCodec:
    """Rows of one table to lines and back. Has no state; any thread may use it."""

    def __init__(self, table: Table) -> None:
        self.table = table
        self.header = (",".join(_quoted(name) for name in table.names) + "\n").encode()
        kinds = [column.kind for column in table.columns]
        self._clean: list[Callable[[Cell], Cell]] = [_CLEAN[kind] for kind in kinds[1:]]
        self._parse: list[Callable[[str], Cell]] = [_PARSE[kind] for kind in kinds]

    def canonical(self, cells: Row) -> Row:
        """The cells of a row without its ``seq`` as they will read back.

        Raises RowError for a wrong number of cells, a wrong kind, nan or infinity.
        """
        if len(cells) != len(self._clean):
            wanted = f"{len(self._clean)} cells after seq, got {len(cells)}"
            raise RowError(f"{self.table.path}: a row takes {wanted}.")
        try:
            return tuple([clean(cell) for clean, cell in zip(self._clean, cells)])
        except (TypeError, ValueError, OverflowError):
            raise RowError(f"{self.table.path}: {self._culprit(cells)}.") from None

    def line(self, row: Row) -> bytes:
        """One line of CSV for a canonical row with its ``seq``. Raises RowError if too long."""
        line = (",".join([_text(cell) for cell in row]) + "\n").encode("utf-8")
        if len(line) > LONGEST_LINE:
            size = f"{len(line)} bytes, at most {LONGEST_LINE}"
            raise RowError(f"{self.table.path}: a row is too long ({size}).")
        return line

    def rows(self, lines: Iterable[str], first: int) -> Iterator[Row]:
        """Rows out of complete lines of CSV, the first of which must have the number ``first``.

        Raises JournalError at the first line that is not a row of this table in its turn.
        """
        expected, width, parsers = first, len(self._parse), self._parse
        reader = csv.reader(lines, strict=True)
        while True:
            try:
                fields = next(reader)
                if len(fields) != width:
                    raise ValueError
                row = tuple([parse(field) for parse, field in zip(parsers, fields)])
                if row[0] != expected:
                    raise ValueError
            except StopIteration:
                return
            except (ValueError, csv.Error):
                where = f"{self.table.path}, line {expected + 2}"
                raise JournalError(
                    f"{where}: not the row number {expected} of this table; compare it with its "
                    "neighbours, or put it back from a copy."
                ) from None
            yield row
            expected += 1

    def rows_in(self, data: bytes, first: int) -> list[Row]:
        """Rows out of a piece of a journal that ends with a line. Raises JournalError."""
        try:
            text = data.decode("utf-8")
        except UnicodeDecodeError as error:
            place = f"{self.table.path}, byte {error.start} after row {first}"
            raise JournalError(f"{place}: is not UTF-8.") from None
        if text and not text.endswith("\n"):
            raise JournalError(f"{self.table.path}: the piece from row {first} on is torn.")
        return list(self.rows(text.split("\n")[:-1], first))

    def _culprit(self, cells: Row) -> str:
        for column, clean, cell in zip(self.table.columns[1:], self._clean, cells):
            try:
                clean(cell)
            except (TypeError, ValueError, OverflowError):
                return f"{cell!r:.80} is no {_WANTED[column.kind]} for the column {column.name}"
        raise AssertionError("a cell that was refused is accepted now")


def _clean_integer(cell: Cell) -> Cell:
    if cell is None:
        return None
    value = int(operator.index(cell))  # type: ignore[arg-type]
    if not -(2**63) <= value < 2**63:
        raise ValueError
    return value


def _clean_number(cell: Cell) -> Cell:
    if cell is None:
        return None
    if isinstance(cell, str):
        raise TypeError
    value = float(cell)
    if not math.isfinite(value):
        raise ValueError
    return value


def _clean_string(cell: Cell) -> Cell:
    if cell is None or cell == "":
        return None
    if not isinstance(cell, str):
        raise TypeError
    text = str(cell)
    return text if text.isprintable() else text.translate(_ESCAPES)


def _parse_number(text: str) -> Cell:
    if not text:
        return None
    value = float(text)
    if not math.isfinite(value):
        raise ValueError
    return value


def _text(cell: Cell) -> str:
    if cell is None:
        return ""
    return _quoted(cell) if isinstance(cell, str) else repr(cell)


def _quoted(text: str) -> str:
    if "," in text or '"' in text:
        return '"' + text.replace('"', '""') + '"'
    return text


_CLEAN: dict[str, Callable[[Cell], Cell]] = {
    "integer": _clean_integer,
    "number": _clean_number,
    "string": _clean_string,
}
_PARSE: dict[str, Callable[[str], Cell]] = {
    "integer": lambda text: int(text) if text else None,
    "number": _parse_number,
    "string": lambda text: text or None,
}
_WANTED = {"integer": "integer of 64 bits", "number": "finite number", "string": "text"}
