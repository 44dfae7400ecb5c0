"""Who may come in at the sockets of one context: those whose public key is in the folder.

ZeroMQ asks for each CURVE handshake (ZAP, rfc.zeromq.org/spec/27). Whatever goes wrong here keeps
everybody out: a socket of :func:`acquire.bus.sockets.bound` demands an answer, and where nobody
gives one, because the gate has not begun, has ended or hangs, no handshake comes to its end.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Sequence
from contextlib import suppress

import zmq
from zmq.utils import z85

from acquire.bus.callers import Callers
from acquire.bus.keys import KeyFolder
from acquire.bus.refusals import Refusal, Refusals
from acquire.closing import Closing
from acquire.errors import BusError, KeysError

HANDLER = "inproc://zeromq.zap.01"
DOMAIN = b"rampside"
LOOK_S = 0.5  # how soon a key that was taken away is noticed
POLL_MS = 100
JOIN_S = 2.0


class Admission:
    """Decides on handshakes; knows no sockets.

    ``cuts`` counts how often a key under which somebody had come in was taken away.
    """

    def __init__(self, keys: KeyFolder, domain: bytes = DOMAIN) -> None:
        self.cuts = 0
        self.expected: set[str] = set()  # strangers that a test of ours sends; not told
        self._keys = keys
        self._domain = domain
        self._inside: dict[str, str] = {}

    def answer(self, frames: Sequence[bytes]) -> tuple[list[bytes], Refusal | None]:
        """The reply to a ZAP request, and the refusal if it is one."""
        request = frames[1] if len(frames) > 1 else b""
        name, refusal = self._decide(frames)
        if name is None:
            return [b"1.0", request, b"400", b"not known here", b"", b""], refusal
        return [b"1.0", request, b"200", b"", name.encode(), b""], None

    def look(self) -> list[str]:
        """Names of computers that had come in and whose keys have been taken away since.

        Where the folder can't be read any more, these are all.
        """
        try:
            known = set(self._keys.known().values())
        except KeysError:
            known = set()
        gone = {key: name for key, name in self._inside.items() if key not in known}
        for key in gone:
            del self._inside[key]
        self.cuts += bool(gone)
        return sorted(gone.values())

    def _decide(self, frames: Sequence[bytes]) -> tuple[str | None, Refusal | None]:
        if len(frames) != 7 or frames[0] != b"1.0" or len(frames[6]) != 32:
            return None, Refusal("an unknown address", "", "its handshake was no CURVE handshake")
        domain, address, mechanism = frames[2], frames[3].decode("ascii", "replace"), frames[5]
        if domain != self._domain or mechanism != b"CURVE":
            return None, Refusal(address, "", "its handshake was no CURVE handshake")
        key = z85.encode(frames[6]).decode("ascii")
        try:
            known = self._keys.known()
        except KeysError as error:
            return None, Refusal(address, key, str(error))
        for name, one in known.items():
            if one == key:
                self._inside[key] = name
                return name, None
        if key in self.expected:
            return None, None
        why = (
            f"its key is not in {self._keys.path}; if it is one of yours, accept it by: "
            "rampside keys accept COMPUTER.pub"
        )
        return None, Refusal(address, key, why)


class Gate(Closing):
    """Answers handshakes on ``context`` in a thread of its own. ``tell`` takes sentences.

    ``computer``: the one that this must be, "" for any. Raises KeysError if there are no keys
    that can be used, BusError if the context has a gate already.
    """

    def __init__(
        self,
        context: zmq.Context[zmq.Socket[bytes]],
        keys: KeyFolder,
        tell: Callable[[str], None],
        computer: str = "",
    ) -> None:
        self.pair = keys.for_server(computer)
        keys.known()
        self.refusals = Refusals(tell)
        self._tell = tell
        self._context = context
        self._admission = Admission(keys)
        self._callers = Callers(context, self.refusals)
        self._ended = threading.Event()
        handler = context.socket(zmq.REP)
        handler.setsockopt(zmq.LINGER, 0)
        try:
            handler.bind(HANDLER)
        except zmq.ZMQError as error:
            handler.close()
            raise BusError(f"the gate of the bus can't be opened ({error.strerror}).") from None
        self._thread = threading.Thread(
            target=self._run, args=(handler,), name="gate of the bus", daemon=True
        )
        self._thread.start()

    @property
    def cuts(self) -> int:
        """Counts up when connections must be cut, because a key was taken away."""
        return self._admission.cuts

    def raise_failure(self) -> None:
        """Tell the owner that nobody can come in any more. Raises BusError."""
        if not self._thread.is_alive():
            raise BusError("nobody looks after the gate of the bus any more; start anew.")

    def secure(self, socket: zmq.Socket[bytes]) -> None:
        """Make a socket that is not bound yet a CURVE server that asks this gate.

        Raises BusError if it has not become one.
        """
        self.raise_failure()
        socket.setsockopt(zmq.CURVE_SECRETKEY, self.pair.secret.encode())
        socket.setsockopt(zmq.CURVE_PUBLICKEY, self.pair.public.encode())
        socket.setsockopt(zmq.CURVE_SERVER, 1)
        socket.setsockopt(zmq.ZAP_DOMAIN, DOMAIN)
        socket.setsockopt(zmq.ZAP_ENFORCE_DOMAIN, 1)
        if socket.context is not self._context or socket.getsockopt(zmq.MECHANISM) != zmq.CURVE:
            raise BusError("a socket could not be secured, so it is not bound.")
        self._callers.watch(socket)

    def expect(self, key: str) -> None:
        """Refuse this stranger without telling it: it is a test of ours."""
        self._admission.expected.add(key)

    def close(self) -> None:
        """Let nobody in any more. Close the sockets first. Closing twice is no mistake."""
        self._ended.set()
        self._thread.join(JOIN_S)

    def _run(self, handler: zmq.Socket[bytes]) -> None:
        try:
            with suppress(zmq.ContextTerminated):
                self._serve(handler)
        finally:
            handler.close()
            self._callers.close()

    def _ready(self, handler: zmq.Socket[bytes]) -> list[zmq.Socket[bytes]]:
        """Whose turn it is. At once, also for callers: they hang up soon, and have no address then."""
        poller = zmq.Poller()
        for socket in (handler, *self._callers.sockets):
            poller.register(socket, zmq.POLLIN)
        return [socket for socket, _ in poller.poll(POLL_MS)]

    def _serve(self, handler: zmq.Socket[bytes]) -> None:
        look_at = time.monotonic() + LOOK_S
        while not self._ended.is_set():
            if handler in self._ready(handler):
                reply, refusal = self._admission.answer(handler.recv_multipart())
                handler.send_multipart(reply)
                if refusal is not None:
                    self.refusals.add(refusal)
            self._callers.look()
            if time.monotonic() >= look_at:
                look_at = time.monotonic() + LOOK_S
                for name in self._admission.look():
                    self._tell(f"the key of {name!r} was taken away: all connections are cut")
