"""Readings out of buffers: what a block holds, when its samples were taken, what is missing."""

from __future__ import annotations

import math
import random
import threading
import time
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from bench_readers import read
from hypothesis import given
from hypothesis import strategies as st
from scripted_instrument import Answer, Close, Hold, ScriptedInstrument, Send

from acquire.block_data import samples_in
from acquire.byte_stream import LONGEST_REPLY
from acquire.config import parse
from acquire.config.reader import ReaderSection
from acquire.errors import BadReply, InstrumentError, ReplyTimeout, SessionLost
from acquire.ieee_block import LONGEST_BLOCK, header_length, payload_length
from acquire.instrument import Instrument
from acquire.laboratory.bench import Bench
from acquire.laboratory.scenario import Scenario
from acquire.probe import probe
from acquire.reader import Reader
from acquire.sample_clock import OutOfStep, SampleClock
from analyse.replay import merge_by_time
from analyse.rig import RigEstimator

IDENTITY = "MAKER,MODEL,7,1.0"
SHORT_MS, LONG_MS = 80, 10_000
DEADLINE_S = 40.0
PERIOD_S = 0.01


def section(resource: str = "TCPIP::127.0.0.1::1::SOCKET", **keys: Any) -> ReaderSection:
    block = {"format": "float32", "sample_period_s": PERIOD_S, **keys.pop("block", {})}
    plain = {
        "name": "lockin",
        "resource": resource,
        "write_termination": "\n",
        "read_termination": "\n",
        "timeout_ms": LONG_MS,
        "queries": ["BUFFER?"],
        "fields": 3,
        "period_s": 0.2,
        "values": [{"name": "x", "position": 1}, {"name": "y", "position": 2}],
        "overload": {"position": 3, "bits": 4},
        "block": block,
    }
    return ReaderSection.model_validate({**plain, **keys})


def packed(data: bytes) -> bytes:
    size = str(len(data))
    return f"#{len(size)}{size}".encode() + data


# ---- what a block holds ----


@pytest.mark.parametrize("order", ["little", "big"])
@pytest.mark.parametrize("kind", ["int16", "int32", "float32", "float64"])
def test_binary_numbers_are_read_as_they_are(order: str, kind: str) -> None:
    one = section(block={"format": kind, "byte_order": order})
    assert one.block is not None
    numbers = np.array([[1, -2, 0], [30000, 4, -5]], kind)
    data = numbers.astype(numbers.dtype.newbyteorder("<" if order == "little" else ">")).tobytes()
    assert samples_in(one, one.block, data) == numbers.astype(float).tolist()
    with pytest.raises(BadReply, match="does not hold whole samples"):
        samples_in(one, one.block, data[:-1])
    assert samples_in(one, one.block, b"") == []


def test_text_is_cut_into_samples() -> None:
    one = section(block={"format": "text"})
    assert one.block is not None
    assert samples_in(one, one.block, b"1,2,0, 3,4,OVLD") == [["1", "2", "0"], ["3", "4", "OVLD"]]
    assert samples_in(one, one.block, b" ") == []
    for data, words in ((b"1,2,0,3", "no whole samples"), (b"1,2,\xff", "not ascii")):
        with pytest.raises(BadReply, match=words):
            samples_in(one, one.block, data)


@pytest.mark.parametrize(
    ("start", "words"),
    [(b"#0", "indefinite"), (b"1.", "should begin"), (b"##", "should begin"), (b"#", "begin")],
)
def test_what_does_not_begin_a_block_is_told(start: bytes, words: str) -> None:
    with pytest.raises(BadReply, match=words):
        header_length(start)


