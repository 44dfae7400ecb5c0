"""Real sessions of pyvisa-py on loopback sockets and pseudo-terminals; the rows of the fault
matrix that one instrument can show."""

from __future__ import annotations

import os
import struct
import termios
import threading
import time
import tty
import warnings
from collections.abc import Callable, Iterator

import pytest
import pyvisa
from pyvisa.constants import StatusCode
from pyvisa.resources import GPIBInstrument, Resource
from scripted_instrument import (
    Close,
    Hold,
    ScriptedInstrument,
    half_then_close,
    late,
    long_line,
    split,
    trickle,
    unterminated,
)

import acquire.instrument
from acquire.byte_stream import LONGEST_REPLY
from acquire.config.reader import ReaderSection
from acquire.errors import (
    BadReply,
    ConnectError,
    InstrumentError,
    ReplyTimeout,
    SessionLost,
)
from acquire.instrument import Instrument
from acquire.reader import Reader
from acquire.socket_line import is_writable, socket_below
from acquire.stop import Stop, Stopped

IDENTITY = "MAKER,MODEL,7,1.0"
SHORT_MS, LONG_MS = 60, 10_000


def section(resource: str, **keys: object) -> ReaderSection:
    plain = {
        "name": "lockin",
        "resource": resource,
        "write_termination": "\n",
        "read_termination": "\n",
        "timeout_ms": LONG_MS,
        "identity": {"pattern": "MODEL"},
        "queries": ["X?"],
        "values": [{"name": "x", "position": 1}],
    }
    return ReaderSection.model_validate({**plain, **keys})


@pytest.fixture
def scripted() -> Iterator[ScriptedInstrument]:
    with ScriptedInstrument({"*IDN?": IDENTITY, "X?": "1.5"}) as server:
        yield server


@pytest.fixture
def opened(scripted: ScriptedInstrument) -> Iterator[Callable[..., Instrument]]:
    """Opens an instrument at the scripted one, with keys of its section to change."""
    made: list[Instrument] = []

    def make(**keys: object) -> Instrument:
        made.append(Instrument(section(scripted.resource, **keys)))
        made[-1].open()
        return made[-1]

    yield make
    for instrument in made:
        instrument.close()


def test_opening_asks_who_is_there(scripted: ScriptedInstrument) -> None:
    instrument = Instrument(section(scripted.resource))
    assert instrument.open() == IDENTITY
    assert instrument.is_open
    assert instrument.last_reply == (IDENTITY + "\n").encode()
    assert instrument.ask("X?") == "1.5"
    instrument.close()
    instrument.close()
    assert not instrument.is_open
    assert scripted.questions == [(0, "*IDN?"), (0, "X?")]


def test_a_refused_connection_is_told_at_once(scripted: ScriptedInstrument) -> None:
    scripted.refuse()
    instrument = Instrument(section(scripted.resource))
    with pytest.raises(ConnectError, match="refused.*is the instrument on"):
        instrument.open()
    assert not instrument.is_open


def test_a_line_closed_as_soon_as_it_is_taken_is_no_instrument(
    scripted: ScriptedInstrument,
) -> None:
    scripted.greeting = (Close(),)
    with pytest.raises(ConnectError):
        Instrument(section(scripted.resource)).open()


@pytest.mark.parametrize(
    "resource",
    ["TCPIP::host.invalid::5000::SOCKET", "ASRL/dev/nothing::INSTR", "nonsense", "GPIB0::4::INSTR"]
    + ["TCPIP::127.0.0.1::70000::SOCKET", "USB0::1::2::3::INSTR", "VXI0::1::BACKPLANE"],
)
def test_a_resource_that_can_not_be_opened_is_a_connect_error(resource: str) -> None:
    with pytest.raises(ConnectError, match="can't be opened"):
        Instrument(section(resource)).open()


