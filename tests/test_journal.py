import errno
import os
import resource
import signal
import subprocess
import sys
import tempfile
import threading
from pathlib import Path

import journal_writer
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from journal_writer import TABLE

from acquire.cells import LONGEST_LINE
from acquire.errors import JournalError
from acquire.journal import Journal, read_rows
from acquire.journal_reader import JournalFollower

HEADER = b"seq,time_s,detail,x\n"
ROWS = [(0, 0.1, None, 1e-05), (1, 0.2, 'µ,"x"', -0.0), (2, 0.30000000000000004, "ok", None)]


@pytest.fixture
def path(tmp_path):
    return tmp_path / "a.csv"


def write(path, rows=ROWS):
    with Journal(path, TABLE) as journal:
        return [journal.append(row[1:]) for row in rows]


def test_rows_are_counted_from_0_and_read_back(path):
    assert write(path) == [0, 1, 2]
    assert list(read_rows(path, TABLE)) == ROWS
    assert list(read_rows(path, TABLE, 2)) == ROWS[2:]
    assert list(read_rows(path, TABLE, 5)) == []


def test_the_file_is_csv_with_a_header(path):
    write(path)
    lines = ["0,0.1,,1e-05", '1,0.2,"µ,""x""",-0.0', "2,0.30000000000000004,ok,"]
    assert path.read_bytes() == HEADER + "".join(f"{line}\n" for line in lines).encode()


def test_a_reopened_journal_goes_on_counting(path):
    write(path)
    with Journal(path, TABLE) as journal:
        assert (journal.next_seq, journal.torn) == (3, 0)
        assert journal.record((1, "", 2)) == (3, 1.0, None, 2.0)
    assert list(read_rows(path, TABLE)) == [*ROWS, (3, 1.0, None, 2.0)]


NUMBER = st.none() | st.floats(allow_nan=False, allow_infinity=False)
CELLS = st.tuples(NUMBER, st.none() | st.text(max_size=20), NUMBER)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.lists(CELLS, max_size=6), max_size=4))
def test_whatever_is_written_over_several_openings_reads_back(sessions):
    with tempfile.TemporaryDirectory() as folder:
        path, rows = Path(folder, "a.csv"), []
        for session in sessions:
            with Journal(path, TABLE) as journal:
                rows += [journal.record(cells) for cells in session]
                assert list(map(repr, read_rows(path, TABLE))) == list(map(repr, rows))
        assert [row[0] for row in rows] == list(range(len(rows)))


def test_a_line_torn_at_any_byte_is_cut_away(path):
    write(path)
    whole = path.read_bytes()
    for size in range(len(whole) + 1):
        path.write_bytes(whole[:size])
        complete = max(whole[:size].count(b"\n") - 1, 0)
        if size >= len(HEADER):
            assert list(read_rows(path, TABLE)) == ROWS[:complete]
        with Journal(path, TABLE) as journal:
            kept = whole[:size].rfind(b"\n") + 1
            assert (journal.next_seq, journal.torn) == (complete, size - kept)
            assert path.read_bytes() == (whole[:kept] or HEADER)
            journal.append((9, "after", 9))
        assert list(read_rows(path, TABLE)) == [*ROWS[:complete], (complete, 9.0, "after", 9.0)]


@pytest.mark.parametrize(
    "tail", [b"\0" * 5000, b"3,0.4,o" + b"\0" * 90 + b"k,1.0\n80,0.5,ok,2.0\n"]
)
def test_what_a_power_cut_leaves_is_cut_away(path, tail):
    """A length that reached the disk before its content reads as NUL bytes."""
    write(path)
    whole = path.read_bytes()
    path.write_bytes(whole + tail)
    assert list(read_rows(path, TABLE)) == ROWS
    with Journal(path, TABLE) as journal:
        assert (journal.next_seq, journal.torn) == (3, len(tail))
    assert path.read_bytes() == whole
    kept = path.with_name("a.csv.cut")
    assert (kept.read_bytes() if kept.exists() else None) == (tail if b"\n" in tail else None)


def test_nul_bytes_for_a_header_are_cut_away(path):
    path.write_bytes(b"\0" * 100)
    write(path)
    assert list(read_rows(path, TABLE)) == ROWS


