import errno
import os
import signal
import subprocess
import sys
import threading
import time
from dataclasses import replace

import pytest
import row_publisher
import zmq
from row_publisher import TABLE

from acquire.bus import Endpoint, Publisher, Subscriber, free_endpoints
from acquire.bus.progress import SILENCE_S
from acquire.errors import BusError, JournalError
from acquire.journal import Journal, read_rows

FREE = Endpoint("tcp://127.0.0.1:0", "tcp://127.0.0.1:0")
PATIENCE_S = 30.0  # of a test; all is over much sooner where nothing is wrong


@pytest.fixture
def journal(tmp_path):
    with Journal(tmp_path / "a.csv", TABLE) as journal:
        yield journal


@pytest.fixture
def publisher(journal):
    with Publisher("run", TABLE, journal, FREE) as publisher:
        yield publisher


def subscriber_of(publisher, start=0, **options):
    return Subscriber("run", {"a": publisher.endpoint}, {"a": TABLE}, start, **options)


def receive(subscriber, count, stream="a"):
    """The next ``count`` rows, and whatever came with the last of them."""
    rows, deadline = [], time.monotonic() + PATIENCE_S
    while len(rows) < count:
        assert time.monotonic() < deadline, f"{len(rows)} of {count} rows in {PATIENCE_S} s"
        got = subscriber.receive(0.2)
        assert {name for name, _ in got} <= {stream}
        rows += [row for _, row in got]
    return rows


def join(publisher, subscriber):
    """Publish rows until one comes unasked; returns its number. From then on rows come live."""
    while True:
        filled = subscriber.health()["a"].filled
        seq = publisher.publish(0, None, None)
        assert receive(subscriber, 1) == [(seq, 0.0, None, None)]
        if subscriber.health()["a"].filled == filled:
            return seq


def test_rows_come_live_in_order_and_as_the_journal_has_them(publisher, journal):
    with subscriber_of(publisher) as subscriber:
        first = join(publisher, subscriber) + 1
        for number in range(first, first + 500):
            assert publisher.publish(number / 3, 'a "quoted",\nline µ', number) == number
        rows = receive(subscriber, 500)
    from_disk = list(read_rows(journal.path, TABLE, first))
    assert list(map(repr, rows)) == list(map(repr, from_disk))


def test_a_row_is_on_disk_before_anybody_sees_it(publisher, journal):
    with subscriber_of(publisher) as subscriber:
        for number in range(20):
            publisher.publish(number, "", 0)
            for row in receive(subscriber, 1):
                assert next(read_rows(journal.path, TABLE, row[0])) == row


def test_a_late_joiner_gets_all_and_goes_on_live(publisher):
    for number in range(100_000):
        publisher.publish(number, "detail", 1 / 3)
    with subscriber_of(publisher) as subscriber:
        begin = time.monotonic()
        rows = receive(subscriber, 100_000)
        assert time.monotonic() - begin < 10  # 0.4 s on an idle machine
        assert subscriber.health()["a"].filled == 100_000
        publisher.publish(1, "live", 1)
        rows += receive(subscriber, 1)
    assert [row[0] for row in rows] == list(range(100_001))
    assert rows[99_999] == (99_999, 99_999.0, "detail", 1 / 3)


def test_a_subscriber_goes_on_from_where_it_was(publisher):
    for number in range(10):
        publisher.publish(number, "", 0)
    for start, first in [(7, 7), ({"a": 4}, 4), ({}, 0), (-1, 9), ({"a": -1}, 9)]:
        with subscriber_of(publisher, start) as subscriber:
            assert [row[0] for row in receive(subscriber, 10 - first)] == list(range(first, 10))


