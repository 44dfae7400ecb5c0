"""Who decides about holding the field. Numbers in, decisions out: it knows no clock and no process.

    off ──arm──> armed ──stable or a person──> begun ──may_send──> checking ──> held or alarm
     ^             │                             │
     └─────────────┴──anything unexpected────────┘

Until :meth:`Keeper.may_send` has said yes, nothing can have been sent and all can be taken back;
after it nothing can, and nothing is ever tried again in this run. ``now_s`` is the time of a clock
that never runs backwards, in seconds, and the same for all methods.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from acquire.config import Rig
from acquire.hold.code import is_code
from acquire.hold.course import Course
from acquire.hold.standing import Standing

State = Literal["off", "armed", "begun", "checking", "held", "alarm"]

MOST_WRONG_CODES = 3
STOOD_STILL_S = 10.0  # so long between two looks, and the watch was not there
LEAST_SILENCE_S, SILENT_PERIODS = 3.0, 5.0  # without a usable field reading
FIRST_FIELD_S = 60.0  # how long the first field reading may take after arming
START_S = 20.0  # for the process of the command to be there, beside its waiting for the supply


@dataclass(frozen=True)
class Step:
    """Something that happened, for events and terminal. ``loud``: a person must hear of it."""

    code: str
    text: str
    loud: bool = False


@dataclass(frozen=True)
class Answer:
    """What a person is told who asked for something."""

    ok: bool
    text: str


class Keeper:
    """One run's decisions.

    Parameters
    ----------
    rig
        With a [hold], and so with a [ramp] and readers.
    code
        The run's code.
    """

    def __init__(self, rig: Rig, code: str) -> None:
        self.state: State = "off"
        self.told = "Not armed: nothing will be sent to the magnet supply."
        assert rig.hold is not None and rig.ramp is not None
        self._section, self._path_T, self._code = rig.hold, rig.ramp.path_T, code
        period_s = rig.reader(rig.field.reader).period_s
        self._silence_s = max(LEAST_SILENCE_S, SILENT_PERIODS * period_s)
        self._travel_T = 2 * rig.ramp.rate_T_per_min / 60 * self._section.stands_within_s
        self._steps: list[Step] = []
        self._course = Course(self._path_T)
        self._standing: Standing | None = None
        self._wrong_codes = 0
        self._looked_s: float | None = None
        self._armed_s = self._begun_s = self._field_s = float("-inf")
        self._deadline_s = float("inf")
        self._field_T: float | None = None
        self._asked_at_T: float | None = None
        self._ramp_is_over = self._for_stable = False

    def steps(self) -> list[Step]:
        """What happened since this was called last."""
        steps, self._steps = self._steps, []
        return steps

    # What people ask for.

    def arm(self, typed: object, now_s: float, trouble: str = "") -> Answer:
        """Arm it for this run. ``trouble``: what is not as it should be; it is not armed then."""
        if (refusal := self._refusal(typed)) is not None:
            return refusal
        if self.state != "off":
            return Answer(False, self._why_not_again())
        if self._ramp_is_over:
            return Answer(False, "Not armed: the ramp is over, there is nothing to hold.")
        if trouble:
            return Answer(False, f"Not armed: {trouble}. Mend that, then arm again.")
        self._course = Course(self._path_T)
        self._armed_s = self._looked_s = now_s
        self._go("armed", "hold_armed", "Armed: on stable, or on the button \"hold now\", the "
                 "magnet supply is asked once to hold the field.")  # fmt: skip
        return Answer(True, self.told)

    def disarm(self) -> Answer:
        """Take it back, as long as that can be done. Needs no code: it is the safe direction."""
        if self.state in ("armed", "begun"):
            self._off("disarmed by a person")
            return Answer(True, self.told)
        if self.state == "off":
            return Answer(True, "It was not armed.")
        return Answer(False, "Too late: the command has gone out, or may have.")

    def hold_now(self, typed: object, now_s: float) -> Answer:
        """Send the command now, which needs it to be armed."""
        if (refusal := self._refusal(typed)) is not None:
            return refusal
        self.look(now_s)
        if self.state == "off":
            return Answer(False, "Not armed: arm it first. Nothing was sent.")
        if self.state != "armed":
            return Answer(False, self._why_not_again())
        self._begin(now_s, "a person asked for it")
        return Answer(True, self.told)

    # What the run tells.

    def good_enough(self, now_s: float) -> None:
        """All Hall bars have become stable."""
        self.look(now_s)
        if self.state == "armed":
            self._begin(now_s, "the answer is stable", for_stable=True)

    def not_good_enough(self) -> None:
        """They are stable no more."""
        if self.state == "begun" and self._for_stable:
            self._go("armed", "hold_waits", "The answer is stable no more: nothing was sent, and it "
                     "stays armed.")  # fmt: skip

    def ramp_over(self) -> None:
        """The field has come to rest at the end of the planned ramp."""
        self._ramp_is_over = True
        if self.state in ("armed", "begun"):
            self._off("the ramp is over, there is nothing to hold")

    def unexpected(self, what: str) -> None:
        """Something happened that does not belong to a ramp in good order."""
        if self.state in ("armed", "begun"):
            self._off(what, loud=True)

    def field(self, time_s: float, field_T: float, now_s: float) -> None:
        """A usable field reading of that time has come now."""
        self.look(now_s)
        self._field_s, self._field_T = now_s, field_T
        if self.state in ("armed", "begun"):
            if (problem := self._course.add(field_T)) is not None:
                self.unexpected(problem)
        elif self._standing is not None and self.state != "held":
            self._standing.add(time_s, field_T)
            if self._standing.stands:
                self._stands()

    def look(self, now_s: float) -> None:
        """Time passes."""
        before_s, self._looked_s = self._looked_s, now_s
        if self.state in ("armed", "begun"):
            if before_s is not None and now_s - before_s > STOOD_STILL_S:
                self.unexpected(f"the watch itself stood still for {now_s - before_s:.0f} s")
            elif (silent := self._silent(now_s)) is not None:
                self.unexpected(silent)
        if self.state == "checking" and now_s > self._deadline_s:
            self._alarm(
                "hold_not_held",
                f"THE FIELD IS NOT HELD: {self._section.stands_within_s:g} s after the command the "
                f"field readings don't show that it stands{self._where()}. Nothing more is tried: "
                "pause the ramp yourself.",
            )

    # What the process of the command tells.

    def may_send(self, now_s: float) -> bool:
        """Whether the command may go out now. True at most once; it counts as sent then."""
        self.look(now_s)
        if self.state != "begun":
            return False
        self._standing = Standing(self._section)
        self._deadline_s = now_s + self._section.stands_within_s
        self._asked_at_T = self._field_T
        self._go("checking", "hold_allowed", f"The command may go out now{self._where()}.")
        return True

    def remark(self, code: str, text: str) -> None:
        """It tells how it gets on."""
        self._note(code, text)

    def not_sent(self, why: str) -> None:
        """It says that nothing was sent, and has given up."""
        if self.state in ("begun", "checking"):
            self._standing = None
            self._alarm("hold_not_sent", f"THE COMMAND WAS NOT SENT: {why} Nothing more is tried: "
                        "pause the ramp yourself.")  # fmt: skip

    def unknown(self, why: str) -> None:
        """It has gone in the midst of it."""
        if self.state in ("checking", "held"):
            self._note("hold_unknown", f"It is not known whether the command was sent: {why}. It "
                       "is not sent again; the field readings decide.", loud=True)  # fmt: skip

    def overdue(self, now_s: float) -> bool:
        """Whether the process of the command has taken longer than it can need."""
        waits_s = 4 * self._section.timeout_ms / 1000  # opening, identity, command, identity
        return self._begun_s > float("-inf") and now_s - self._begun_s > START_S + waits_s

    # Inside.

    def _refusal(self, typed: object) -> Answer | None:
        if self._wrong_codes >= MOST_WRONG_CODES:
            return Answer(False, f"Refused: a wrong code was typed {MOST_WRONG_CODES} times, so "
                          "nothing can be armed in this run any more.")  # fmt: skip
        if is_code(typed, self._code):
            return None
        if not typed:
            return Answer(False, "Refused: type the run's code, which its terminal shows.")
        self._wrong_codes += 1
        self._note("hold_wrong_code", "A wrong code was typed; nothing was done.")
        if self._wrong_codes >= MOST_WRONG_CODES:
            self.unexpected(f"a wrong code was typed {MOST_WRONG_CODES} times")
        return Answer(False, "Refused: this is not the code of this run; its terminal shows it.")

    def _why_not_again(self) -> str:
        if self.state == "armed":
            return "It is armed already."
        return "The command has gone out in this run, or was tried; it goes out once."

    def _silent(self, now_s: float) -> str | None:
        if self._field_s == float("-inf"):
            late = now_s - self._armed_s > FIRST_FIELD_S
            return f"no field reading came within {FIRST_FIELD_S:g} s" if late else None
        since_s = now_s - max(self._field_s, self._armed_s)
        return f"no usable field reading for {since_s:.1f} s" if since_s > self._silence_s else None

    def _begin(self, now_s: float, why: str, for_stable: bool = False) -> None:
        self._begun_s, self._for_stable = now_s, for_stable
        self._go("begun", "hold_begun", f"About to ask the magnet supply to hold the field: {why}.")

    def _stands(self) -> None:
        assert self._standing is not None
        field_T = self._standing.field_T
        assert field_T is not None
        if self.state == "alarm":
            self._standing = None
            self._note("hold_stands_late", f"The field stands now, at {field_T:+.4f} T.")
        elif self._asked_at_T is not None and abs(field_T - self._asked_at_T) > self._reach_T:
            self._alarm(
                "hold_elsewhere",
                f"THE FIELD STANDS ELSEWHERE: at {field_T:+.4f} T; the supply was asked to hold it "
                f"at {self._asked_at_T:+.4f} T. Look at the magnet.",
            )
            self._standing = None
        else:
            self._go("held", "hold_held", f"The field is held: it stands at {field_T:+.4f} T.")

    @property
    def _reach_T(self) -> float:
        return self._travel_T + self._course.close_T

    def _where(self) -> str:
        return "" if self._field_T is None else f" at {self._field_T:+.4f} T"

    def _off(self, why: str, loud: bool = False) -> None:
        end = "" if why.endswith((".", "?")) else "."
        self._go("off", "hold_disarmed", f"Disarmed, and nothing was sent: {why}{end}", loud)

    def _alarm(self, code: str, text: str) -> None:
        self._go("alarm", code, text, loud=True)

    def _go(self, state: State, code: str, text: str, loud: bool = False) -> None:
        self.state, self.told = state, text
        self._note(code, text, loud)

    def _note(self, code: str, text: str, loud: bool = False) -> None:
        self._steps.append(Step(code, text, loud))