@pytest.mark.parametrize("content", [b"seq,time_s,other\n0,1.0,2.0\n", b"hello", b"\n", b"\xff\n"])
def test_a_file_that_is_not_this_table_is_refused_and_left_alone(path, content):
    path.write_bytes(content)
    with pytest.raises(JournalError, match="not the header of this table"):
        Journal(path, TABLE)
    with pytest.raises(JournalError, match="not the header of this table"):
        list(read_rows(path, TABLE))
    assert path.read_bytes() == content


def test_a_row_out_of_turn_is_refused_and_left_alone(path):
    write(path)
    content = path.read_bytes().replace(b"\n1,", b"\n7,")
    path.write_bytes(content)
    with pytest.raises(JournalError, match="line 3: not the row number 1"):
        Journal(path, TABLE)
    with pytest.raises(JournalError, match="line 3: not the row number 1"):
        list(read_rows(path, TABLE))
    assert path.read_bytes() == content


def test_bytes_that_are_no_text_are_refused_with_their_line(path):
    write(path)
    path.write_bytes(path.read_bytes().replace(b"ok", b"\xff\xfe"))
    with pytest.raises(JournalError, match="line 4"):
        list(read_rows(path, TABLE))


def test_a_missing_file_or_folder_is_told(tmp_path):
    with pytest.raises(JournalError, match="No such file"):
        list(read_rows(tmp_path / "no.csv", TABLE))
    with pytest.raises(JournalError, match="No such file"):
        Journal(tmp_path / "no" / "a.csv", TABLE)
    with pytest.raises(JournalError, match="Is a directory"):
        Journal(tmp_path, TABLE)


def test_refused_cells_leave_the_journal_as_it_was(path):
    write(path)
    before = path.read_bytes()
    with Journal(path, TABLE) as journal:
        for cells in [(float("nan"), "", 0), (0, "", "x"), (0, ""), (0, "x" * LONGEST_LINE, 0)]:
            with pytest.raises(JournalError):
                journal.append(cells)
        assert journal.next_seq == 3
    assert path.read_bytes() == before


def test_somebody_else_writing_is_refused(path):
    with Journal(path, TABLE) as first:
        with pytest.raises(JournalError, match="somebody else is writing"):
            Journal(path, TABLE)
        first.append((0, "", 0))
    with Journal(path, TABLE) as again:
        assert again.next_seq == 1


def test_a_full_disk_loses_nothing_and_is_got_over(path):
    """A limit on the size of files stands for the full disk: it too writes a part of the line."""
    write(path)
    before = path.read_bytes()
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    with Journal(path, TABLE) as journal:
        resource.setrlimit(resource.RLIMIT_FSIZE, (len(before) + 5, hard))
        try:
            for _ in range(2):
                with pytest.raises(JournalError, match="can't be written .File too large"):
                    journal.append((0.4, "does not fit", 4))
                assert path.read_bytes() == before
        finally:
            resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        assert journal.append((0.4, "fits", 4)) == 3
    assert list(read_rows(path, TABLE)) == [*ROWS, (3, 0.4, "fits", 4.0)]