def test_one_stream_whose_name_begins_another_is_not_mixed_with_it(tmp_path):
    """Subscriptions of the bus are prefixes."""
    tables = {name: replace(TABLE, stream=name) for name in ("readings/a", "readings/ab")}
    endpoints, publishers, journals = {}, [], []
    for name, table in tables.items():
        journals.append(Journal(tmp_path / name.replace("/", "-"), table))
        publishers.append(Publisher("run", table, journals[-1], FREE))
        endpoints[name] = publishers[-1].endpoint
    # "readings/a" listens where "readings/ab" speaks too
    swapped = {"readings/a": Endpoint(endpoints["readings/ab"].publish,
                                      endpoints["readings/a"].answer)}  # fmt: skip
    try:
        with (
            Subscriber("run", endpoints, tables) as both,
            Subscriber("run", swapped, {"readings/a": tables["readings/a"]}) as one,
        ):
            for number in range(50):
                for publisher in publishers:
                    publisher.publish(number, "", 0)
            got = []
            while len(got) < 100:
                got += both.receive(PATIENCE_S)
            for name in tables:
                assert [row[0] for stream, row in got if stream == name] == list(range(50))
            receive(one, 50, "readings/a")
            assert one.health()["readings/a"].refused == 0
    finally:
        for one_end in (*publishers, *journals):
            one_end.close()


def test_what_a_slow_subscriber_loses_is_filled(journal):
    """Beyond the high-water mark the publisher drops rows, in the middle and at the end."""
    count = 8000
    with (
        Publisher("run", TABLE, journal, FREE, high_water=10) as publisher,
        subscriber_of(publisher, high_water=10) as subscriber,
    ):
        first = join(publisher, subscriber) + 1
        before = subscriber.health()["a"].filled
        for number in range(count):
            publisher.publish(number, "x" * 4000, 0)
        rows = receive(subscriber, count)
        assert [row[0] for row in rows] == list(range(first, first + count))
        assert 0 < subscriber.health()["a"].filled - before < count
        publisher.publish(0, "the last", 0)
        assert receive(subscriber, 1)[0][2] == "the last"


def test_a_publisher_started_anew_goes_on_without_loss_or_double(tmp_path):
    endpoint, got = free_endpoints(["a"])["a"], []
    with Subscriber("run", {"a": endpoint}, {"a": TABLE}) as subscriber:
        for _ in range(4):
            with (
                Journal(tmp_path / "a.csv", TABLE) as journal,
                Publisher("run", TABLE, journal, endpoint) as publisher,
            ):
                for number in range(100):
                    publisher.publish(number, "", 0)
                got += receive(subscriber, journal.next_seq - len(got))
                publisher.publish(1, "nobody may hear this one in time", 0)
        assert subscriber.health()["a"].refused == 0
    rows = list(read_rows(tmp_path / "a.csv", TABLE))
    assert got == rows[: len(got)]
    assert len(rows) == 404
    assert len(got) >= 403


def test_a_killed_publisher_is_followed_through_its_restarts(tmp_path):
    endpoint, path, got, last = free_endpoints(["a"])["a"], tmp_path / "a.csv", [], 1500
    command = [sys.executable, row_publisher.__file__, str(path), endpoint.publish,
               endpoint.answer, str(last)]  # fmt: skip
    with Subscriber("run", {"a": endpoint}, {"a": TABLE}) as subscriber:
        for goal in (200, 500, 900, last + 1):
            pipes = {"stdin": subprocess.PIPE, "stdout": subprocess.PIPE}
            with subprocess.Popen(command, **pipes) as process:
                assert process.stdout.readline() == b"there\n"
                got += receive(subscriber, goal - len(got))
                process.send_signal(signal.SIGKILL)
        assert subscriber.receive(0) == []
    assert len(got) == last + 1
    assert got == list(read_rows(path, TABLE))


def test_questions_are_answered_while_the_owner_is_busy(publisher):
    """As it is while a reader waits for its instrument: nothing runs but the thread."""
    publisher.publish(1, "", 1)
    for _ in range(3):
        with subscriber_of(publisher) as subscriber:
            assert len(receive(subscriber, 1)) == 1


def test_a_silent_publisher_proves_that_it_lives(publisher):
    with subscriber_of(publisher) as subscriber:
        join(publisher, subscriber)
        before = subscriber.health()["a"].last_heard_monotonic
        begin = time.monotonic()
        assert subscriber.receive(SILENCE_S + 0.3) == []
        assert time.monotonic() - begin >= SILENCE_S + 0.3
        assert subscriber.health()["a"].last_heard_monotonic >= before + SILENCE_S


