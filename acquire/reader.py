"""A reader: takes readings off one instrument, by a schedule, and publishes them.

As a process of a run::

    python -m acquire.reader RUN_FOLDER READER [--parent PID]

:class:`Reader` decides what is done when; it is given its clock, its instrument and its
publisher, and needs no process. :func:`run_reader` is the loop around it.
"""

from __future__ import annotations

import faulthandler
import math
import sys
import time
from collections import deque
from collections.abc import Callable, Iterable, Sequence
from contextlib import suppress
from typing import Any

from acquire.blocks import Blocks, Taken
from acquire.child_process import Child, child_parser
from acquire.clock import RunClock
from acquire.config.reader import ReaderSection
from acquire.dialogue import Asked, Dialogue, Known
from acquire.errors import BadReply, InstrumentError, OtherInstrument, RunError
from acquire.instrument import Instrument
from acquire.pauses import pause_s
from acquire.reader_output import live_run_for, reader_output
from acquire.readings import reading_table
from acquire.recorder import RETRY_S, Recorder
from acquire.run_folder import RunFolder, open_run
from acquire.settings import SettingsRound, changes, not_understood
from acquire.stop import Stop, Stopped
from acquire.unnoted import unnoted_settings

SILENT_ROW_S = 1.0  # a reader without an instrument says so at least so often
SHORTEST_SILENCE_S = 0.005  # so long, at least, the line is watched after a reading
LONGEST_SLEEP_S = 0.2  # so soon it is seen that the parent has died


class Reader:
    """Decides what one reader does, one :meth:`step` at a time.

    Readings are due at whole multiples of ``period_s`` on the run's clock; one that is missed is
    skipped, not made up for. Whatever fails closes the session, is a row of its own, and is
    followed by attempts to reopen with growing pauses. Until one succeeds, a row says once a
    second (or once a period, if that is longer) that there is no answer.

    A reading is published once the line has stayed silent after it for as long as the slowest of
    the last readings took, but at most a quarter of the time that is left to the next one: had it
    been the answer to an earlier question, its own would still have come.

    What can't be recorded waits (see :mod:`acquire.recorder`). When too much does, the session is
    closed and nothing is asked until there is room; then identity and settings are asked anew.

    Parameters
    ----------
    known_identity, wait : see :class:`acquire.dialogue.Dialogue`.
    publish, now_s, note, complain : see :class:`acquire.recorder.Recorder`.
    unnoted : what a predecessor has published and not noted.
    """

    def __init__(
        self,
        section: ReaderSection,
        instrument: Asked,
        publish: Callable[..., int],
        now_s: Callable[[], float],
        *,
        known_identity: str | None = None,
        note: Callable[[dict[str, Any]], None] = lambda entry: None,
        complain: Callable[[str], None] = lambda text: None,
        wait: Callable[..., Any] = lambda call, *args: call(*args),
        unnoted: Iterable[dict[str, Any]] = (),
    ) -> None:
        self.section = section
        self.missed = 0  # readings that were due while something else took its time
        self.attempts = 0  # failures since the last good reading
        self.connected = False
        self._dialogue = Dialogue(section, instrument, known_identity, wait, now_s)
        self._blocks = Blocks(section, self._dialogue) if section.block is not None else None
        self._streamed = section.block is not None and section.block.unasked
        self._recorder = Recorder(section, publish, now_s, note, complain)
        self._recorder.note_later(unnoted)
        self._complain = complain
        self._now = now_s
        self._due = self._try_at = self._silent_at = now_s()
        self._slot = math.floor(self._due / section.period_s)
        self._why = "not tried yet"
        self._told = False  # whether identity and settings as they are stand in the journal
        self._round = SettingsRound(section)
        self._known: Known = {}  # the settings that were told last
        self._took: deque[float] = deque(maxlen=16)
        self._stranger = False  # whether it was said that another instrument answers

    def step(self) -> float:
        """Do what is due and return when the next thing is, in seconds of the run."""
        if self._now() >= self._due:
            if self._recorder.full:
                self._pause()
            elif self.connected:
                self._read()
            else:
                self._reconnect()
        self._recorder.step()
        return min(self._due, self._recorder.retry_at)

    def end(self) -> None:
        """Close the instrument and publish that nothing follows."""
        self.connected = False
        self._dialogue.close()
        self._recorder.confirm(self._dialogue.answers, at_once=True)
        self._recorder.end()

    def _pause(self) -> None:
        """Ask nothing while nothing more can be kept; afterwards it is opened anew."""
        self.connected = False
        self._dialogue.close()
        self._due = self._try_at = self._silent_at = self._now() + RETRY_S

    def _read(self) -> None:
        began = self._now()
        try:
            rows = self._once() if self._blocks is None else self._blocks.read()
            self._took.append(self._now() - began)
            if self.connected and not self._streamed:
                self._dialogue.expect_silence(self._silence_s())
        except InstrumentError as error:
            self._fail(error, began)
            return
        if self.connected:
            self.attempts = 0
        for one in rows:
            self._recorder.row(one.status, one.detail, one.values, one.took, one.time_s)
        if self.connected:
            self._refresh_settings()
        if self.connected:
            self._due = self._now() if self._streamed else self._next_slot()

    def _once(self) -> list[Taken]:
        """One reading; out of turn, it costs the session."""
        began = self._now()
        reply = self._dialogue.reading()
        ended = self._now()
        if not reply.in_order:
            self._disconnect(reply.detail)
        middle = (began + ended) / 2
        return [Taken(middle, reply.status, reply.detail, reply.values, (began, ended))]

    def _silence_s(self) -> float:
        """How long nothing more may come after an answer before it is believed."""
        period_s = self.section.period_s
        left_s = period_s - self._now() % period_s
        return min(max(SHORTEST_SILENCE_S, *self._took), left_s / 4)

    def _next_slot(self) -> float:
        slot = max(math.floor(self._now() / self.section.period_s), self._slot) + 1
        self.missed += slot - self._slot - 1
        self._slot = slot
        return slot * self.section.period_s

    def _refresh_settings(self) -> None:
        began = self._now()
        setting = self._round.due(began)
        if setting is None:
            return
        try:
            changed = self._dialogue.refresh(setting)
            self._dialogue.expect_silence(self._silence_s())
        except InstrumentError as error:
            self._fail(error, began)
            return
        if changed:
            self._tell()
        if self._round.is_over:
            self._recorder.confirm(self._dialogue.answers)

    def _fail(self, error: InstrumentError, began: float) -> None:
        self._disconnect(str(error))
        status = "bad_reply" if isinstance(error, BadReply) else "no_answer"
        self._recorder.row(status, str(error), took=(began, self._now()))

    def _disconnect(self, why: str) -> None:
        self.connected = False
        self._round.restart(self._now())
        self._silent_at = self._now() + max(SILENT_ROW_S, self.section.period_s)
        self._failed(why)

    def _failed(self, why: str) -> None:
        self.attempts, self._why = self.attempts + 1, why
        self._try_at = self._now() + pause_s(self.section.name, self.attempts)
        self._due = min(self._try_at, self._silent_at)

    def _reconnect(self) -> None:
        if self._now() >= self._try_at:
            try:
                changed = self._dialogue.connect()
            except InstrumentError as error:
                self._dialogue.close()
                self._failed(str(error))
                if isinstance(error, OtherInstrument) and not self._stranger:
                    self._stranger = True
                    self._complain(str(error))
            else:
                self._begin(changed)
                return
        if self._now() >= self._silent_at:
            self._silent_at = self._now() + max(SILENT_ROW_S, self.section.period_s)
            self._due = min(self._try_at, self._silent_at)
            self._recorder.row("no_answer", f"not connected, {self.attempts} failures: {self._why}")

    def _begin(self, changed: bool) -> None:
        now = self._now()
        self.connected, self._stranger = True, False
        if self._blocks is not None:
            self._blocks.restart()
        self._round.restart(now)
        self._slot = math.floor(now / self.section.period_s)
        self._due = now if self._streamed else self._next_slot()
        if changed or not self._told:
            self._tell()
        else:
            self._recorder.confirm(self._dialogue.answers)

    def _tell(self) -> None:
        dialogue = self._dialogue
        before, self._known = self._known, dialogue.settings
        words = tuple(changes(self.section, before, self._known))
        self._recorder.settings(dialogue.identity, dialogue.settings, dialogue.answers, words)
        self._told = True
        news = {name: one for name, one in self._known.items() if one != before.get(name)}
        for text in not_understood(self.section, news):
            self._complain(text)