def test_a_library_that_is_not_there_is_a_connect_error() -> None:
    with pytest.raises(ConnectError, match="can't be opened"):
        Instrument(section("ASRL1::INSTR", visa_library="/nowhere/visa.so")).open()


@pytest.mark.parametrize(
    "identity", ["OTHER,THING,1,1", "", "*IDN?", "MODEL" * 60, "1.5", "<script>alert(1)</script>"]
)
def test_who_does_not_prove_to_be_the_instrument_is_refused(
    scripted: ScriptedInstrument, identity: str
) -> None:
    scripted.answers["*IDN?"] = identity
    instrument = Instrument(section(scripted.resource))
    with pytest.raises(ConnectError, match="was answered by"):
        instrument.open()
    assert not instrument.is_open


def test_an_echo_proves_nothing_even_without_a_pattern(scripted: ScriptedInstrument) -> None:
    scripted.answers["*IDN?"] = "*IDN?"
    with pytest.raises(ConnectError, match="proves nothing"):
        Instrument(section(scripted.resource, identity={})).open()


def test_another_instrument_of_the_same_kind_is_refused_by_both_names(
    scripted: ScriptedInstrument,
) -> None:
    instrument = Instrument(section(scripted.resource))
    with pytest.raises(ConnectError, match="MODEL,7.*MODEL,8"):
        instrument.open("MAKER,MODEL,8,1.0")
    assert instrument.open(IDENTITY) == IDENTITY
    instrument.close()


def test_nobody_answers_the_identity_query(scripted: ScriptedInstrument) -> None:
    del scripted.answers["*IDN?"]
    with pytest.raises(ConnectError, match=r"'\*IDN\?': no reply within 60 ms"):
        Instrument(section(scripted.resource, timeout_ms=SHORT_MS)).open()


