"""Holding the field, as the watch does it: the keeper's decisions carried out, and told.

The keeper (:mod:`acquire.hold.keeper`) decides; here it is told what happens in the run, what people
ask for comes in through an inbox of its own, and the process of the command is started and heard.
Also without [hold] it is said once when the answer is good enough.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from threading import Event
from typing import Any

from acquire.bus import Inbox
from acquire.closing import Closing
from acquire.errors import RampsideError
from acquire.hold.code import new_code
from acquire.hold.command import NOT_SENT, REACHED
from acquire.hold.keeper import Answer, Keeper, Step
from acquire.hold.words import GOOD_ENOUGH
from acquire.run_folder import RunFolder
from analyse.cautions import NOTES
from dashboard.hold_arming import typed_code
from dashboard.hold_process import HoldProcess, Said
from dashboard.hold_trial import HoldTrial
from dashboard.progress import Progress
from dashboard.view import View

LOOPBACK_ANY = "tcp://127.0.0.1:0"
MOST_REQUESTS = 10  # a look
RING_EVERY_S, RING_FOR_S = 2.0, 30.0  # the terminal's bell, at an alarm

Tell = Callable[[str, str, str], None]
"""Kind, code and text of an event of the run."""


def boot_clock() -> float:
    """Seconds that never run backwards and, where the system has such, go on while it sleeps."""
    if hasattr(time, "CLOCK_BOOTTIME"):
        return time.clock_gettime(time.CLOCK_BOOTTIME)
    return time.monotonic()


class HoldWatch(Closing):
    """One run's holding of the field. Belongs to one thread. Raises BusError without an address.

    Parameters
    ----------
    bell : ring also when the answer is good enough.
    clock : seconds that never run backwards.
    """

    def __init__(
        self, run: RunFolder, view: View, bell: bool = False,
        clock: Callable[[], float] = boot_clock,
    ) -> None:  # fmt: skip
        rig = run.rig
        self._run, self._view, self._bell, self._now_s = run, view, bell, clock
        self._tell: Tell = lambda kind, code, text: None
        self._code = new_code()
        self._keeper: Keeper | None = None
        self._inbox: Inbox | None = None
        self._process: HoldProcess | None = None
        self._trial = HoldTrial(run)
        self._good = self._has_field = False
        self._trouble = ""
        self._ringing: tuple[float, float] | None = None  # next ring, last one
        if rig.hold is not None:
            self._keeper = Keeper(rig, self._code)
            self._inbox = Inbox(LOOPBACK_ANY)

    @property
    def address(self) -> str:
        """Where requests are taken; empty without [hold]."""
        return "" if self._inbox is None else self._inbox.address

    @property
    def asking(self) -> bool:
        """Whether a process of ours talks to the supply."""
        return self._process is not None or self._trial.goes_on

    @property
    def alarm(self) -> str:
        """The sentence of an alarm; empty if there is none."""
        if self._keeper is None or self._keeper.state != "alarm":
            return ""
        return self._keeper.told

    def begin(self, tell: Tell, arm: bool, wish: Event) -> None:
        """Say the code, and let it be armed in the terminal if that was asked for.

        ``tell`` writes an event of the run.
        """
        self._tell = tell
        if self._keeper is None:
            return
        if not arm:
            self._view.say(f"Code: {self._code} (to hold the field, which is not armed)")
            return
        typed = typed_code(self._run, self._view, self._code, wish)
        if not typed:
            self._view.say("Not armed: no code was typed. The watch goes on without.")
        elif not (answer := self._keeper.arm(typed, self._now_s())).ok:
            self._view.alarm(f"{answer.text} Not armed; the watch goes on without.")
        self._carry_out()

    def field(self, time_s: float, field_T: float) -> None:
        """Take a usable field reading."""
        self._has_field = True
        if self._keeper is not None:
            self._keeper.field(time_s, field_T, self._now_s())

    def unexpected(self, what: str) -> None:
        """A process of the run died, hung or did not come."""
        if self._keeper is not None:
            self._keeper.unexpected(what)
            self._carry_out()

    def look(self, progress: Progress, ramp_over: bool, states: Mapping[str, str]) -> None:
        """Do what is to be done now; doesn't wait."""
        if self._keeper is not None:
            self._keeper.look(self._now_s())
            self._note_cautions(progress, states)
            if ramp_over:
                self._keeper.ramp_over()
        self._note_verdicts(progress, ramp_over)
        self._answer_requests()
        self._try()
        self._carry_out()
        self._ring()

    def end(self) -> None:
        """The watch ends: nothing goes out any more; what is under way is told as it stands."""
        if self._keeper is None:
            return
        if self._keeper.state in ("armed", "begun"):
            self._keeper.unexpected("the watch ends")
        elif self._keeper.state == "checking":
            self._keeper.remark("hold_unproven", "The watch ends before the field was seen to stand.")
        self._carry_out()
        self._trial.close()
        if self._process is not None:
            self._process.close()
            self._carry_out()

    def close(self) -> None:
        """Give back the address, and the process if it still lives."""
        self._trial.close()
        if self._process is not None:
            self._process.close()
            self._process = None
        if self._inbox is not None:
            self._inbox.close()
            self._inbox = None

    def _note_cautions(self, progress: Progress, states: Mapping[str, str]) -> None:
        assert self._keeper is not None
        down = [name for name, state in states.items() if state != "ready"]
        self._trouble = f"{', '.join(down)} not ready" if down else ""
        for name, bar in progress.summary.bars.items():
            if codes := sorted(set(bar.cautions) - NOTES):
                self._trouble = f"{name} has the caution {', '.join(codes)}"
                self._keeper.unexpected(self._trouble)

    def _note_verdicts(self, progress: Progress, ramp_over: bool) -> None:
        bars = progress.summary.bars.values()
        good = all(bar.verdict == "stable" for bar in bars)
        if good and not self._good:
            if self._keeper is not None:
                self._keeper.good_enough(self._now_s())
            if not ramp_over and (self._keeper is None or self._keeper.state == "off"):
                self._view.say(GOOD_ENOUGH)
                if self._bell:
                    self._view.ring()
        elif self._good and not good and self._keeper is not None:
            self._keeper.not_good_enough()
        self._good = good

    def _answer_requests(self) -> None:
        for _ in range(MOST_REQUESTS if self._inbox is not None else 0):
            assert self._inbox is not None
            if (asked := self._inbox.receive(0.0)) is None:
                return
            message, reply = asked
            answer = self._answer(message)
            self._carry_out()  # what was decided is on its way before anybody hears of it
            reply(answer)

    def _answer(self, message: dict[str, Any]) -> dict[str, Any]:
        keeper = self._keeper
        assert keeper is not None
        now_s, typed = self._now_s(), message.get("code")
        match message.get("do") if message.get("kind") == "hold" else None:
            case "arm":
                answer = keeper.arm(typed, now_s, self._trouble)
            case "hold_now":
                answer = keeper.hold_now(typed, now_s)
            case "disarm":
                answer = keeper.disarm()
            case "state":
                answer = Answer(True, "")
            case "may_send":
                answer = Answer(self._may_send(message, now_s), "")
            case _:
                answer = Answer(False, "unknown request")
        return {"ok": answer.ok, "text": answer.text, "state": keeper.state, "told": keeper.told,
                "good": self._good}  # fmt: skip

    def _may_send(self, message: dict[str, Any], now_s: float) -> bool:
        """Whether the process that we have started may send; nobody else ever may."""
        assert self._keeper is not None
        if self._process is None or message.get("pid") != self._process.pid:
            return False
        self._keeper.remark("hold_connected", str(message.get("told")))
        return self._keeper.may_send(now_s)

    def _carry_out(self) -> None:
        """Start, hear or end the process of the command as the keeper decided, and tell it all."""
        keeper = self._keeper
        if keeper is None:
            return
        if keeper.state == "begun" and self._process is None:
            self._start()
        if self._process is not None:
            self._hear_process()
        for step in keeper.steps():
            self._show(step)

    def _try(self) -> None:
        keeper = self._keeper
        if keeper is None:
            return
        for said in self._trial.look(keeper.state, self._has_field and not self._trouble):
            if said.step == REACHED:
                keeper.remark("hold_reached", said.text)
            else:
                keeper.unexpected(f"the magnet supply can't be asked: {said.text}")

    def _start(self) -> None:
        assert self._keeper is not None
        self._trial.close()
        try:
            self._process = HoldProcess(self._run)
        except (OSError, RampsideError) as error:
            self._keeper.not_sent(f"its process could not be started ({error}).")

    def _hear_process(self) -> None:
        assert self._keeper is not None and self._process is not None
        called_off = self._keeper.state in ("off", "armed")
        if called_off:  # it had not been allowed to send anything, and never will
            self._process.kill()
        else:
            for said in self._process.said():
                self._hear(said)
            if self._keeper.overdue(self._now_s()):
                self._process.kill()
        if called_off or self._process.over:
            self._process.close()
            self._process = None

    def _hear(self, said: Said) -> None:
        assert self._keeper is not None
        if said.step == NOT_SENT:
            self._keeper.not_sent(said.text)
        elif said.step == "gone":
            if said.claimed:
                self._keeper.unknown(said.text)
            else:
                self._keeper.not_sent(f"{said.text}.")
        else:
            self._keeper.remark(f"hold_{said.step}", said.text)

    def _show(self, step: Step) -> None:
        self._tell("run", step.code, step.text)
        if step.loud:
            now = self._now_s()
            self._ringing = (now + RING_EVERY_S, now + RING_FOR_S)
            self._view.alarm(step.text)
        else:
            self._view.say(step.text)

    def _ring(self) -> None:
        now = self._now_s()
        if self._ringing is not None and self.alarm and now >= self._ringing[0]:
            self._view.ring()
            last = self._ringing[1]
            self._ringing = (now + RING_EVERY_S, last) if now < last else None