@pytest.mark.parametrize("digits", [b"1x", b"", b"-1", b"99999999"])
def test_a_length_that_is_none_or_too_large_is_told(digits: bytes) -> None:
    with pytest.raises(BadReply):
        payload_length(digits)


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"queries": ["A?", "B?"]}, "one query"),
        ({"block": {"sample_period_setting": "p"}}, "exactly one"),
        ({"block": {"sample_period_s": None, "sample_rate_setting": "p"}}, "none of the reader's"),
        ({"block": {"counter_position": 4}}, "beyond"),
    ],
)
def test_mistakes_in_the_configuration_of_a_block(keys: dict[str, Any], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        section(**keys)


# ---- when its samples were taken ----


def times_of(clock: SampleClock, count: int, asked_s: float, answered_s: float) -> list[float]:
    times = clock.times(count, asked_s, answered_s)
    return [times.at(index) for index in range(times.count)]


def test_times_lie_within_a_period_and_the_quickest_exchange_of_the_truth() -> None:
    """Whatever the exchanges take and however the clocks drift; and they always go on."""
    rng = random.Random(1)
    for drift in (0.0, 3e-4, -3e-4, 3e-3):
        true_s, clock, last = PERIOD_S * (1 + drift), SampleClock(PERIOD_S), -math.inf
        asked, taken, errors = 5.0, 0, list[float]()
        for number in range(600):
            wait = 0.002 * rng.random() + (0.5 if rng.random() < 0.02 else 0.0)
            due = math.floor((asked + wait * rng.random()) / true_s) + 1
            if number == 0:
                clock.start(asked, asked + wait)
            else:
                times = times_of(clock, due - taken, asked, asked + wait)
                assert all(b > a for a, b in zip([last, *times], times))
                errors += [t - k * true_s for k, t in enumerate(times, taken)]
                last = times[-1]
            taken, asked = due, asked + wait + 0.15 + 0.1 * rng.random()
        assert max(map(abs, errors)) < 1.5 * PERIOD_S
        assert abs(sum(errors[-200:]) / 200) < PERIOD_S


def test_latency_moves_all_times() -> None:
    plain, late = SampleClock(0.01), SampleClock(0.01, latency_s=0.3)
    for clock in (plain, late):
        clock.start(1.0, 1.001)
    one, two = (times_of(clock, 20, 1.2, 1.201) for clock in (plain, late))
    assert [a - b for a, b in zip(one, two)] == pytest.approx([0.3] * 20)


@pytest.mark.parametrize("count", [0, 10, 17, 24, 40, 1000])
def test_a_count_that_does_not_fit_the_time_is_out_of_step(count: int) -> None:
    clock = SampleClock(0.01)
    clock.start(1.0, 1.001)
    clock.times(20, 1.2, 1.201)
    with pytest.raises(OutOfStep, match="about 20 were due"):
        clock.times(count, 1.4, 1.401)


@given(
    st.lists(
        st.tuples(st.integers(0, 50), st.floats(0.0, 1.0), st.floats(0.0, 0.5)), max_size=30
    )
)
def test_times_go_on_or_are_refused(steps: list[tuple[int, float, float]]) -> None:
    clock, now, last = SampleClock(0.01), 0.0, -math.inf
    clock.start(0.0, 0.0)
    for count, wait, took in steps:
        asked, now = now + wait, now + wait + took
        try:
            times = times_of(clock, count, asked, now)
        except OutOfStep:
            clock.start(asked, now)
            last = -math.inf
            continue
        assert len(times) == count
        assert all(b > a for a, b in zip([last, *times], times))
        last = times[-1] if times else last


# ---- a reader at the simulated lock-in, by a clock made of nothing ----


class Lab:
    """A laboratory and the clock of a reader; every exchange takes some time.

    The field ramps steadily and the lock-in has no noise, so each value tells its true moment.
    """

    def __init__(self, **buffer: object) -> None:
        scenario = {
            "current_A": 1e-6,
            "sample": {
                "sheet_density_per_m2": 3e15, "mobility_m2_per_V_s": 20.0,
                "temperature_K": 300.0, "carriers": "holes",
            },
            "magnet": {"path_T": [0.0, 100.0], "rate_T_per_min": 6.0, "wait_s": 0.0},
            "lockins": [
                {
                    "name": "xy", "measures": "hall", "noise_V_per_rtHz": 0.0,
                    "time_constant_s": 0.001, "poles": 1,
                    "buffer": {"sample_period_s": PERIOD_S, "format": "float64", **buffer},
                }
            ],
        }  # fmt: skip
        self.bench = Bench(Scenario.model_validate(scenario))
        self.period_s = PERIOD_S * (1 + float(str(buffer.get("clock_error", 0.0))))
        self.now, self.took_s = 10.0, 0.004
        self.reply_after_s = 0.0
        self.rows: list[tuple[Any, ...]] = []
        self.words: list[str] = []
        self.asked: list[float] = []
        self.spoil: list[Any] = []  # each makes something else of one block

    def now_s(self) -> float:
        return self.now

    def open(self, known_identity: str | None = None) -> str:
        return self.ask("*IDN?")

    def ask(self, query: str) -> str:
        self.now += self.took_s / 2
        (piece,) = self.bench.hear("xy", query, self.now).pieces
        self.now += self.took_s / 2
        return piece.data.decode("latin-1").removesuffix("\n")

    def ask_block(self, query: str, block: object) -> bytes:
        self.asked.append(self.now)
        text = self.ask(query)
        self.reply_after_s = 0.75 * self.took_s
        data = text.encode("latin-1")
        if data.startswith(b"#"):
            data = data[2 + int(data[1:2]) :]
        return self.spoil.pop(0)(data) if self.spoil else data

    def expect_silence(self, wait_s: float = 0.0) -> None:
        self.now += wait_s

    def close(self) -> None:
        pass

    def publish(self, *cells: Any) -> int:
        self.rows.append(cells)
        return len(self.rows) - 1

    def reader(self, **keys: Any) -> Reader:
        keys["block"] = {"format": "float64", **keys.get("block", {})}
        one = section(**keys)
        return Reader(one, self, self.publish, self.now_s, complain=self.words.append)

    def run(self, reader: Reader, seconds: float) -> None:
        end = self.now + seconds
        due = reader.step()
        while due < end:
            self.now = max(self.now, due)
            due = reader.step()
        self.now = max(self.now, end)

    def good(self) -> list[tuple[float, float]]:
        """(time, true time) of the good rows."""
        ohm_per_T = 1 / (3e15 * 1.602176634e-19)
        return [
            (row[0], row[4] / 1e-6 / ohm_per_T / 0.1 + 0.001) for row in self.rows if row[2] == "ok"
        ]

    def errors(self) -> list[float]:
        return [told - true for told, true in self.good()]

    def marked(self) -> list[tuple[str, str]]:
        return [row[2:4] for row in self.rows if row[2] not in ("ok", "settings")]

    def missing(self) -> int:
        """Samples that lie between the first and the last good one and did not come."""
        good = self.good()
        return round((good[-1][1] - good[0][1]) / self.period_s) + 1 - len(good)


TOLERANCE_S = PERIOD_S + 0.004


@pytest.mark.parametrize("form", ["text", "float32", "float64"])
@pytest.mark.parametrize("order", ["little", "big"])
def test_every_sample_is_a_row_at_its_time(form: str, order: str) -> None:
    lab = Lab(format=form, byte_order=order)
    lab.run(lab.reader(block={"format": form, "byte_order": order}), 5.0)
    assert lab.marked() == []
    assert len(lab.good()) > 440
    assert lab.missing() == 0
    assert max(map(abs, lab.errors())) < TOLERANCE_S
    assert lab.rows[-1][1] is None
    times = [row[0] for row in lab.rows if row[2] == "ok"]
    assert all(b > a for a, b in zip(times, times[1:]))


@pytest.mark.parametrize("clock_error", [2e-3, -1e-3])
def test_a_clock_that_is_off_is_followed(clock_error: float) -> None:
    lab = Lab(clock_error=clock_error)
    lab.run(lab.reader(), 30.0)
    assert lab.marked() == []
    assert lab.missing() == 0
    assert max(map(abs, lab.errors())) < TOLERANCE_S
    assert abs(30.0 * clock_error) > 2 * TOLERANCE_S


@pytest.mark.parametrize("counter", [False, True])
@pytest.mark.parametrize("when_full", ["drops_oldest", "stops"])
def test_a_buffer_that_ran_over_is_marked_and_shifts_nothing(when_full: str, counter: bool) -> None:
    lab = Lab(capacity=50, when_full=when_full, counter=counter)
    reader = lab.reader(
        fields=4 if counter else 3, block={"counter_position": 4} if counter else {}
    )
    lab.run(reader, 3.0)
    lab.now += 1.7
    lab.run(reader, 3.0)
    assert max(map(abs, lab.errors())) < TOLERANCE_S
    assert 100 < lab.missing() < 220
    ((status, detail),) = lab.marked()
    if counter and when_full == "drops_oldest":
        assert (status, detail.split()[0]) == ("no_answer", str(lab.missing()))
        assert "samples before the next were lost" in detail
    else:
        assert status == "bad_reply"
        assert "50 samples can't be used: about" in detail


def test_a_number_that_jumps_far_is_no_gap_that_was_real() -> None:
    """And takes no memory for all the samples that it says are missing."""
    lab = Lab(counter=True)
    reader = lab.reader(fields=4, block={"counter_position": 4})
    lab.run(reader, 1.0)

    def far(data: bytes) -> bytes:
        numbers = np.frombuffer(data, ">f8").reshape(-1, 4).copy()
        numbers[:, 3] += 1e12
        return numbers.astype(">f8").tobytes()

    lab.spoil = [far]
    lab.run(reader, 3.0)
    assert "can't be used" in lab.marked()[0][1]
    assert lab.rows[-1][2] == "ok"
    assert max(map(abs, lab.errors())) < TOLERANCE_S


def test_a_block_that_comes_twice_is_used_once_and_nothing_is_lost() -> None:
    lab = Lab()
    kept: list[bytes] = []

    def keep(data: bytes) -> bytes:
        kept.append(data)
        return data

    reader = lab.reader()
    lab.run(reader, 1.0)

    def again(data: bytes) -> bytes:
        # what it really held comes with the next block
        lab.spoil = [lambda more: data + more]
        return kept[0]

    lab.spoil = [keep, again]
    lab.run(reader, 2.0)
    ((status, detail),) = lab.marked()
    assert (status, lab.missing()) == ("bad_reply", 0)
    assert "came in the block before, to the last bit" in detail
    assert max(map(abs, lab.errors())) < TOLERANCE_S


def test_blocks_of_the_same_numbers_are_none_that_came_twice() -> None:
    lab = Lab()
    flat = np.array([[1e-3, 0.0, 0.0]])
    lab.spoil = [lambda data: np.repeat(flat, len(data) // 24, 0).astype(">f8").tobytes()] * 20
    lab.run(lab.reader(), 3.0)
    assert lab.marked() == []


def test_samples_that_stop_coming_are_marked_and_found_again() -> None:
    lab = Lab()
    reader = lab.reader()
    lab.run(reader, 1.0)
    lab.spoil = [lambda data: b""] * 5
    lab.run(reader, 3.0)
    assert {status for status, _ in lab.marked()} == {"no_answer"}
    assert all("no samples came" in detail for _, detail in lab.marked())
    assert lab.rows[-1][2] == "ok"
    assert max(map(abs, lab.errors())) < TOLERANCE_S


@pytest.mark.parametrize(
    "spoil",
    [
        lambda data: data[:-8],  # cut within a sample, with a length that says so
        lambda data: data[:24] + b"\xff" * 8 + data[32:],  # NaN
        lambda data: data[:24] + np.array([9.9e37], ">f8").tobytes() + data[32:],
        lambda data: data[:24] + np.array([np.inf], ">f8").tobytes() + data[32:],
        lambda data: data[:40] + np.array([4.0], ">f8").tobytes() + data[48:],  # status bit
        lambda data: data[:40] + np.array([0.5], ">f8").tobytes() + data[48:],  # no status word
        lambda data: data[: len(data) // 48 * 24],  # half of the samples
        lambda data: data + data,
    ],
)
def test_what_is_wrong_in_a_block_is_marked_and_the_reader_goes_on(spoil: Any) -> None:
    lab = Lab()
    reader = lab.reader()
    lab.run(reader, 1.0)
    lab.spoil = [spoil]
    lab.run(reader, 4.0)
    assert lab.marked()
    assert lab.rows[-1][2] == "ok"
    assert max(map(abs, lab.errors())) < TOLERANCE_S


class Stream(Lab):
    """Blocks that come by themselves every 0.1 s, after up to ``jitter_s`` on the way."""

    def __init__(self, **buffer: object) -> None:
        super().__init__(**buffer)
        self.sent_s, self.jitter_s, self.rng = math.inf, 0.03, random.Random(2)
        self.on_its_way: list[tuple[float, bytes]] = []

    def tell(self, command: str) -> None:
        assert command == "BUFFER?"
        self.sent_s = self.now

    def next_block(self, block: object) -> bytes:
        """What was sent while nobody listened waits."""
        asked = self.now
        while not self.on_its_way or self.sent_s < asked:
            self.sent_s += 0.1
            (piece,) = self.bench.hear("xy", "BUFFER?", self.sent_s).pieces
            data = piece.data.removesuffix(b"\n")
            came = max(
                self.sent_s + self.jitter_s * self.rng.random(), *(t for t, _ in self.on_its_way), 0.0
            )
            self.on_its_way.append((came, data[2 + int(data[1:2]) :]))
        came, data = self.on_its_way.pop(0)
        self.reply_after_s = max(came - asked, 0.0)
        self.now = max(asked, came) + 0.001
        return self.spoil.pop(0)(data) if self.spoil else data


STREAMED = {"unasked": True, "jitter_s": 0.04}
LATE_S = PERIOD_S + 0.04


def test_blocks_that_come_unasked_are_rows_at_their_times() -> None:
    lab = Stream(clock_error=1e-3)
    lab.run(lab.reader(block=STREAMED), 30.0)
    assert lab.marked() == []
    assert len(lab.good()) > 2900
    assert lab.missing() == 0
    assert max(map(abs, lab.errors())) < LATE_S


def test_unasked_blocks_that_waited_for_a_slow_reader_keep_their_times() -> None:
    lab = Stream()
    reader = lab.reader(block=STREAMED)
    lab.run(reader, 3.0)
    lab.now += 2.0
    lab.run(reader, 3.0)
    assert lab.marked() == []
    assert lab.missing() == 0
    assert max(map(abs, lab.errors())) < LATE_S


def test_unasked_blocks_that_are_lost_or_come_twice_shift_nothing() -> None:
    lab = Stream()
    reader = lab.reader(block=STREAMED)
    lab.run(reader, 1.0)
    lab.spoil = [lambda data: data, lambda data: data[: len(data) // 48 * 24]]
    lab.run(reader, 3.0)
    assert len(lab.marked()) == 1
    assert lab.rows[-1][2] == "ok"
    assert max(map(abs, lab.errors())) < LATE_S


def test_nothing_can_be_asked_of_an_instrument_that_streams() -> None:
    for keys in ({"settings_period_s": 1.0}, {"proof": {"query": "*OPC?", "reply": "1"}}):
        with pytest.raises(ValueError, match="nothing can be asked"):
            section(block=STREAMED, **keys)
    assert section(block=STREAMED, queries=[]).queries == ()


def test_the_sample_period_may_be_a_setting_that_changes() -> None:
    lab = Lab()
    reader = lab.reader(
        settings=[{"name": "p", "query": "SAMPLEPERIOD?"}],
        settings_period_s=1.0,
        block={"sample_period_s": None, "sample_period_setting": "p"},
    )
    lab.run(reader, 3.0)
    assert lab.marked() == []
    buffer = lab.bench.places["xy"].interpreter._commands["BUFFER?"]
    inside = buffer.__closure__[0].cell_contents  # type: ignore[union-attr]
    inside._section = inside._section.model_copy(update={"sample_period_s": 0.02})
    inside.advance(lab.now)
    inside._period_s, inside._next = 0.02, math.floor(lab.now / 0.02) + 1
    lab.run(reader, 5.0)
    assert any("the sample period is 0.02 s now" in detail for _, detail in lab.marked())
    assert max(map(abs, lab.errors())) < 0.02 + 0.004
    assert lab.rows[-1][2] == "ok"
    assert "p has changed from 0.01 to 0.02" in lab.words[0]


def test_while_the_sample_period_is_not_known_nothing_is_used() -> None:
    lab = Lab()
    reader = lab.reader(
        settings=[{"name": "p", "query": "SAMPLEPERIOD?", "codes": {"3": 0.01}}],
        block={"sample_period_s": None, "sample_period_setting": "p"},
    )
    lab.run(reader, 1.0)
    assert lab.good() == []
    assert all("the sample period is not known" in detail for _, detail in lab.marked())


# ---- all the way ----

RIG = b"""
[run]
title = "blocks"
[ramp]
path_T = [0.0, 1.0]
rate_T_per_min = 2.0
[field]
reader = "magnet"
value = "B"
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = { reader = "xx", x = "x", filter = { time_constant_s = 0.03, poles = 2 } }
hall = { reader = "xy", x = "x", filter = { time_constant_s = 0.03, poles = 2 } }
excitation = { current_A = 1e-6 }
[[readers]]
name = "magnet"
resource = "TCPIP::127.0.0.1::1::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["FIELD?"]
period_s = 0.2
values = [{ name = "B", position = 1, unit = "T" }]
""" + b"".join(
    b"""
[[readers]]
name = "NAME"
resource = "TCPIP::127.0.0.1::1::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["BUFFER?"]
fields = 4
period_s = 0.5
values = [{ name = "x", position = 1 }]
overload = { position = 3, bits = 4 }
block = { format = "float32", sample_period_setting = "p", counter_position = 4 }
settings = [{ name = "p", query = "SAMPLEPERIOD?" }]
""".replace(b"NAME", name)
    for name in (b"xx", b"xy")
)


def test_samples_out_of_blocks_are_readings_as_any_other_for_the_estimator() -> None:
    buffered = {
        "noise_V_per_rtHz": 2e-7, "time_constant_s": 0.03, "poles": 2,
        "buffer": {"sample_period_s": 0.02, "counter": True, "clock_error": 1e-4},
    }  # fmt: skip
    scenario = {
        "current_A": 1e-6,
        "sample": {"sheet_density_per_m2": 3e15, "mobility_m2_per_V_s": 20.0,
                   "quantum_lifetime_s": 1e-13},
        "magnet": {"path_T": [0.0, 1.0], "rate_T_per_min": 2.0, "wait_s": 1.0},
        "lockins": [
            {"name": "xx", "measures": "longitudinal", **buffered},
            {"name": "xy", "measures": "hall", **buffered},
        ],
    }  # fmt: skip
    rig = parse(RIG)
    rows = read(rig, Bench(Scenario.model_validate(scenario)), 36.0)
    assert len(rows["xy"]) > 1600
    assert {row.status for known in rows.values() for row in known} == {"ok", "settings"}
    found = RigEstimator(rig)
    estimates = [one for row in merge_by_time(rows) for _, one in found.take(row)]
    density, mobility = estimates[-1].sheet_density, estimates[-1].mobility
    assert density is not None and mobility is not None
    assert density.low < 3e15 < density.high
    assert mobility.low < 20.0 < mobility.high
    assert density.high - density.low < 0.02 * 3e15


# ---- on a socket ----


@pytest.fixture
def scripted() -> Iterator[ScriptedInstrument]:
    with ScriptedInstrument({"*IDN?": IDENTITY}) as server:
        yield server


NEVER = threading.Event()
DATA = bytes(range(256)) * 30  # with every byte that could end a line
CUT = packed(DATA)


def opened(scripted: ScriptedInstrument, **keys: Any) -> Instrument:
    instrument = Instrument(section(scripted.resource, **keys))
    instrument.open()
    return instrument


def test_a_block_comes_in_any_pieces(scripted: ScriptedInstrument) -> None:
    instrument = opened(scripted)
    block = instrument.section.block
    reply = CUT + b"\n"
    for pieces in (1, 2, 7, 500):
        size = math.ceil(len(reply) / pieces)
        parts = [reply[begin : begin + size] for begin in range(0, len(reply), size)]
        scripted.answers["BUFFER?"] = tuple(Send(part) for part in parts)
        assert instrument.ask_block("BUFFER?", block) == DATA
        instrument.expect_silence()
    assert instrument.ask("*IDN?") == IDENTITY
    instrument.close()


@pytest.mark.parametrize(
    ("answer", "error", "words"),
    [
        ((Send(CUT[:3000]), Hold(NEVER)), ReplyTimeout, "2994 of 7680 bytes of a block came"),
        ((Send(CUT[:3000]), Close()), SessionLost, "closed"),
        ((Send(CUT[:1]), Hold(NEVER)), ReplyTimeout, "1 of 2 bytes"),
        ((Hold(NEVER),), ReplyTimeout, "0 of 2 bytes"),
        ((Send(CUT), Hold(NEVER)), ReplyTimeout, "0 of 1 bytes"),
        (packed(DATA).replace(b"7680", b"7600", 1) + b"\n", BadReply, "the length is wrong"),
        (packed(DATA).replace(b"7680", b"7690", 1) + b"\n", ReplyTimeout, "7681 of 7690"),
        (b"#0" + DATA + b"\n", BadReply, "indefinite"),
        (b"1.5\n", BadReply, "should begin"),
        (b"#9999999999" + b"7" * 10_000, BadReply, "at most"),
    ],
)
def test_a_block_that_is_not_whole_is_none(
    scripted: ScriptedInstrument, answer: Answer, error: type[InstrumentError], words: str
) -> None:
    scripted.answers["BUFFER?"] = answer
    instrument = opened(scripted, timeout_ms=LONG_MS if error is not ReplyTimeout else SHORT_MS)
    with pytest.raises(error, match=words):
        instrument.ask_block("BUFFER?", instrument.section.block)
    assert not instrument.is_open


def test_a_block_that_comes_twice_on_the_line_is_noticed(scripted: ScriptedInstrument) -> None:
    scripted.answers["BUFFER?"] = CUT + b"\n" + CUT + b"\n"
    instrument = opened(scripted)
    assert instrument.ask_block("BUFFER?", instrument.section.block) == DATA
    with pytest.raises(BadReply, match="without a question"):
        instrument.expect_silence()


def test_a_long_text_is_a_block_too_and_one_without_end_is_cut_off(
    scripted: ScriptedInstrument,
) -> None:
    text = ",".join(["+1.000000E-06"] * 3000)
    assert len(text) > 2 * LONGEST_REPLY
    scripted.answers["BUFFER?"] = text
    instrument = opened(scripted, block={"format": "text"})
    block = instrument.section.block
    assert instrument.ask_block("BUFFER?", block) == text.encode()
    scripted.answers["BUFFER?"] = (*(Send(b"7" * 65_536) for _ in range(80)), "")
    with pytest.raises(BadReply, match=f"does not end within {LONGEST_BLOCK}"):
        instrument.ask_block("BUFFER?", block)


def test_blocks_that_come_unasked_on_a_socket(scripted: ScriptedInstrument) -> None:
    """And check shows one, then asks the settings on a new connection."""
    data = np.array([[1e-3, 2e-3, 0.0]] * 25, ">f4").tobytes()
    scripted.answers["GO"] = tuple(Send(packed(data) + b"\n") for _ in range(3))
    scripted.answers["T?"] = "0.3"
    one = section(
        scripted.resource,
        block=STREAMED,
        queries=["GO"],
        settings=[{"name": "T", "query": "T?"}],
    )
    instrument = Instrument(one)
    instrument.open()
    instrument.tell("GO")
    assert [instrument.next_block(one.block) for _ in range(3)] == [data] * 3
    instrument.close()
    found = probe(one)
    assert found.good
    assert [item.what for item in found.exchanges] == ["identity", "reading", "setting T"]
    assert "25 samples" in (found.exchanges[1].meaning or "")


def test_check_shows_what_a_block_holds(scripted: ScriptedInstrument) -> None:
    data = np.array([[1e-3, 2e-3, 0.0]] * 25, ">f4").tobytes()
    scripted.answers["BUFFER?"] = packed(data) + b"\n"
    found = probe(section(scripted.resource))
    assert found.good
    reading = found.exchanges[-1]
    assert reading.meaning == "25 samples; the last: x = 0.00100000005 V, y = 0.00200000009 V"
    assert found.reading is not None
    scripted.answers["BUFFER?"] = packed(data[:-1]) + b"\n"
    failed = probe(section(scripted.resource))
    assert not failed.good
    assert "does not hold whole samples" in (failed.exchanges[-1].error or "")


def test_a_reader_takes_blocks_off_a_socket_and_goes_on_after_a_cut(
    scripted: ScriptedInstrument, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An instrument whose sample k has the value k, every 2 ms by the clock of the reader."""
    monkeypatch.setattr("acquire.pauses.SHORTEST_PAUSE_S", 0.02)
    start, sent = time.monotonic(), [0]

    def held() -> bytes:
        last = int((time.monotonic() - start) / 0.002)
        numbers = np.array([[k, 0, 0] for k in range(sent[0], last)]).reshape(-1, 3)
        sent[0] = last
        return packed(numbers.astype(">f4").tobytes()) + b"\n"

    scripted.answers["BUFFER?"] = held
    rows: list[tuple[Any, ...]] = []

    def publish(*cells: Any) -> int:
        rows.append(cells)
        return len(rows) - 1

    one = section(
        scripted.resource, period_s=0.05, timeout_ms=300, block={"sample_period_s": 0.002}
    )
    reader = Reader(one, Instrument(one), publish, lambda: time.monotonic() - start)
    deadline, pause = time.monotonic() + DEADLINE_S, threading.Event()

    def until(count: int) -> None:
        while sum(row[2] == "ok" for row in rows) < count:
            assert time.monotonic() < deadline, rows[-5:]
            pause.wait(min(max(reader.step() - (time.monotonic() - start), 0.0), 0.01))

    until(100)
    scripted.answers["BUFFER?"] = [lambda: (Send(held()[:50]), Close()), held]
    known = len(rows)
    until(250)
    reader.end()
    assert any(row[2] == "no_answer" for row in rows[known:])
    late = [row[0] - 0.002 * row[4] for row in rows if row[2] == "ok"]
    # a slow machine makes exchanges slow; the times are as good as the exchanges are quick
    assert all(-0.3 < error < 0.3 for error in late)
    times = [row[0] for row in rows if row[2] == "ok"]
    assert times == sorted(times)
    values = [row[4] for row in rows if row[2] == "ok"]
    assert len(set(values)) == len(values)
