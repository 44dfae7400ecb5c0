"""Who may come in: both sides known by key, and closed to everybody else whatever goes wrong."""

from __future__ import annotations

import socket as sockets
import threading
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager, suppress
from dataclasses import replace
from pathlib import Path
from random import Random

import pytest
import zmq
from row_publisher import TABLE

import acquire.bus.gate
import acquire.bus.sockets
from acquire.bus import Endpoint, Introducer, Publisher, Subscriber
from acquire.bus.callers import Callers
from acquire.bus.gate import Admission, Gate
from acquire.bus.keys import KeyFolder, KeyPair
from acquire.bus.refusals import Refusal, Refusals
from acquire.bus.sockets import bound
from acquire.errors import BusError, KeysError
from acquire.journal import Journal

Wait = Callable[..., None]
FREE = Endpoint("tcp://127.0.0.1:0", "tcp://127.0.0.1:0")


def key_folder(path: Path, name: str) -> KeyFolder:
    folder = KeyFolder(path / name)
    folder.make(name)
    return folder


@pytest.fixture
def server(tmp_path: Path) -> KeyFolder:
    """The keys of a computer that publishes."""
    return key_folder(tmp_path, "cryostat")


@pytest.fixture
def client(tmp_path: Path, server: KeyFolder) -> KeyFolder:
    """The keys of one that may listen."""
    folder = key_folder(tmp_path, "desk")
    folder.accept(server.path / "cryostat.pub")
    server.accept(folder.path / "desk.pub")
    return folder


@contextmanager
def publishing(
    server: KeyFolder, folder: Path, told: list[str] | None = None, endpoint: Endpoint = FREE
) -> Iterator[Publisher]:
    """A publisher with keys that has two rows."""
    tell = (told if told is not None else []).append
    endpoint = replace(endpoint, keys=str(server.path), computer="cryostat")
    with (
        Journal(folder / "rows.csv", TABLE) as journal,
        Publisher("run", TABLE, journal, endpoint, tell=tell) as publisher,
    ):
        publisher.publish(1, "", 1)
        publisher.publish(2, "", 2)
        yield publisher


def listening(client: KeyFolder, publisher: Publisher) -> Subscriber:
    endpoint = replace(publisher.endpoint, keys=str(client.path))
    return Subscriber("run", {"a": endpoint}, {"a": TABLE})


def got(listener: Subscriber, rows: list[object]) -> bool:
    """Whether rows have come, which are added to ``rows``."""
    new = listener.receive(0.1)
    rows += new
    return bool(new)


def test_both_sides_that_know_each_other_meet(
    tmp_path: Path, server: KeyFolder, client: KeyFolder, wait_for: Wait
) -> None:
    told: list[str] = []
    with publishing(server, tmp_path, told) as publisher, listening(client, publisher) as listener:
        rows: list[object] = []
        wait_for(lambda: rows.extend(listener.receive(0.1)) or len(rows) == 2)
        while listener.health()["a"].filled == len(rows):  # until one comes unasked, too
            publisher.publish(3, "", 3)
            wait_for(lambda: got(listener, rows))
        assert listener.health()["a"].barred == ""
    assert told == []


def test_the_computer_itself_may_listen_to_itself(
    tmp_path: Path, server: KeyFolder, wait_for: Wait
) -> None:
    with publishing(server, tmp_path) as publisher, listening(server, publisher) as listener:
        wait_for(lambda: len(listener.receive(0.1)) == 2)


# Everybody else.


def strangers(tmp_path: Path, server: KeyFolder) -> dict[str, KeyFolder]:
    """Folders of keys that must not get in."""
    unlisted = key_folder(tmp_path, "unlisted")
    unlisted.accept(server.path / "cryostat.pub")
    other = key_folder(tmp_path / "other", "cryostat")
    misled = key_folder(tmp_path, "misled")
    misled.accept(other.path / "cryostat.pub")
    server.accept(misled.path / "misled.pub")
    return {"unlisted": unlisted, "misled": misled}