def test_a_publisher_that_has_gone_is_not_heard(journal):
    with Publisher("run", TABLE, journal, FREE) as publisher:
        subscriber = subscriber_of(publisher)
        join(publisher, subscriber)
    with subscriber:
        subscriber.receive(0.3)
        heard = subscriber.health()["a"].last_heard_monotonic
        assert subscriber.receive(SILENCE_S + 0.3) == []
        assert subscriber.health()["a"].last_heard_monotonic == heard


def test_a_publisher_that_has_gone_is_read_from_the_folder(tmp_path):
    """So a late joiner, or one that lost the last rows, has them all the same."""
    count, endpoint = 2500, free_endpoints(["a"])["a"]
    with Journal(tmp_path / "a.csv", TABLE) as journal:
        for number in range(count):
            journal.append((number, "", 0))
        with Subscriber("run", {"a": endpoint}, {"a": TABLE}, folder=tmp_path) as subscriber:
            assert [row[0] for row in receive(subscriber, count)] == list(range(count))
            assert subscriber.health()["a"].last_heard_monotonic is None
            journal.append((1, "", 0))
            assert receive(subscriber, 1) == [(count, 1.0, None, 0.0)]
            with Publisher("run", TABLE, journal, endpoint) as publisher:
                publisher.publish(2, "", 0)
                assert receive(subscriber, 1) == [(count + 1, 2.0, None, 0.0)]
            assert subscriber.health()["a"].refused == 0


def test_a_damaged_journal_is_counted_and_not_read(tmp_path):
    (tmp_path / "a.csv").write_text("something else\n")
    endpoint = free_endpoints(["a"])["a"]
    with Subscriber("run", {"a": endpoint}, {"a": TABLE}, folder=tmp_path) as subscriber:
        deadline = time.monotonic() + PATIENCE_S
        while not subscriber.health()["a"].refused:
            assert subscriber.receive(0.1) == []
            assert time.monotonic() < deadline


def test_connections_are_made_anew_after_a_long_silence(tmp_path, monkeypatch, wait_for):
    monkeypatch.setattr("acquire.bus.subscriber.RENEW_S", 0.05)
    endpoint = free_endpoints(["a"])["a"]
    with Subscriber("run", {"a": endpoint}, {"a": TABLE}) as subscriber:
        first = subscriber._streams["a"].sockets
        wait_for(lambda: subscriber.receive(0.1) or first[0].closed)
        assert first[1].closed
        with (
            Journal(tmp_path / "a.csv", TABLE) as journal,
            Publisher("run", TABLE, journal, endpoint) as publisher,
        ):
            publisher.publish(1, "", 1)
            assert len(receive(subscriber, 1)) == 1


def test_another_run_at_the_same_address_is_refused(journal):
    with (
        Publisher("an earlier run", TABLE, journal, FREE) as publisher,
        subscriber_of(publisher) as subscriber,
    ):
        deadline = time.monotonic() + PATIENCE_S
        while subscriber.health()["a"].refused < 3:  # its answer, and its rows
            publisher.publish(1, "", 1)
            assert subscriber.receive(0.05) == []
            assert time.monotonic() < deadline
        health = subscriber.health()["a"]
        assert (health.last_seq, health.last_heard_monotonic) == (-1, None)
        assert publisher.refused >= 1


@pytest.fixture
def raw_socket():
    """ZeroMQ sockets for somebody who does not keep to the rules."""
    with zmq.Context() as context:
        sockets = []

        def make(kind):
            sockets.append(context.socket(kind))
            sockets[-1].linger = 0
            return sockets[-1]

        yield make
        for socket in sockets:
            socket.close()


def test_malformed_frames_are_counted_and_do_no_harm(raw_socket, publisher):
    liar = raw_socket(zmq.PUB)
    port = liar.bind_to_random_port("tcp://127.0.0.1")
    endpoint = Endpoint(f"tcp://127.0.0.1:{port}", publisher.endpoint.answer)
    bad = [[b"a|"], [b"a|", b"\xc1"], [b"a|b", b""], [b"a|", b"", b""], [b"a|", b"\x91" * 5000]]
    with Subscriber("run", {"a": endpoint}, {"a": TABLE}) as subscriber:
        deadline = time.monotonic() + PATIENCE_S
        while subscriber.health()["a"].refused < 50:
            for frames in bad:
                liar.send_multipart(frames)
            assert subscriber.receive(0.01) == []
            assert time.monotonic() < deadline
        publisher.publish(1, "", 1)  # comes by asking
        assert receive(subscriber, 1) == [(0, 1.0, None, 1.0)]


