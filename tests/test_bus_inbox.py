import threading
import time
from contextlib import contextmanager

import pytest
import zmq

from acquire.bus import Inbox, ask, free_address
from acquire.errors import BusError


@contextmanager
def answering(reply_to, address="tcp://127.0.0.1:0"):
    """An inbox in a thread that replies with ``reply_to(message)``; yields its address."""

    def run():
        with Inbox(address) as inbox:
            bound.append(inbox.address)
            ready.set()
            while not ended.is_set():
                got = inbox.receive(0.05)
                if got is not None:
                    message, reply = got
                    answer = reply_to(message)
                    if answer is not None:
                        reply(answer)

    bound, ready, ended = [], threading.Event(), threading.Event()
    thread = threading.Thread(target=run)
    thread.start()
    try:
        assert ready.wait(20)
        yield bound[0]
    finally:
        ended.set()
        thread.join()


def test_a_request_gets_its_reply():
    message = {"kind": "note", "text": "µ\n<script>", "id": "1", "value": 0.1, "more": [1, None]}
    with answering(lambda message: {"ok": True, "got": message}) as address:
        for _ in range(3):
            assert ask(address, message, 20) == {"ok": True, "got": message}


def test_requests_of_several_do_not_mix():
    def run(number):
        replies[number] = [ask(address, {"n": number}, 20) for _ in range(10)]

    replies = {}
    with answering(lambda message: message) as address:
        threads = [threading.Thread(target=run, args=(number,)) for number in range(4)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    assert replies == {number: [{"n": number}] * 10 for number in range(4)}


def test_no_reply_in_time_is_told():
    with answering(lambda message: None) as address:
        begin = time.monotonic()
        with pytest.raises(BusError, match=r"no reply within 0\.1 s"):
            ask(address, {}, 0.1)
        assert time.monotonic() - begin < 1
    with pytest.raises(BusError, match="no reply"):
        ask(free_address(), {}, 0.1)


def test_a_process_that_is_just_starting_is_waited_for():
    address, replies = free_address(), []
    asker = threading.Thread(target=lambda: replies.append(ask(address, {"a": 1}, 20)))
    asker.start()
    with answering(lambda message: message, address):
        asker.join()
    assert replies == [{"a": 1}]


def test_malformed_requests_are_counted_and_dropped():
    bad = [[b""], [b"\xc1"], [b"\x01"], [b"\x81\x01\x02"], [b"{}", b"x"], [b"\x91" * 9000]]
    with (
        Inbox("tcp://127.0.0.1:0") as inbox,
        zmq.Context() as context,
        context.socket(zmq.DEALER) as socket,
    ):
        socket.linger = 0
        socket.connect(inbox.address)
        for number, frames in enumerate(bad):
            socket.send_multipart(frames)
            assert inbox.receive(20) is None
            assert inbox.refused == number + 1
        socket.send(b"\x81\xa1a\x01")
        message, reply = inbox.receive(20)
        assert message == {"a": 1}
        reply({"b": 2})
        assert socket.recv() == b"\x81\xa1b\x02"


def test_a_request_that_is_too_long_is_refused_by_the_asker():
    with pytest.raises(BusError, match="at most 65536"):
        ask(free_address(), {"text": "x" * 70_000}, 20)


def test_a_reply_to_somebody_who_has_gone_is_dropped():
    with Inbox("tcp://127.0.0.1:0") as inbox:
        asker = threading.Thread(
            target=lambda: pytest.raises(BusError, ask, inbox.address, {}, 0.2)
        )
        asker.start()
        _, reply = inbox.receive(20)
        asker.join()
        reply({"late": True})
        assert inbox.receive(0) is None


def test_an_inbox_is_on_loopback_only_and_its_port_its_own():
    for address in ("tcp://0.0.0.0:0", "tcp://10.1.2.3:0"):
        with pytest.raises(BusError, match="so keys are needed|not the address of one"):
            Inbox(address)
    with pytest.raises(BusError, match="so keys are needed|not the address of one"):
        ask("tcp://192.168.1.5:20000", {}, 20)
    with Inbox("tcp://127.0.0.1:0") as inbox, pytest.raises(BusError, match="port is taken"):
        Inbox(inbox.address)
    inbox.close()
    with pytest.raises(BusError, match="is closed"):
        inbox.receive(0)
