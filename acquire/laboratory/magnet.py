"""The inside of a simulated magnet supply: the field that it makes and what it tells of it."""

from __future__ import annotations

from enum import IntEnum

from acquire.laboratory.field_course import FieldCourse
from acquire.laboratory.lockin import generator_of
from acquire.laboratory.scenario import MAGNET, Magnet


class State(IntEnum):
    """What the supply is doing, by the number that it answers."""

    WAITING = 0
    RAMPING = 1
    AT_TARGET = 2
    HELD = 3


class SimulatedMagnet:
    """A supply whose ramp begins by itself: ``wait_s`` after the start of the laboratory or, if
    it waits for a question, after the first reading of the field."""

    def __init__(self, section: Magnet, seed: int) -> None:
        self.section = section
        rate_T_per_s = section.rate_T_per_min / 60.0
        self.course = FieldCourse(section.path_T, rate_T_per_s, section.wait_s)
        self._generator = generator_of(seed, MAGNET)
        self._asleep = section.waits_for_question
        if self._asleep:
            self.course.hold(0.0)

    def reading_T(self, time_s: float) -> float:
        """One reading of the field, with its noise and its finite resolution."""
        if self._asleep:
            self.go_on(time_s)
        noise = self.section.noise_T * float(self._generator.standard_normal())
        field, step = float(self.course.field_T(time_s)) + noise, self.section.resolution_T
        return round(field / step) * step if step else field

    def hold(self, time_s: float) -> None:
        """Let the field stand where it is; a question does not start it then."""
        self._asleep = False
        self.course.hold(time_s)

    def go_on(self, time_s: float) -> None:
        """Ramp on, or wait on."""
        self._asleep = False
        self.course.go_on(time_s)

    def state(self, time_s: float) -> State:
        """What the supply is doing at a moment."""
        if self.course.is_over(time_s):
            return State.AT_TARGET
        if self.course.held and not self._asleep:
            return State.HELD
        return State.RAMPING if self.course.has_begun(time_s) else State.WAITING