def half_then(error):
    """A write that gets half of the line to the disk and then fails."""

    def write(fd, data):
        real_write(fd, data[: len(data) // 2])
        raise error

    real_write = os.write
    return write


def test_a_tail_that_could_not_be_cut_at_once_is_cut_later(path, monkeypatch):
    def broken(fd, length):
        raise OSError(errno.EIO, "Input/output error")

    with Journal(path, TABLE) as journal:
        with monkeypatch.context() as patch:
            patch.setattr(os, "write", half_then(OSError(errno.ENOSPC, "No space left on device")))
            patch.setattr(os, "ftruncate", broken)
            with pytest.raises(JournalError, match="No space left"):
                journal.append((1, "torn", 1))
        with monkeypatch.context() as patch:
            patch.setattr(os, "ftruncate", broken)
            with pytest.raises(JournalError, match="can't be mended"):
                journal.append((1, "refused", 1))
        assert journal.append((1, "whole", 1)) == 0
    assert list(read_rows(path, TABLE)) == [(0, 1.0, "whole", 1.0)]


def test_an_interrupt_inside_a_write_leaves_no_half_row(path, monkeypatch):
    with Journal(path, TABLE) as journal:
        with monkeypatch.context() as patch:
            patch.setattr(os, "write", half_then(KeyboardInterrupt()))
            with pytest.raises(KeyboardInterrupt):
                journal.append((1, "torn", 1))
        assert journal.append((1, "whole", 1)) == 0
    assert list(read_rows(path, TABLE)) == [(0, 1.0, "whole", 1.0)]


def test_a_failed_sync_is_told_and_tried_again(path, monkeypatch):
    synced = []

    def broken(fd):
        raise OSError(errno.EIO, "Input/output error")

    with Journal(path, TABLE) as journal:
        journal.append((1, "", 1))
        with monkeypatch.context() as patch:
            patch.setattr(os, "fsync", broken)
            with pytest.raises(JournalError, match="can't be synced"):
                journal.sync()
        monkeypatch.setattr(os, "fsync", synced.append)
        journal.sync()
        journal.sync()  # nothing new
        assert len(synced) == 1


def test_a_file_that_is_removed_while_it_is_written_is_put_back(path):
    with Journal(path, TABLE) as journal:
        journal.append((1, "before", 1))
        path.unlink()
        journal.append((2, "while it has no name", 2))
        with pytest.raises(JournalError, match="was removed while it was written"):
            journal.sync()
        journal.sync()
        journal.append((3, "after", 3))
        with pytest.raises(JournalError, match="somebody else is writing"):
            Journal(path, TABLE)
        assert journal.piece(0).lines.count(b"\n") == 3
    texts = [row[2] for row in read_rows(path, TABLE)]
    assert texts == ["before", "while it has no name", "after"]
    assert [file.name for file in path.parent.iterdir()] == [path.name]


def test_a_file_that_is_replaced_while_it_is_written_is_put_back_and_the_other_kept(path):
    with Journal(path, TABLE) as journal:
        for number in range(2):
            journal.append((number, "ours", 1))
            saved = path.with_name("saved")
            saved.write_text(f"from a spreadsheet {number}")
            saved.replace(path)
            with pytest.raises(JournalError, match="was replaced by another file .now a.csv.other"):
                journal.sync()
    assert len(list(read_rows(path, TABLE))) == 2
    kept = [path.with_name(f"{path.name}.other{end}").read_text() for end in ("", "-2")]
    assert kept == ["from a spreadsheet 0", "from a spreadsheet 1"]


def test_a_folder_that_is_taken_away_is_told_until_it_is_back(path):
    elsewhere = path.parent.with_name("elsewhere")
    journal = Journal(path, TABLE)
    journal.append((1, "ours", 1))
    path.parent.rename(elsewhere)
    for _ in range(2):
        with pytest.raises(JournalError, match="can't be put back .No such file"):
            journal.sync()
    elsewhere.rename(path.parent)
    journal.close()
    assert [row[2] for row in read_rows(path, TABLE)] == ["ours"]


def test_rows_of_a_killed_predecessor_are_synced(path, monkeypatch):
    write(path)
    synced = []
    monkeypatch.setattr(os, "fsync", synced.append)
    with Journal(path, TABLE) as journal:
        journal.sync()
        assert len(synced) == 1


def test_a_closed_journal_takes_nothing(path):
    journal = Journal(path, TABLE)
    journal.close()
    journal.close()
    journal.sync()
    with pytest.raises(JournalError, match="is closed"):
        journal.append((0, "", 0))
    with pytest.raises(JournalError, match="is closed"):
        journal.piece(0)


def test_pieces_are_the_lines_on_disk(path):
    write(path)
    lines = path.read_bytes().splitlines(keepends=True)[1:]
    with Journal(path, TABLE) as journal:
        for start in range(6):
            for rows in range(1, 5):
                piece = journal.piece(start, rows)
                first = min(start, 3)
                assert (piece.first, piece.next_seq) == (first, 3)
                assert piece.lines == b"".join(lines[first : first + rows])
        assert journal.piece(-1).lines == lines[2]
        assert journal.piece(-1).first == 2


def test_pieces_keep_to_their_size_but_hold_a_row(path):
    write(path)
    lines = path.read_bytes().splitlines(keepends=True)[1:]
    two = len(lines[0] + lines[1])
    with Journal(path, TABLE) as journal:
        assert journal.piece(0, most_bytes=two).lines == lines[0] + lines[1]
        assert journal.piece(0, most_bytes=two - 1).lines == lines[0]
        assert journal.piece(0, most_bytes=1).lines == lines[0]
        assert journal.piece(2, most_bytes=1).lines == lines[2]


def test_pieces_of_an_empty_journal_are_empty(path):
    with Journal(path, TABLE) as journal:
        for start in (-1, 0, 7):
            piece = journal.piece(start)
            assert (piece.first, piece.lines, piece.next_seq) == (0, b"", 0)


def test_a_piece_reads_nothing_but_itself(path, monkeypatch):
    """What a catch-up costs does not grow with the journal."""
    read = []
    pread = os.pread

    def watched(fd, size, offset):
        read.append(size)
        return pread(fd, size, offset)

    monkeypatch.setattr(os, "pread", watched)
    with Journal(path, TABLE) as journal:
        for number in range(5000):
            journal.append((number, "ok", number))
        pieces = [journal.piece(start, 100) for start in range(0, 5000, 100)]
    assert read == [len(piece.lines) for piece in pieces]
    assert HEADER + b"".join(piece.lines for piece in pieces) == path.read_bytes()


def test_a_journal_that_has_become_shorter_is_told(path):
    with Journal(path, TABLE) as journal:
        journal.append((0, "", 0))
        os.truncate(path, len(HEADER))
        with pytest.raises(JournalError, match="become shorter"):
            journal.piece(0)


def test_reading_beside_a_writer_sees_whole_rows_in_order(path):
    def run():
        with Journal(path, TABLE) as journal:
            opened.set()
            for number in range(3000):
                journal.append((number, "x" * (number % 50), number))

    opened = threading.Event()
    writer = threading.Thread(target=run)
    writer.start()
    opened.wait(20)
    count = 0
    while writer.is_alive():
        rows = list(read_rows(path, TABLE, count // 2))
        assert [row[0] for row in rows] == list(range(count // 2, count // 2 + len(rows)))
        assert len(rows) + count // 2 >= count
        count = len(rows) + count // 2
    writer.join()
    assert len(list(read_rows(path, TABLE))) == 3000


def test_a_follower_reads_what_is_new(path):
    with Journal(path, TABLE) as journal:
        follower = JournalFollower(path, TABLE)
        assert follower.read(0, 10) == []
        rows = [journal.record((number, "", number)) for number in range(7)]
        assert follower.read(0, 3) == rows[:3]
        assert follower.read(3, 10) == rows[3:]
        assert follower.read(7, 10) == []
        assert follower.read(9, 10) == []
        rows += [journal.record((number, "", number)) for number in range(3)]
        assert follower.read(7, 10) == rows[7:]
        assert follower.read(2, 2) == rows[2:4]
        assert follower.read(8, 10) == rows[8:]
        assert follower.next_seq == 10


def test_a_follower_waits_for_whole_lines(path):
    write(path)
    whole, got = path.read_bytes(), []
    follower = JournalFollower(path, TABLE)
    for size in range(len(whole) + 1):
        path.write_bytes(whole[:size])
        got += follower.read(len(got), 10)
        assert len(got) == max(whole[:size].count(b"\n") - 1, 0)
    assert got == ROWS


def test_a_follower_tells_what_it_can_not_read(path):
    with pytest.raises(JournalError, match="No such file"):
        JournalFollower(path, TABLE).read(0, 1)
    path.write_text("something else\n")
    with pytest.raises(JournalError, match="not the header"):
        JournalFollower(path, TABLE).read(0, 1)
    path.write_bytes(HEADER + b"4,0.1,,1.0\n")
    with pytest.raises(JournalError, match="not the row number 0"):
        JournalFollower(path, TABLE).read(0, 1)


def test_a_killed_writer_loses_nothing_that_it_has_reported(path):
    told = -1
    for _ in range(3):
        command = [sys.executable, journal_writer.__file__, str(path)]
        with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as writer:
            first = int(writer.stdout.readline())
            assert first > told
            for _ in range(200):
                told = int(writer.stdout.readline())
            writer.send_signal(signal.SIGKILL)
            told = int(([told, *map(int, writer.stdout.read().split())])[-1])
        rows = list(read_rows(path, TABLE))
        assert [row[0] for row in rows] == list(range(len(rows)))
        assert told < len(rows) <= told + 2