@pytest.mark.parametrize(
    ("who", "here", "there"),
    [
        ("unlisted", "'cryostat' refused our key", "its key is not in"),
        ("misled", "'cryostat' hangs up at our handshake", "expects another key of this computer"),
    ],
)
def test_who_is_refused_hears_nothing_and_both_sides_say_why(
    tmp_path: Path, server: KeyFolder, wait_for: Wait, who: str, here: str, there: str
) -> None:
    folder, told = strangers(tmp_path, server)[who], []
    with publishing(server, tmp_path, told) as publisher:
        endpoint = replace(publisher.endpoint, keys=str(folder.path))
        with listening(folder, publisher) as listener, Introducer(endpoint) as introducer:

            def both() -> bool:
                publisher.publish(3, "", 3)
                assert listener.receive(0.02) == []
                assert introducer.ask(0.0) is None
                return here in listener.health()["a"].barred and here in introducer.trouble

            wait_for(both)
            wait_for(lambda: any(there in text and "127.0.0.1" in text for text in told))
        assert publisher.refused == 0
    assert len(told) <= 2  # the system may not have told the address the first time
    text = next(text for text in told if text.startswith("refused somebody at 127.0.0.1"))
    assert (folder.own().public in text) == (who == "unlisted")
    assert folder.own().secret not in text


def test_who_has_no_keys_is_refused_and_told(
    tmp_path: Path, server: KeyFolder, wait_for: Wait
) -> None:
    told: list[str] = []
    with publishing(server, tmp_path, told) as publisher:
        plain = Endpoint(publisher.endpoint.publish, publisher.endpoint.answer)
        with Subscriber("run", {"a": plain}, {"a": TABLE}) as listener:
            wait_for(lambda: listener.receive(0.05) or told)
            assert "it uses no keys" in told[0]
            assert listener.health()["a"].last_heard_monotonic is None


def test_whoever_speaks_nonsense_does_no_harm(
    tmp_path: Path, server: KeyFolder, client: KeyFolder, wait_for: Wait
) -> None:
    """Scanners of ports, other protocols, greetings of ZeroMQ that break off or go on as they like."""
    random, told = Random(1), []
    greeting = b"\xff" + bytes(8) + b"\x7f\x03\x00CURVE" + bytes(48)
    with publishing(server, tmp_path, told) as publisher, listening(client, publisher) as listener:
        wait_for(lambda: len(listener.receive(0.1)) == 2)
        for number in range(100):
            said = random.choice([greeting[: random.randrange(64)], greeting, b"GET / HTTP/1.1\r\n"])
            where = (publisher.endpoint.publish, publisher.endpoint.answer)[number % 2]
            port = int(where.rpartition(":")[2])
            with suppress(OSError), sockets.create_connection(("127.0.0.1", port)) as caller:
                caller.sendall(said + random.randbytes(random.choice([0, 1, 200, 5000])))
        publisher.publish(3, "", 3)
        wait_for(lambda: listener.receive(0.1))
        assert listener.health()["a"].refused == publisher.refused == 0
    assert len(told) < 10


def test_a_server_without_keys_is_not_trusted(
    tmp_path: Path, client: KeyFolder, wait_for: Wait
) -> None:
    with (
        Journal(tmp_path / "rows.csv", TABLE) as journal,
        Publisher("run", TABLE, journal, FREE) as publisher,
    ):
        publisher.publish(1, "", 1)
        publisher.endpoint = replace(publisher.endpoint, computer="cryostat")
        with listening(client, publisher) as listener:
            wait_for(
                lambda: listener.receive(0.05)
                or "uses no keys, so it is not trusted" in listener.health()["a"].barred
            )
            assert listener.health()["a"].last_seq == -1


