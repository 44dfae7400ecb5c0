"""From files to one measured table."""

from __future__ import annotations

import stat
from array import array
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from acquire.config.table import TableSection
from acquire.errors import TableError
from acquire.table.decoding import decode, lines_of
from acquire.table.dialect import Layout, find_layout
from acquire.table.measured import BadRow, MeasuredFile, MeasuredTable, TableReadings
from acquire.table.rows import FileRows, read_rows
from acquire.table.separator import printable
from acquire.table.time_line import join_times

LONGEST_TEXT = 200  # characters of a bad row that are kept
UNTIMED = (
    "There is no time column: the order of the rows stands for it, and the delay of the filter "
    "can't be corrected."
)


@dataclass(frozen=True)
class _Read:
    """One file, read."""

    file: MeasuredFile
    layout: Layout
    rows: FileRows
    bad_rows: dict[int, BadRow]
    torn: bool  # the last line has no end


def read_table(section: TableSection, paths: Sequence[Path]) -> MeasuredTable:
    """Read files, in the order given, as one run. Nothing is written.

    The numbers stay as they are in the files; the scales are left to whoever uses the readings.
    Raises TableError for whatever can't be read as the section says.
    """
    if not paths:
        raise TableError("no table was given; name at least one file.")
    files = [_read_file(section, path) for path in _distinct(paths)]
    numbers, bad = array("d"), {}
    for file in files:
        offset = len(numbers) // file.rows.stride
        numbers.extend(file.rows.numbers)
        bad.update({offset + row: one for row, one in file.bad_rows.items()})
    stride = files[0].rows.stride
    times, notes = _times(section, files)
    details = {row: str(one) for row, one in bad.items()}
    return MeasuredTable(
        TableReadings(times, numbers, stride, details),
        tuple(bad.values()),
        section.time is not None,
        tuple(file.file for file in files),
        tuple(files[0].layout.name(place) for place in files[0].layout.places[:stride]),
        (*_reading_notes(files), *notes),
    )


def _distinct(paths: Sequence[Path]) -> list[Path]:
    """The paths. Raises TableError for a file that would count twice."""
    seen: set[Path] = set()
    for path in map(Path, paths):
        try:
            real = path.resolve()
        except (OSError, ValueError, RuntimeError) as error:
            raise TableError(f"{path}: can't be found ({error}).") from None
        if real in seen:
            raise TableError(f"{path}: is given twice; name each file once.")
        seen.add(real)
    return list(map(Path, paths))


def _read_file(section: TableSection, path: Path) -> _Read:
    try:
        return _read(section, path)
    except TableError as error:
        raise TableError(f"{path}: {error}") from None


def _read(section: TableSection, path: Path) -> _Read:
    text, encoding = decode(_bytes(path), section.encoding, section.delimiter)
    lines = lines_of(text)
    layout = find_layout(lines, section)
    rows = read_rows(lines, layout, section)
    _check_marks(rows, section)
    bad = {
        row: BadRow(path, line, reason, printable(lines[line - 1].strip()[:LONGEST_TEXT]))
        for row, (line, reason) in rows.refused.items()
    }
    if not rows.good:
        first = next(iter(bad.values()))
        raise TableError(f"none of its {len(rows)} rows can be used; the first: {first}")
    heading_line = None if layout.heading_line is None else layout.heading_line + 1
    file = MeasuredFile(
        path, len(rows), len(bad), layout.first_line + 1, heading_line,
        layout.separator.words, encoding,
    )  # fmt: skip
    return _Read(file, layout, rows, bad, bool(lines[-1].strip()))


def _bytes(path: Path) -> bytes:
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            raise TableError("is a folder; name the table in it.")
        if not (stat.S_ISREG(mode) or stat.S_ISFIFO(mode)):
            raise TableError("is not a file.")
        return path.read_bytes()
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise TableError(f"can't be read ({reason}).") from None


def _check_marks(rows: FileRows, section: TableSection) -> None:
    """Refuse a table most of whose numbers have the other decimal mark."""
    if rows.other_marks > rows.good:
        other = "." if section.decimal == "," else ","
        raise TableError(
            f"{rows.other_marks} rows, most of all, have numbers with other marks than decimal = "
            f'"{section.decimal}"; set decimal = "{other}" if that is meant, and write thousands '
            "without marks."
        )


def _times(section: TableSection, files: Sequence[_Read]) -> tuple[Sequence[float], list[str]]:
    """The times of all rows, and what there is to say about them."""
    if section.time is None:
        return range(sum(len(file.rows) for file in files)), [UNTIMED]
    times, moves, origin = join_times([file.rows for file in files])
    notes = []
    if origin:
        notes.append(f"Time counts from the first row, which is at {origin:g} s in its file.")
    for file, move in zip(files, moves):
        if move:
            notes.append(
                f"{file.file.path.name}: its time begins anew, so it was put behind the file "
                f"before it; {move:.6g} s were added."
            )
    return times, notes


def _reading_notes(files: Sequence[_Read]) -> list[str]:
    notes = [f"{file.file}." for file in files]
    for file in files:
        if file.torn:
            notes.append(
                f"{file.file.path.name}: its last line has no end; if the file was cut off there, "
                "the last number is too short."
            )
    return notes