def test_a_late_answer_is_not_taken_for_the_next_one(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    """Trap C1, pyvisa-py#376: on one session the second query returned the first one's answer."""
    answer = threading.Event()
    scripted.answers["LATE?"] = late("8", answer)
    instrument = opened(timeout_ms=SHORT_MS)
    with pytest.raises(ReplyTimeout, match=r"'LATE\?': no reply within 60 ms"):
        instrument.ask("LATE?")
    answer.set()
    assert not instrument.is_open
    with pytest.raises(SessionLost, match="not open"):
        instrument.ask("X?")
    instrument.open(IDENTITY)
    assert instrument.ask("X?") == "1.5"
    assert scripted.questions[-1] == (1, "X?")


def test_the_second_half_of_an_answer_is_never_a_reading(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    """Trap C1: '1.23' and later '456' made 456 of 1.23456."""
    rest = threading.Event()
    scripted.answers["SPLIT?"] = split("1.23456", 4, rest)
    instrument = opened(timeout_ms=SHORT_MS)
    with pytest.raises(ReplyTimeout, match=r"only '1\.23' came"):
        instrument.ask("SPLIT?")
    assert instrument.last_reply == b"1.23"
    rest.set()
    instrument.open(IDENTITY)
    assert instrument.ask("X?") == "1.5"


def test_an_answer_in_pieces_is_put_together(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["X?"] = trickle("-1.25E-06", 0.001) + ("",)
    assert opened().ask("X?") == "-1.25E-06"


@pytest.mark.parametrize("end", [half_then_close("1.2345"), (Close(),), (Close(reset=True),)])
def test_a_line_that_ends_is_noticed_without_waiting(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument], end: object
) -> None:
    """Trap C2: a closed line took the whole timeout, at full load."""
    scripted.answers["END?"] = end
    instrument = opened()
    began = time.monotonic()
    with pytest.raises(SessionLost):
        instrument.ask("END?")
    assert time.monotonic() - began < LONG_MS / 2000
    assert not instrument.is_open


def test_a_line_that_ended_between_two_questions_is_noticed(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    instrument = opened()
    scripted.cut()
    with pytest.raises(SessionLost):
        instrument.ask("X?")
    instrument.open(IDENTITY)
    assert instrument.ask("X?") == "1.5"


def test_an_answer_that_comes_twice_is_not_left_for_the_next_question(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["TWICE?"] = b"1.0\n1.0\n"
    instrument = opened()
    assert instrument.ask("TWICE?") == "1.0"
    with pytest.raises(BadReply, match="came without a question"):
        instrument.ask("X?")
    assert not instrument.is_open


def test_a_line_without_end_is_cut_off(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["LONG?"] = long_line(10_000_000)
    instrument = opened()
    with pytest.raises(BadReply, match="does not end within"):
        instrument.ask("LONG?")
    assert len(instrument.last_reply) < 2 * LONGEST_REPLY


def test_a_trickle_does_not_put_off_the_timeout(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["DRIP?"] = trickle("1" * 10_000, 0.005)
    instrument = opened(timeout_ms=SHORT_MS)
    began = time.monotonic()
    with pytest.raises(ReplyTimeout, match="only '111"):
        instrument.ask("DRIP?")
    assert time.monotonic() - began < 5.0


def test_a_terminator_that_is_not_the_configured_one_is_named(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["X?"] = b"1.5\n"
    scripted.answers["*IDN?"] = IDENTITY + "\r"
    instrument = opened(read_termination="\r\n")
    with pytest.raises(
        BadReply, match=r"'1\.5\\\\n' does not end with read_termination = '\\r\\n'"
    ):
        instrument.ask("X?")
    assert not instrument.is_open


def test_a_terminator_that_never_comes_is_a_timeout_that_says_what_came(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["X?"] = unterminated("1.5\r")
    with pytest.raises(ReplyTimeout, match=r"only '1\.5\\\\r'.*but with '\\\\r'"):
        opened(timeout_ms=SHORT_MS).ask("X?")


def test_bytes_outside_the_encoding_are_a_bad_reply(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["X?"] = b"1.5\xb5V\n"
    with pytest.raises(BadReply, match="is not ascii"):
        opened().ask("X?")
    assert opened(encoding="latin-1").ask("X?") == "1.5µV"


def test_an_empty_line_is_an_empty_answer(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    scripted.answers["X?"] = ""
    assert opened().ask("X?") == ""


def test_a_question_that_can_not_be_sent_as_it_is_closes_too(
    opened: Callable[..., Instrument],
) -> None:
    for question in ("µ?", "X" * 5000):
        instrument = opened()
        with pytest.raises(InstrumentError):
            instrument.ask(question)
        assert not instrument.is_open


def test_a_line_that_takes_nothing_more_is_given_up(scripted: ScriptedInstrument) -> None:
    """Trap C2: pyvisa-py's write waits for ever."""
    deaf = threading.Event()
    scripted.answers["X?"] = (Hold(deaf), "1.5")
    instrument = Instrument(section(scripted.resource, timeout_ms=SHORT_MS))
    instrument.open()
    line = instrument._socket
    assert line is not None
    line.send(b"X?\n")
    line.setblocking(False)
    while is_writable(line, 0.05):
        try:
            line.send(b"." * 65_536)
        except BlockingIOError:
            continue
    with pytest.raises(SessionLost, match="blocked"):
        instrument.ask("X?")
    deaf.set()


def test_a_wall_clock_that_stands_still_does_not_put_off_a_timeout(
    opened: Callable[..., Instrument],
    on_serial: Callable[..., Instrument],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """pyvisa-py ends its waits by the wall clock; set back by an hour it would wait an hour."""
    lines = [opened(timeout_ms=SHORT_MS), on_serial(timeout_ms=SHORT_MS)]
    monkeypatch.setattr(time, "time", lambda: 0.0)
    for instrument in lines:
        with pytest.raises(ReplyTimeout):
            instrument.ask("SILENT?")


def test_two_instruments_of_one_process_do_not_close_each_other(
    opened: Callable[..., Instrument],
) -> None:
    """Trap C5, pyvisa#742: managers are one and the same."""
    first, second = opened(), opened()
    first.close()
    assert second.ask("X?") == "1.5"
    first.open()
    second.close()
    assert first.ask("X?") == "1.5"


def test_a_stop_breaks_off_a_wait_and_closes(
    scripted: ScriptedInstrument, opened: Callable[..., Instrument]
) -> None:
    stop = Stop()
    instrument = opened(timeout_ms=60_000)

    def now() -> float:
        stop.handle()  # the signal comes while it waits
        return 0.0

    instrument._now = now
    with pytest.raises(Stopped):
        stop.wait(instrument.ask, "SILENT?")
    assert not instrument.is_open


class Message(GPIBInstrument):
    """A bus that marks the end of a message: what pyvisa-py has no hardware for here."""

    def __init__(self, answers: dict[str, object]) -> None:
        self.answers = answers
        self.closed = False
        self.waiting: object = b""

    visalib = None  # type: ignore[assignment]
    session = 0  # type: ignore[assignment]
    timeout = 0
    read_termination = ""

    def write_raw(self, message: bytes) -> int:
        self.waiting = self.answers[message.decode().strip()]
        return len(message)

    def read_bytes(self, count: int, *how: object, **more: object) -> bytes:
        assert more == {"break_on_termchar": True}
        if isinstance(self.waiting, Exception):
            raise self.waiting
        if isinstance(self.waiting, Warning):
            warnings.warn(self.waiting, stacklevel=1)
        assert isinstance(self.waiting, bytes)
        return self.waiting[:count]

    def close(self) -> None:
        self.closed = True

    def __del__(self) -> None:
        """Nothing to close."""


@pytest.fixture
def bus(monkeypatch: pytest.MonkeyPatch) -> Message:
    message = Message({"*IDN?": (IDENTITY + "\n").encode(), "X?": b"1.5\n"})
    monkeypatch.setattr(acquire.instrument, "_open_resource", lambda section: message)
    return message


def test_a_bus_that_marks_the_end_by_itself(bus: Message) -> None:
    instrument = Instrument(section("GPIB0::4::INSTR"))
    assert instrument.open() == IDENTITY
    assert instrument.ask("X?") == "1.5"
    assert (bus.timeout, bus.read_termination) == (LONG_MS, "\n")
    instrument.close()
    assert bus.closed


@pytest.mark.parametrize(
    ("answer", "error"),
    [
        (pyvisa.VisaIOError(StatusCode.error_timeout), ReplyTimeout),
        (pyvisa.VisaIOError(StatusCode.error_connection_lost), SessionLost),
        (ConnectionRefusedError(111, "refused"), SessionLost),
        (RuntimeError(), SessionLost),
        (UserWarning("strange"), BadReply),
        (b"7" * (LONGEST_REPLY + 10), BadReply),
        (b"", BadReply),
        (b"1.5", BadReply),
    ],
)
def test_whatever_goes_wrong_below_is_one_of_our_errors_and_closes(
    bus: Message, answer: object, error: type[InstrumentError]
) -> None:
    bus.answers["X?"] = answer
    instrument = Instrument(section("GPIB0::4::INSTR"))
    instrument.open()
    with pytest.raises(error):
        instrument.ask("X?")
    assert not instrument.is_open
    assert bus.closed


def test_what_can_not_be_asked_is_no_instrument(monkeypatch: pytest.MonkeyPatch) -> None:
    mute = Resource.__new__(Resource)
    monkeypatch.setattr(Resource, "__del__", lambda self: None)
    monkeypatch.setattr(acquire.instrument, "_open_resource", lambda section: mute)
    with pytest.raises(ConnectError, match="can't be asked"):
        Instrument(section("VXI0::1::INSTR")).open()


class SerialInstrument:
    """The far end of a serial line: a thread behind a pseudo-terminal."""

    def __init__(self, answers: dict[str, bytes]) -> None:
        self.answers = answers
        self.master, self.slave = os.openpty()
        tty.setraw(self.slave)
        self.resource = f"ASRL{os.ttyname(self.slave)}::INSTR"
        self._thread = threading.Thread(target=self._serve, daemon=True)
        self._thread.start()

    def send(self, data: bytes) -> None:
        os.write(self.master, data)

    def _serve(self) -> None:
        waiting = b""
        while b"END" not in waiting:
            waiting += os.read(self.master, 1024)
            while b"\n" in waiting:
                question, _, waiting = waiting.partition(b"\n")
                self.send(self.answers.get(question.decode(), b""))

    def close(self) -> None:
        os.write(self.slave, b"END")
        deadline = time.monotonic() + 10
        while self._thread.is_alive() and time.monotonic() < deadline:
            termios.tcflush(self.slave, termios.TCIFLUSH)  # what nobody reads blocks the far end
            self._thread.join(0.01)
        assert not self._thread.is_alive()
        for end in (self.master, self.slave):
            os.close(end)


@pytest.fixture
def serial() -> Iterator[SerialInstrument]:
    line = SerialInstrument({"*IDN?": (IDENTITY + "\n").encode(), "X?": b"1.5\n"})
    yield line
    line.close()


@pytest.fixture
def on_serial(serial: SerialInstrument) -> Iterator[Callable[..., Instrument]]:
    made: list[Instrument] = []

    def make(**keys: object) -> Instrument:
        made.append(Instrument(section(serial.resource, **keys)))
        made[-1].open()
        return made[-1]

    yield make
    for instrument in made:
        instrument.close()


def test_a_serial_line_is_asked_like_any_other(on_serial: Callable[..., Instrument]) -> None:
    instrument = on_serial()
    assert [instrument.ask("X?") for _ in range(3)] == ["1.5"] * 3


def test_serial_settings_reach_the_line(
    serial: SerialInstrument, on_serial: Callable[..., Instrument]
) -> None:
    on_serial(serial={"baud_rate": 19_200, "stop_bits": 2, "data_bits": 8, "parity": "none"})
    _, _, control, _, speed, _, _ = termios.tcgetattr(serial.slave)
    assert speed == termios.B19200
    assert control & termios.CSTOPB


def test_a_timeout_on_a_serial_line_keeps_what_came(
    serial: SerialInstrument, on_serial: Callable[..., Instrument]
) -> None:
    serial.answers["SPLIT?"] = b"1.23"
    instrument = on_serial(timeout_ms=SHORT_MS)
    with pytest.raises(ReplyTimeout, match=r"only '1\.23' came"):
        instrument.ask("SPLIT?")


def test_what_comes_late_on_a_serial_line_is_thrown_away_on_opening(
    serial: SerialInstrument, on_serial: Callable[..., Instrument]
) -> None:
    instrument = on_serial(timeout_ms=SHORT_MS)
    with pytest.raises(ReplyTimeout):
        instrument.ask("SILENT?")
    serial.send(b"8.0\n")
    instrument.section = section(serial.resource)
    instrument._timeout_s = LONG_MS / 1000
    assert instrument.open(IDENTITY) == IDENTITY
    assert instrument.ask("X?") == "1.5"


def test_stray_bytes_on_a_serial_line_are_noticed(
    serial: SerialInstrument, on_serial: Callable[..., Instrument]
) -> None:
    serial.answers["TWICE?"] = b"1.0\n1.0\n"
    instrument = on_serial()
    assert instrument.ask("TWICE?") == "1.0"
    with pytest.raises(BadReply, match="without a question"):
        instrument.ask("X?")


def test_a_long_line_on_a_serial_line_is_cut_off(
    serial: SerialInstrument, on_serial: Callable[..., Instrument]
) -> None:
    serial.answers["LONG?"] = b"7" * (2 * LONGEST_REPLY)
    with pytest.raises(BadReply, match="does not end within"):
        on_serial().ask("LONG?")


def test_a_serial_line_that_is_pulled_out_is_lost() -> None:
    line = SerialInstrument({"*IDN?": (IDENTITY + "\n").encode()})
    instrument = Instrument(section(line.resource))
    instrument.open()
    line.close()
    with pytest.raises(SessionLost):
        instrument.ask("X?")
    assert not instrument.is_open
    with pytest.raises(ConnectError):
        instrument.open()


def test_a_reader_on_a_serial_line_from_end_to_end(
    serial: SerialInstrument, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Readings, settings and blocks; a late answer and one that comes twice are none of its own."""
    monkeypatch.setattr("acquire.pauses.SHORTEST_PAUSE_S", 0.02)
    data = b"".join(struct.pack(">2f", 0.5, 1.5) for _ in range(40))
    serial.answers |= {"T?": b"9\n", "BUFFER?": b"#3%d" % len(data) + data + b"\n"}
    rows: list[tuple[object, ...]] = []

    def publish(*cells: object) -> int:
        rows.append(cells)
        return len(rows) - 1

    def run(until: Callable[[], bool], **keys: object) -> None:
        rows.clear()
        one = section(serial.resource, timeout_ms=400, period_s=0.02, **keys)
        instrument = Instrument(one)
        reader = Reader(one, instrument, publish, time.monotonic)
        deadline, pause = time.monotonic() + 30, threading.Event()
        while not until():
            assert time.monotonic() < deadline, rows
            pause.wait(min(max(reader.step() - time.monotonic(), 0.0), 0.01))
        reader.end()

    def good() -> int:
        return sum(row[2] == "ok" for row in rows)

    settings = [{"name": "time_constant", "query": "T?", "codes": {"9": 0.3}}]
    run(lambda: good() >= 3, settings=settings)
    assert rows[0][2] == "settings"
    assert {row[4] for row in rows if row[2] == "ok"} == {1.5}

    steps = [
        (lambda: good() >= 3, b"", b""),  # no answer now
        (lambda: any(row[2] == "no_answer" for row in rows), b"8.0\n", b"1.5\n1.5\n"),  # but later
        (lambda: any(row[2] == "bad_reply" for row in rows), b"", b"2.5\n"),
    ]

    def spoiled() -> bool:
        if steps and steps[0][0]():
            _, sent, serial.answers["X?"] = steps.pop(0)
            serial.send(sent)
        return any(row[4] == 2.5 for row in rows)

    run(spoiled)
    assert {row[4] for row in rows if row[2] == "ok"} == {1.5, 2.5}

    block = {"format": "float32", "sample_period_s": 0.0005}
    values = [{"name": "x", "position": 1}, {"name": "y", "position": 2}]
    run(
        lambda: len(rows) > 3, queries=["BUFFER?"], fields=2, values=values, block=block
    )
    assert all(row[4:] == (0.5, 1.5) for row in rows if row[2] == "ok")
    assert {row[2] for row in rows} <= {"ok", "bad_reply", "settings", "end"}


def test_other_libraries_have_no_socket_to_look_at() -> None:
    class Other:
        visalib = object()
        session = 1

    assert socket_below(Other()) is None


def test_sockets_that_are_not_watched_are_read_byte_by_byte(
    opened: Callable[..., Instrument], scripted: ScriptedInstrument, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As another VISA library would have it."""
    monkeypatch.setattr(acquire.instrument, "socket_below", lambda resource: None)
    rest = threading.Event()
    scripted.answers["SPLIT?"] = split("1.23456", 4, rest)
    instrument = opened(timeout_ms=SHORT_MS)
    assert instrument.ask("X?") == "1.5"
    with pytest.raises(ReplyTimeout, match=r"only '1\.23' came"):
        instrument.ask("SPLIT?")
    rest.set()