def run_reader(
    reader: Reader,
    stop: Stop,
    now_s: Callable[[], float],
    wanted: Callable[[], bool] = lambda: True,
) -> None:
    """Step a reader when it is due until a stop is requested or it is not ``wanted`` any more."""
    due = now_s()
    with suppress(Stopped):
        while not stop.requested and wanted():
            left = due - now_s()
            if left > 0:
                stop.wait(time.sleep, min(left, LONGEST_SLEEP_S))
            else:
                due = reader.step()
    reader.end()


def main(arguments: Sequence[str] | None = None) -> int:
    """The process. Returns its exit status: 0 ended in order, 1 failed (one sentence says why)."""
    parser = child_parser("acquire.reader", "Read one instrument for a run.")
    parser.add_argument("reader")
    options = parser.parse_args(arguments)
    child = Child(f"reader {options.reader}", options.parent)
    return child.exit_status(
        lambda: _read_for_run(open_run(options.run_folder), options.reader, child)
    )


def _read_for_run(run: RunFolder, name: str, child: Child) -> None:
    section = _section(run, name)
    live = live_run_for(run, name)
    clock = RunClock(live.monotonic_start)
    unnoted = unnoted_settings(run, section)
    told = [entry for entry in run.instruments() if entry.get("reader") == name] + unnoted
    with reader_output(run, live, reading_table(name, section), child.complain) as publisher:
        instrument = Instrument(section)
        reader = Reader(
            section,
            instrument,
            publisher.publish,
            clock.now_s,
            known_identity=told[0].get("identity") if told else None,
            note=run.note_instrument,
            complain=child.complain,
            wait=child.stop.wait,
            unnoted=unnoted,
        )
        try:
            run_reader(reader, child.stop, clock.now_s, child.wanted)
        finally:
            instrument.close()


def _section(run: RunFolder, name: str) -> ReaderSection:
    try:
        return run.rig.reader(name)
    except KeyError:
        names = ", ".join(reader.name for reader in run.rig.readers) or "none"
        raise RunError(f"{run.path}: has no reader {name!r}; it has {names}.") from None


if __name__ == "__main__":
    faulthandler.enable()
    sys.exit(main())