def test_a_key_that_is_accepted_later_lets_in_without_a_restart(
    tmp_path: Path, server: KeyFolder, wait_for: Wait, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("acquire.bus.subscriber.RENEW_S", 0.2)
    folder = strangers(tmp_path, server)["unlisted"]
    with publishing(server, tmp_path) as publisher, listening(folder, publisher) as listener:
        wait_for(lambda: listener.receive(0.05) or listener.health()["a"].barred)
        server.accept(folder.path / "unlisted.pub")
        wait_for(lambda: listener.receive(0.05))
        assert listener.health()["a"].barred == ""


def test_a_key_that_is_taken_away_cuts_the_connection_and_no_other(
    tmp_path: Path, server: KeyFolder, client: KeyFolder, wait_for: Wait
) -> None:
    other = key_folder(tmp_path, "other")
    other.accept(server.path / "cryostat.pub")
    server.accept(other.path / "other.pub")
    told: list[str] = []
    with (
        publishing(server, tmp_path, told) as publisher,
        listening(client, publisher) as cut,
        listening(other, publisher) as kept,
    ):
        wait_for(lambda: len(cut.receive(0.1)) == 2)
        wait_for(lambda: len(kept.receive(0.1)) == 2)
        (server.path / "desk.pub").unlink()
        wait_for(lambda: any("'desk' was taken away" in text for text in told))
        rows: list[object] = []
        for number in range(50):
            publisher.publish(number, "", 0)
            assert cut.receive(0.01) == []
            rows += kept.receive(0.01)
        wait_for(lambda: rows.extend(kept.receive(0.1)) or len(rows) == 50)
        wait_for(lambda: cut.receive(0.1) or "refused our key" in cut.health()["a"].barred)
        assert cut.health()["a"].last_seq == 1


def test_nothing_is_bound_beyond_loopback_without_keys(tmp_path: Path) -> None:
    with Journal(tmp_path / "rows.csv", TABLE) as journal:
        for address in ("tcp://192.168.1.30:42001", "tcp://[fe80::1]:42001"):
            for endpoint in (Endpoint(address, FREE.answer), Endpoint(FREE.publish, address)):
                with pytest.raises(BusError, match="so keys are needed: make them by"):
                    Publisher("run", TABLE, journal, endpoint)
                with pytest.raises(BusError, match="so keys are needed: make them by"):
                    Subscriber("run", {"a": endpoint}, {"a": TABLE})


def test_with_keys_other_addresses_may_be_used(client: KeyFolder) -> None:
    """Connecting is a promise only; nobody is there (addresses of RFC 5737 and RFC 3849)."""
    for host in ("192.0.2.7", "[2001:db8::7]"):
        endpoint = Endpoint(
            f"tcp://{host}:42001", f"tcp://{host}:42002", str(client.path), "cryostat"
        )
        with Subscriber("run", {"a": endpoint}, {"a": TABLE}) as listener:
            assert listener.receive(0.0) == []


def test_the_keys_of_another_computer_are_not_published_with(
    tmp_path: Path, server: KeyFolder
) -> None:
    with Journal(tmp_path / "rows.csv", TABLE) as journal:
        endpoint = replace(FREE, keys=str(server.path), computer="desk")
        with pytest.raises(KeysError, match="'cryostat', but the reader is to run on 'desk'"):
            Publisher("run", TABLE, journal, endpoint)


# Whatever is wrong with the gate, nobody comes in: the four ways in which CURVE fails open.


def answers(address: str, server: KeyFolder, keys: KeyPair | None, wait_s: float) -> bool:
    """Whether somebody who knows the server's public key gets anything out of an echo there."""
    with zmq.Context() as context, context.socket(zmq.DEALER) as socket:
        socket.linger = 0
        if keys is not None:
            socket.curve_publickey = keys.public.encode()
            socket.curve_secretkey = keys.secret.encode()
            socket.curve_serverkey = server.own().public.encode()
        socket.connect(address)
        socket.send(b"let me in")
        return bool(socket.poll(int(wait_s * 1000)))


class Echo:
    """A socket of the bus that answers whatever it hears, in a thread."""

    def __init__(self, socket: zmq.Socket[bytes]) -> None:
        self._socket = socket
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._run)
        self._thread.start()

    def _run(self) -> None:
        while not self._ended.is_set():
            if self._socket.poll(20):
                self._socket.send_multipart(self._socket.recv_multipart())

    def close(self) -> None:
        self._ended.set()
        self._thread.join()
        self._socket.close(linger=0)