def test_malformed_questions_are_counted_and_do_no_harm(raw_socket, publisher, wait_for):
    asker = raw_socket(zmq.DEALER)
    asker.connect(publisher.endpoint.answer)
    for frames in ([b""], [b"\xc1"], [b"", b"x"], [b"\x93\xa3run\xa1b\x00"], [b"\x91" * 9000]):
        asker.send_multipart(frames)
    wait_for(lambda: publisher.refused == 5)
    asker.send(b"\x93\xa3run\xa1a\x00")
    assert asker.poll(PATIENCE_S * 1000)
    publisher.publish(1, "", 1)
    with subscriber_of(publisher) as subscriber:
        assert len(receive(subscriber, 1)) == 1


def test_a_question_that_is_much_too_long_cuts_the_line(raw_socket, publisher):
    asker = raw_socket(zmq.DEALER)
    asker.connect(publisher.endpoint.answer)
    asker.send(bytes(10_000_000))
    publisher.publish(1, "", 1)
    with subscriber_of(publisher) as subscriber:
        assert len(receive(subscriber, 1)) == 1
    assert publisher.refused == 0


ELSEWHERE = [
    "tcp://0.0.0.0:0", "tcp://*:0", "tcp://192.168.1.5:0", "tcp://[::]:0", "tcp://8.8.8.8:20000",
    "tcp://lo:0", "tcp://localhost:0", "tcp://1270.0.0.1:0", "tcp://127.0.0.1.example.org:0",
    "tcp://127.0.0.1", "tcp://127.0.0.1:", "tcp://127.0.0.1:*", "tcp://127.0.0.1:99999",
    "tcp://127.0.0.1:0;0.0.0.0:1", "ipc:///tmp/socket", "inproc://x", "udp://127.0.0.1:0", "",
]  # fmt: skip


@pytest.mark.parametrize("address", ELSEWHERE)
def test_an_address_that_is_not_on_loopback_is_refused(journal, address):
    for endpoint in (Endpoint(address, FREE.answer), Endpoint(FREE.publish, address)):
        with pytest.raises(BusError, match=r"so keys are needed|is no address of the bus|is not the address of one"):
            Publisher("run", TABLE, journal, endpoint)
        with pytest.raises(BusError, match=r"so keys are needed|is no address of the bus|is not the address of one"):
            Subscriber("run", {"a": endpoint}, {"a": TABLE})


def test_all_of_loopback_may_be_used(journal):
    """Several addresses of it stand for several computers."""
    endpoint = Endpoint("tcp://127.0.0.2:0", "tcp://127.8.0.3:0")
    with Publisher("run", TABLE, journal, endpoint) as publisher:
        publisher.publish(1, "", 1)
        with subscriber_of(publisher) as subscriber:
            assert len(receive(subscriber, 1)) == 1


def test_a_taken_port_is_told_and_nothing_is_kept(publisher, journal, tmp_path):
    taken = publisher.endpoint
    with Journal(tmp_path / "b.csv", TABLE) as other:
        free = free_endpoints(["b"])["b"]
        for endpoint in (
            Endpoint(taken.publish, free.answer),
            Endpoint(free.publish, taken.answer),
        ):
            with pytest.raises(BusError, match="port is taken; end the program"):
                Publisher("run", TABLE, other, endpoint)
        with Publisher("run", TABLE, other, free) as second:
            assert second.endpoint == free


def test_streams_need_an_address_and_a_table(publisher):
    with pytest.raises(BusError, match="'b'"):
        Subscriber("run", {"a": publisher.endpoint, "b": FREE}, {"a": TABLE})


