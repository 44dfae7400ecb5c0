"""How far a subscriber has come, without any socket."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from acquire.bus.progress import MOST_AHEAD, PATIENCE_S, SILENCE_S, StreamProgress
from acquire.bus.wire import Answer, Message, pack, unpack
from acquire.cells import RowCodec
from acquire.tables import SEQ, TIME, Column, Table

TABLE = Table("a", "a.csv", "", (SEQ, TIME, Column("text", "string")))
CODEC = RowCodec(TABLE)


def row(seq):
    return (seq, seq / 10, f"row {seq}")


def message(seq, run="run", stream="a", cells=None):
    return pack(Message(run, stream, seq, row(seq)[1:] if cells is None else cells))


def answer(start, count, most=1000, run="run", stream="a", lines=None):
    """What a publisher with ``count`` rows answers when asked from ``start`` on."""
    first = max(count - 1, 0) if start < 0 else min(start, count)
    if lines is None:
        lines = b"".join(CODEC.line(row(seq)) for seq in range(first, min(first + most, count)))
    return pack(Answer(run, stream, start, first, count, lines))


def started(start=0, count=0):
    """A subscriber whose first question has been answered."""
    progress = StreamProgress("run", TABLE, start)
    progress.take_answer(answer(progress.ask(0.0), count), 0.0)
    return progress


def test_it_asks_at_once_and_again_until_it_is_answered():
    progress = StreamProgress("run", TABLE, 0)
    assert progress.next_question() == float("-inf")
    assert progress.ask(5.0) == 0
    assert progress.next_question() == 5.0 + PATIENCE_S
    assert progress.ask(6.0) == 0


def test_what_is_there_is_got_by_asking_and_what_comes_is_taken():
    progress = StreamProgress("run", TABLE, 0)
    assert progress.take_answer(answer(progress.ask(0.0), 2), 0.0) == [row(0), row(1)]
    assert progress.take_message(message(2), 0.1) == [row(2)]
    health = progress.health()
    assert (health.last_seq, health.last_heard_monotonic, health.filled) == (2, 0.1, 2)


def test_a_silent_stream_is_asked():
    progress = started()
    progress.take_message(message(0), 7.0)
    assert progress.next_question() == 7.0 + SILENCE_S
    assert progress.ask(8.0) == 1
    progress.take_answer(answer(1, 1), 8.1)
    assert progress.health().last_heard_monotonic == 8.1
    assert progress.next_question() == 8.1 + SILENCE_S


def test_a_new_subscriber_asks_soon_again_until_rows_come_unasked():
    """What is published before its connection stands is lost."""
    progress, now, pauses = StreamProgress("run", TABLE, 0), 0.0, []
    for _ in range(7):
        progress.take_answer(answer(progress.ask(now), 0), now)
        pauses.append(progress.next_question() - now)
        now = progress.next_question()
    assert pauses == sorted(pauses)
    assert pauses[0] < 0.2
    assert sum(pauses[:3]) < SILENCE_S
    assert pauses[-1] == pytest.approx(SILENCE_S)
    progress.take_message(message(0), now)
    assert progress.next_question() == now + SILENCE_S


def test_a_publisher_that_does_not_answer_is_abandoned_until_it_does():
    progress = started(count=2)
    assert progress.abandoned is None
    progress.ask(1.0)
    assert progress.abandoned is None
    progress.ask(2.0)
    assert progress.abandoned == 2
    assert progress.take_rows([row(2), row(3)], 2) == [row(2), row(3)]
    assert progress.take_rows([row(3), row(4)], 3) == [row(4)]
    assert progress.take_rows([row(7)], 7) == []
    assert progress.health().last_heard_monotonic == 0.0
    progress.take_answer(answer(4, 5), 2.1)
    assert progress.abandoned is None


def test_a_gap_is_asked_for_at_once_and_closed_in_order():
    progress = started()
    assert progress.take_message(message(2), 0.1) == []
    assert progress.next_question() == float("-inf")
    assert progress.ask(0.2) == 0
    assert progress.take_message(message(4), 0.2) == []
    assert progress.take_answer(answer(0, 3), 0.3) == [row(0), row(1), row(2)]
    assert progress.next_question() == float("-inf")  # 4 came after the question
    assert progress.take_message(message(3), 0.4) == [row(3), row(4)]
    assert progress.health().filled == 3


def test_a_long_way_is_caught_up_in_pieces():
    progress, got = StreamProgress("run", TABLE, 0), []
    for _ in range(4):
        assert progress.next_question() == float("-inf")
        got += progress.take_answer(answer(progress.ask(0.0), 10, most=3), 0.0)
    assert got == [row(seq) for seq in range(10)]
    assert 0 < progress.next_question() <= SILENCE_S


def test_what_came_already_is_not_delivered_again():
    progress = started(count=3)
    assert progress.take_message(message(1), 0.1) == []
    assert progress.take_answer(answer(0, 3), 0.1) == []
    assert progress.take_answer(answer(1, 4), 0.1) == [row(3)]
    assert progress.health().rewound == 0


def test_from_the_newest_on():
    progress = StreamProgress("run", TABLE, -1)
    assert progress.take_message(message(7), 0.0) == []
    assert progress.ask(0.0) == -1
    assert progress.take_message(message(8), 0.0) == []
    assert progress.take_answer(answer(-1, 8), 0.0) == [row(7), row(8)]
    assert progress.health().last_seq == 8
    assert started(-1).take_message(message(0), 0.0) == [row(0)]


def test_rows_kept_ahead_of_a_gap_are_bounded():
    progress = started()
    for seq in range(1, MOST_AHEAD + 500):
        assert progress.take_message(message(seq), 0.0) == []
    got = progress.take_answer(answer(progress.ask(0.0), MOST_AHEAD + 500, most=1), 0.0)
    assert got == [row(seq) for seq in range(MOST_AHEAD + 1)]
    assert progress.next_question() == float("-inf")


def test_a_number_from_nowhere_neither_stops_nor_floods_the_publisher():
    progress = started()
    progress.take_message(message(10**12), 0.0)
    progress.take_answer(answer(progress.ask(0.0), 0), 0.1)
    assert progress.next_question() > 0.1
    assert progress.take_message(message(0), 0.2) == [row(0)]


def test_a_publisher_that_cannot_record_is_known_by_its_answers_until_it_publishes():
    one = started(0, 3)
    one.ask(0.0)
    one.take_answer(pack(Answer("run", "a", 3, 3, 3, b"", "disk full")), 0.0)
    assert one.health().trouble == "disk full"
    one.take_message(message(3), 1.0)
    assert one.health().trouble == ""


def test_a_publisher_that_has_lost_rows_is_noticed():
    progress = started(count=5)
    assert progress.take_answer(answer(progress.ask(1.0), 3), 1.0) == []
    assert progress.health().rewound == 1


@pytest.mark.parametrize(
    "data",
    [
        message(0, run="other"),
        message(0, stream="b"),
        message(0, cells=(0.5,)),
        message(0, cells=(0.5, "x", "y")),
        message(0, cells=("0.5", "x")),
        message(0, cells=(float("nan"), "x")),
        message(-1),
        message(2**64 - 1),
        pack(Answer("run", "a", 0, 0, 0, b"")),
        b"",
        b"\x90" * 10_000,
        b"\x91" * 10_000,
        b"garbage",
        b"\xff\xfe",
    ],
)
def test_a_message_that_is_none_of_ours_is_counted_and_dropped(data):
    progress = started()
    assert progress.take_message(data, 9.0) == []
    health = progress.health()
    assert (health.refused, health.last_seq, health.last_heard_monotonic) == (1, -1, 0.0)
    assert progress.take_message(message(0), 9.0) == [row(0)]


@pytest.mark.parametrize(
    "data",
    [
        answer(0, 2, run="other"),
        answer(0, 2, stream="b"),
        answer(0, 2, lines=b"0,0.5,x\n1,0.5"),
        answer(0, 2, lines=b"0,0.5,x\n0,0.5,x\n"),
        answer(0, 2, lines=b"1,0.5,x\n"),
        answer(0, 2, lines=b"0,nan,x\n"),
        answer(0, 2, lines=b"\xff\n"),
        answer(0, 2, lines=b"\n"),
        message(0),
        b"",
    ],
)
def test_an_answer_that_is_none_of_ours_is_counted_and_dropped(data):
    progress = started()
    assert progress.take_answer(data, 9.0) == []
    assert progress.health().refused == 1
    assert progress.take_answer(answer(0, 2), 9.0) == [row(0), row(1)]


@settings(max_examples=300)
@given(st.binary(max_size=60))
def test_no_bytes_raise(data):
    progress = started()
    assert progress.take_message(data, 0.0) == []
    assert progress.take_answer(data, 0.0) == []
    for kind in (Message, Answer):
        unpack(kind, data)


STEPS = st.lists(
    st.sampled_from(
        ["publish", "publish and lose", "deliver", "deliver twice", "deliver late", "ask",
         "ask and lose", "answer", "answer twice", "lose an answer", "wait"]
    ),
    max_size=60,
)  # fmt: skip


@settings(max_examples=300, deadline=None)
@given(STEPS, st.integers(-1, 4), st.integers(0, 6), st.integers(1, 4))
def test_every_row_comes_once_and_in_order_whatever_is_lost(steps, start, already, most):
    progress = StreamProgress("run", TABLE, start)
    count, now, messages, answers, got = already, 0.0, [], [], []

    def ask():
        if progress.next_question() <= now:
            answers.append(answer(progress.ask(now), count, most))

    for step in steps:
        if step.startswith("publish"):
            if step == "publish":
                messages.append(message(count))
            count += 1
        elif step.startswith("deliver") and messages:
            data = messages.pop(-1 if step == "deliver late" else 0)
            for _ in range(2 if step == "deliver twice" else 1):
                got += progress.take_message(data, now)
        elif step == "ask":
            ask()
        elif step == "ask and lose" and progress.next_question() <= now:
            progress.ask(now)
        elif step.startswith("answer") and answers:
            data = answers.pop(0)
            for _ in range(2 if step == "answer twice" else 1):
                got += progress.take_answer(data, now)
        elif step == "lose an answer" and answers:
            answers.pop()
        elif step == "wait":
            now += 0.6
    for _ in range(200):  # then all goes well again, for long enough
        now += 0.6
        ask()
        while answers:
            got += progress.take_answer(answers.pop(0), now)
    begin = got[0][0] if start < 0 and got else max(start, 0)
    assert got == [row(seq) for seq in range(begin, count)]
    assert got or max(start, 0) >= count
    assert progress.health().refused == 0