class NoProof:
    """Our own proof that strangers are refused would notice; what is shown here is what remains
    without it."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr(
            acquire.bus.sockets, "_prove_that_strangers_are_refused", lambda *args: None
        )
        monkeypatch.setattr(Callers, "watch", lambda *args: None)
        monkeypatch.setattr(Gate, "raise_failure", lambda *args: None)


@pytest.mark.parametrize("state", ["missing", "other context", "stopped", "late", "hanging", "good"])
@pytest.mark.parametrize("who", ["listed", "stranger", "without keys"])
def test_the_bus_stays_closed_whatever_the_gate_does(
    server: KeyFolder, client: KeyFolder, state: str, who: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    NoProof(monkeypatch)
    stranger = KeyPair(*(key.decode() for key in zmq.curve_keypair()))
    keys = {"listed": client.own(), "stranger": stranger, "without keys": None}[who]
    ended = threading.Event()
    with ExitStack() as stack:
        context, other = (stack.enter_context(zmq.Context()) for _ in range(2))
        gate = stack.enter_context(Gate(context, server, lambda text: None))
        if state in ("missing", "other context", "late"):
            gate.close()
        if state == "other context":
            stack.enter_context(Gate(other, server, lambda text: None))
        if state == "hanging":
            refused = ([b"1.0", b"", b"400", b"", b"", b""], None)
            monkeypatch.setattr(Admission, "answer", lambda *args: ended.wait(60) and refused)
        socket, address = bound(context, zmq.ROUTER, "tcp://127.0.0.1:0", 10, gate)
        stack.callback(ended.set)
        stack.callback(Echo(socket).close)
        if state == "stopped":
            gate.close()
        if state == "late":  # whoever came before is not let in afterwards
            assert not answers(address, server, keys, 0.3)
            stack.enter_context(Gate(context, server, lambda text: None))
        welcome = who == "listed" and state in ("late", "good")
        assert answers(address, server, keys, 20.0 if welcome else 0.3) == welcome


@pytest.mark.parametrize("missing", ["gate", "enforced domain", "server", "before bind"])
def test_a_socket_that_is_not_closed_to_strangers_is_not_used(
    server: KeyFolder, missing: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Our own start-up proof. Each is one line less in what makes a socket secure."""
    secure = Gate.secure
    monkeypatch.setattr(acquire.bus.sockets, "PROOF_S", 0.5)

    def careless(gate: Gate, socket: zmq.Socket[bytes]) -> None:
        if missing == "gate":
            secure(gate, socket)
            gate.close()
        if missing in ("enforced domain", "server"):
            socket.setsockopt(zmq.CURVE_SECRETKEY, gate.pair.secret.encode())
            socket.setsockopt(zmq.CURVE_SERVER, missing == "enforced domain")
            gate.close()

    monkeypatch.setattr(Gate, "secure", careless)
    with (
        zmq.Context() as context,
        Gate(context, server, lambda text: None) as gate,
        pytest.raises(BusError, match="a stranger was not refused, so nothing is published"),
    ):
        bound(context, zmq.ROUTER, "tcp://127.0.0.1:0", 10, gate)


def test_a_socket_of_another_context_is_not_secured(server: KeyFolder) -> None:
    with (
        zmq.Context() as context,
        zmq.Context() as other,
        Gate(other, server, lambda text: None) as gate,
        pytest.raises(BusError, match="could not be secured"),
    ):
        bound(context, zmq.ROUTER, "tcp://127.0.0.1:0", 10, gate)