def test_free_addresses_differ_and_are_no_ports_for_outgoing_connections():
    endpoints = free_endpoints([f"stream {number}" for number in range(40)])
    addresses = [a for e in endpoints.values() for a in (e.publish, e.answer)]
    ports = {int(address.removeprefix("tcp://127.0.0.1:")) for address in addresses}
    assert len(ports) == 80
    assert all(20_000 <= port < 32_000 for port in ports)


def test_closing_does_not_wait_for_somebody_who_does_not_listen(journal, raw_socket, wait_for):
    frozen, asker = raw_socket(zmq.SUB), raw_socket(zmq.DEALER)
    publisher = Publisher("run", TABLE, journal, FREE)
    for socket, address in ((frozen, publisher.endpoint.publish),
                            (asker, publisher.endpoint.answer)):  # fmt: skip
        socket.rcvhwm = 1
        socket.connect(address)
    frozen.subscribe(b"")
    publisher.publish(1, "x" * 4000, 1)
    wait_for(lambda: publisher.publish(1, "x" * 4000, 1) and frozen.poll(0))
    for number in range(4000):
        publisher.publish(number, "x" * 4000, 1)
    for _ in range(100):
        asker.send(b"\x93\xa3run\xa1a\x00")
    begin = time.monotonic()
    publisher.close()
    assert time.monotonic() - begin < 1


def test_a_subscriber_without_publishers_closes_at_once():
    endpoint = free_endpoints(["a"])["a"]
    subscriber = Subscriber("run", {"a": endpoint}, {"a": TABLE})
    assert subscriber.receive(0.05) == []
    begin = time.monotonic()
    subscriber.close()
    subscriber.close()
    assert time.monotonic() - begin < 0.5
    with pytest.raises(BusError, match="is closed"):
        subscriber.receive(0)


def test_what_was_published_last_arrives_after_closing(journal):
    with Publisher("run", TABLE, journal, FREE) as publisher:
        subscriber = subscriber_of(publisher)
        last = join(publisher, subscriber) + 300
        for number in range(300):
            publisher.publish(number, "", 0)
    with subscriber:
        assert receive(subscriber, 300)[-1][0] == last


def test_a_closed_publisher_takes_nothing(journal):
    publisher = Publisher("run", TABLE, journal, FREE)
    publisher.close()
    publisher.close()
    with pytest.raises(BusError, match="is closed"):
        publisher.publish(1, "", 1)
    assert journal.next_seq == 0


def test_what_can_not_be_recorded_is_not_published_and_told(publisher, monkeypatch, wait_for):
    def full(fd, data):
        raise OSError(errno.ENOSPC, "No space left on device")

    with subscriber_of(publisher) as subscriber:
        first = join(publisher, subscriber) + 1
        with monkeypatch.context() as patch:
            patch.setattr(os, "write", full)
            with pytest.raises(JournalError, match="No space left"):
                publisher.publish(2, "lost", 2)
            # Nothing comes, so it is asked whether anything is new; the answer says why not.
            wait_for(lambda: told_trouble(subscriber) == "disk full", "it is told")
        with pytest.raises(JournalError, match="for the column x"):
            publisher.publish(2, "wrong", float("nan"))
        assert publisher.publish(3, "recorded", 3) == first
        assert receive(subscriber, 1) == [(first, 3.0, "recorded", 3.0)]
        assert told_trouble(subscriber) == ""


def told_trouble(subscriber):
    subscriber.receive(0.0)
    return subscriber.health()["a"].trouble


def test_the_journal_is_synced_within_a_second_and_a_failure_is_told(publisher, monkeypatch):
    called = threading.Event()

    def broken(fd):
        called.set()
        raise OSError(errno.EIO, "Input/output error")

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", broken)
        publisher.publish(1, "", 1)
        assert called.wait(PATIENCE_S)
        assert told(publisher)
    assert publisher.publish(1, "", 1) > 0


def told(publisher):
    """Whether a failure to sync is raised by one of the next calls."""
    deadline = time.monotonic() + PATIENCE_S
    while time.monotonic() < deadline:
        try:
            publisher.publish(1, "", 1)
        except JournalError as error:
            return "can't be synced" in str(error)
    return False