def test_the_libraries_fail_open_where_we_do_not(server: KeyFolder) -> None:
    """What the tests above would not see if the library had changed: it does fail open."""
    stranger = KeyPair(*(key.decode() for key in zmq.curve_keypair()))
    with zmq.Context() as context:
        socket = context.socket(zmq.ROUTER)
        socket.curve_secretkey = server.own().secret.encode()
        socket.curve_server = True
        port = socket.bind_to_random_port("tcp://127.0.0.1")
        echo = Echo(socket)
        try:
            assert answers(f"tcp://127.0.0.1:{port}", server, stranger, 20.0)
        finally:
            echo.close()


def test_a_gate_that_has_died_is_told(tmp_path: Path, server: KeyFolder) -> None:
    with publishing(server, tmp_path) as publisher:
        assert publisher._gate is not None
        publisher._gate.close()
        with pytest.raises(BusError, match="nobody looks after the gate"):
            publisher.publish(1, "", 1)


# Decisions, without sockets.


def request(**changes: bytes) -> list[bytes]:
    """A ZAP request as ZeroMQ sends it, from nobody that is known."""
    frames = {
        "version": b"1.0", "request": b"7", "domain": b"rampside", "address": b"192.0.2.9",
        "identity": b"", "mechanism": b"CURVE", "key": bytes(32),
    }  # fmt: skip
    return list({**frames, **changes}.values())


def test_a_listed_key_is_let_in_by_its_name(server: KeyFolder, client: KeyFolder) -> None:
    key = zmq.utils.z85.decode(client.own().public.encode())
    reply, refusal = Admission(server).answer(request(key=key))
    assert (reply, refusal) == ([b"1.0", b"7", b"200", b"", b"desk", b""], None)


@pytest.mark.parametrize(
    "frames",
    [
        request(), request(version=b"2.0"), request(domain=b""), request(domain=b"other"),
        request(mechanism=b"NULL"), request(mechanism=b"PLAIN"), request(key=b""),
        request(key=bytes(31)), request()[:6], [*request(), b""], [], [b"1.0"],
        request(address=b"\xff\x00"),
    ],
)  # fmt: skip
def test_whatever_else_is_asked_is_refused(server: KeyFolder, frames: list[bytes]) -> None:
    reply, refusal = Admission(server).answer(frames)
    assert reply[2] == b"400"
    assert refusal is not None and refusal.why


@pytest.mark.parametrize("damage", ["loose", "gone", "broken"])
def test_keys_that_can_not_be_used_let_nobody_in(
    server: KeyFolder, client: KeyFolder, damage: str
) -> None:
    key = zmq.utils.z85.decode(client.own().public.encode())
    admission = Admission(server)
    assert admission.answer(request(key=key))[1] is None
    if damage == "loose":
        server.path.chmod(0o770)
    elif damage == "gone":
        server.path.rename(server.path.with_name("elsewhere"))
    else:
        (server.path / "zoe.pub").write_text("public_key = 7")
    reply, refusal = admission.answer(request(key=key))
    assert reply[2] == b"400"
    assert refusal is not None and str(server.path) in refusal.why
    assert admission.look() == ["desk"]
    assert (admission.cuts, admission.look()) == (1, [])


def test_refusals_are_no_flood() -> None:
    told: list[str] = []
    now = [0.0]
    refusals = Refusals(told.append, lambda: now[0])
    for _ in range(1000):
        refusals.add(Refusal("192.0.2.9", "", "no keys"))
    refusals.add(Refusal("192.0.2.9", "", "another reason"))
    for number in range(5000):
        refusals.add(Refusal("192.0.2.9", f"key {number}", "not known"))
    assert len(told) == 200
    assert refusals.count == 6001
    now[0] = 301.0
    refusals.add(Refusal("192.0.2.9", "", "no keys"))
    assert told[-1] == "refused somebody at 192.0.2.9: no keys (999 times more since that was last said)"
