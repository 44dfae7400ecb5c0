"""The decisions about holding the field: numbers in, decisions out."""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from acquire.config import Rig, parse
from acquire.config.hold import HoldSection
from acquire.config.rig import RampSection
from acquire.hold.code import LENGTH, LETTERS, is_code, new_code
from acquire.hold.course import Course
from acquire.hold.keeper import MOST_WRONG_CODES, Keeper, Step
from acquire.hold.standing import Standing

CODE = "QRST"
RATE_T_PER_S = 0.02


def rig(**keys: object) -> Rig:
    """The demo's, with a ramp from 0 to 2 T and back at 1.2 T/min, and this [hold]."""
    found = parse((Path(__file__).parents[1] / "configs" / "demo.toml").read_bytes())
    ramp = RampSection(path_T=(0.0, 2.0, 0.0), rate_T_per_min=60 * RATE_T_PER_S)
    return found.model_copy(update={"ramp": ramp, "hold": section(**keys)})


def section(**keys: object) -> HoldSection:
    """A supply that pauses without a reply; the field has to stand for 2 s within 10 s."""
    plain = {
        "resource": "TCPIP::127.0.0.1::1::SOCKET",
        "write_termination": "\n",
        "read_termination": "\n",
        "identity": {"pattern": "SUPPLY"},
        "command": "PAUSE",
        "stands_within_s": 10.0,
        "standing_for_s": 2.0,
        "standing_T_per_min": 0.05,
    }
    return HoldSection.model_validate({**plain, **keys})


class Run:
    """A keeper and a field that ramps until it is held; 0.1 s a step."""

    def __init__(self, **keys: object) -> None:
        self.keeper = Keeper(rig(**keys), CODE)
        self.now_s, self.field_T, self.rate_T_per_s = 0.0, 0.0, RATE_T_PER_S
        self.happened: list[Step] = []

    def go(self, seconds: float, readings: bool = True) -> Run:
        for _ in range(round(seconds / 0.1)):
            self.now_s += 0.1
            self.field_T += 0.1 * self.rate_T_per_s
            if readings:
                self.keeper.field(self.now_s, self.field_T, self.now_s)
            else:
                self.keeper.look(self.now_s)
        self.happened += self.keeper.steps()
        return self

    def armed(self) -> Run:
        assert self.keeper.arm(CODE, self.now_s).ok
        return self.go(1.0)

    def asked(self) -> Run:
        """Armed, stable, and the process of the command has been allowed."""
        self.armed().keeper.good_enough(self.now_s)
        assert self.keeper.state == "begun"
        assert self.keeper.may_send(self.now_s)
        return self

    @property
    def codes(self) -> list[str]:
        self.happened += self.keeper.steps()
        return [step.code for step in self.happened]

    @property
    def loud(self) -> list[str]:
        self.happened += self.keeper.steps()
        return [step.code for step in self.happened if step.loud]


def test_from_arming_to_a_field_that_is_held() -> None:
    run = Run().asked().go(0.5)
    run.rate_T_per_s = 0.0
    run.go(2.6)
    assert run.keeper.state == "held"
    assert run.codes == ["hold_armed", "hold_begun", "hold_allowed", "hold_held"]
    assert run.loud == []
    run.go(60, readings=False)
    assert run.keeper.state == "held", "what comes later is not its business"


def test_a_supply_that_ignores_it_is_an_alarm_and_nothing_more() -> None:
    run = Run().asked().go(10.2)
    assert run.keeper.state == "alarm"
    assert run.loud == ["hold_not_held"]
    assert "pause the ramp yourself" in run.keeper.told
    run.keeper.good_enough(run.now_s)
    assert not run.keeper.may_send(run.now_s)
    assert not run.keeper.arm(CODE, run.now_s).ok
    assert not run.keeper.hold_now(CODE, run.now_s).ok


def test_a_field_that_stands_too_late_is_told_after_the_alarm() -> None:
    run = Run().asked().go(10.2)
    run.rate_T_per_s = 0.0
    run.go(2.5)
    assert run.codes[-2:] == ["hold_not_held", "hold_stands_late"]
    assert run.keeper.state == "alarm"


def test_no_field_reading_proves_nothing() -> None:
    run = Run().asked().go(11, readings=False)
    assert run.keeper.state == "alarm"


def test_a_field_that_stands_elsewhere_was_not_held() -> None:
    run = Run().asked()
    run.field_T, run.rate_T_per_s = -0.9, 0.0  # a quench
    run.go(3)
    assert run.keeper.state == "alarm"
    assert run.loud == ["hold_elsewhere"]


def test_at_target_already_it_stands_at_once() -> None:
    run = Run().armed()
    run.rate_T_per_s = 0.0
    run.go(5)
    assert run.keeper.hold_now(CODE, run.now_s).ok
    assert run.keeper.may_send(run.now_s)
    run.go(2.5)
    assert run.keeper.state == "held"


def test_a_ramp_that_is_over_has_nothing_to_hold() -> None:
    run = Run().armed()
    run.keeper.ramp_over()
    assert run.keeper.state == "off"
    assert "the ramp is over" in run.keeper.told
    run.keeper.good_enough(run.now_s)
    assert "ramp is over" in run.keeper.arm(CODE, run.now_s).text
    assert run.codes == ["hold_armed", "hold_disarmed"]


def test_nothing_goes_out_that_was_not_armed() -> None:
    run = Run().go(1)
    run.keeper.good_enough(run.now_s)
    assert "Not armed" in run.keeper.hold_now(CODE, run.now_s).text
    assert not run.keeper.may_send(run.now_s)
    assert run.codes == []


def test_the_verdict_counts_from_the_arming_on() -> None:
    run = Run().go(1)
    run.keeper.good_enough(run.now_s)
    run.armed().go(5)
    assert run.keeper.state == "armed", "stable before: only the button, or stable anew"
    run.keeper.good_enough(run.now_s)
    assert run.keeper.state == "begun"


def test_disarmed_at_the_last_moment() -> None:
    run = Run().armed()
    run.keeper.good_enough(run.now_s)
    assert run.keeper.disarm().ok
    assert not run.keeper.may_send(run.now_s)
    assert run.codes == ["hold_armed", "hold_begun", "hold_disarmed"]
    again = Run().asked()
    assert "Too late" in again.keeper.disarm().text
    assert again.keeper.state == "checking"


def test_stable_no_more_before_it_was_sent() -> None:
    run = Run().armed()
    run.keeper.good_enough(run.now_s)
    run.keeper.not_good_enough()
    assert run.keeper.state == "armed" and not run.keeper.may_send(run.now_s)
    run.keeper.good_enough(run.now_s)
    assert run.keeper.may_send(run.now_s)
    run.keeper.not_good_enough()
    assert run.keeper.state == "checking"
    asked = Run().armed()
    assert asked.keeper.hold_now(CODE, asked.now_s).ok
    asked.keeper.not_good_enough()
    assert asked.keeper.state == "begun", "a person wants it all the same"


def test_it_may_go_out_once() -> None:
    run = Run().asked()
    assert not run.keeper.may_send(run.now_s)
    run.keeper.good_enough(run.now_s)
    run.keeper.good_enough(run.now_s)
    assert run.keeper.state == "checking"


@pytest.mark.parametrize("typed", [None, "", "QRS", "QRSTU", "ABCD", 7, ["QRST"], "QR\u00df\u00df", "\0"])
def test_a_wrong_code_does_nothing(typed: object) -> None:
    run = Run()
    assert not run.keeper.arm(typed, 0.0).ok
    run.armed()
    assert not run.keeper.hold_now(typed, run.now_s).ok
    assert run.keeper.state == "armed"


def test_wrong_codes_again_and_again_disarm_and_lock() -> None:
    run = Run().armed()
    for _ in range(MOST_WRONG_CODES):
        assert not run.keeper.hold_now("ABCD", run.now_s).ok
    assert run.keeper.state == "off"
    assert "any more" in run.keeper.arm(CODE, run.now_s).text
    assert run.codes.count("hold_wrong_code") == MOST_WRONG_CODES
    assert run.loud == ["hold_disarmed"]


def test_it_is_not_armed_while_something_is_wrong() -> None:
    run = Run()
    assert "reader magnet not ready" in run.keeper.arm(CODE, 0.0, "reader magnet not ready").text
    assert run.keeper.state == "off"


def _silent(run: Run) -> None:
    run.go(3.5, readings=False)


def _stood_still(run: Run) -> None:
    run.now_s += 11
    run.keeper.good_enough(run.now_s)


def _process(run: Run) -> None:
    run.keeper.unexpected("estimator was killed by signal 9")


def _turned(run: Run) -> None:
    run.go(10)
    run.rate_T_per_s = -0.1
    run.go(2)


def _quenched(run: Run) -> None:
    run.go(30)
    run.field_T = 0.0
    run.go(0.4)


def _beyond(run: Run) -> None:
    run.field_T = 1.9
    run.go(8)


@pytest.mark.parametrize(
    ("happens", "words"),
    [
        (_silent, "no usable field reading for"),
        (_stood_still, "stood still for 11 s"),
        (_process, "estimator was killed"),
        (_turned, "turned round at 0.2"),
        (_quenched, "turned round at 0.6"),
        (_beyond, "outside of the planned 0 to 2 T"),
    ],
)
@pytest.mark.parametrize("begun", [False, True])
def test_anything_unexpected_disarms(
    happens: Callable[[Run], None], words: str, begun: bool
) -> None:
    run = Run().armed()
    if begun:
        assert run.keeper.hold_now(CODE, run.now_s).ok
    happens(run)
    assert run.keeper.state == "off"
    assert words in run.keeper.told and "nothing was sent" in run.keeper.told
    assert run.loud == ["hold_disarmed"]
    assert not run.keeper.may_send(run.now_s)


def test_after_it_was_disarmed_it_can_be_armed_again() -> None:
    run = Run().armed()
    _silent(run)
    run.go(1).asked()
    assert run.keeper.state == "checking"


def test_the_first_field_reading_may_take_its_time_but_not_for_ever() -> None:
    run = Run()
    assert run.keeper.arm(CODE, 0.0).ok
    assert run.go(59, readings=False).keeper.state == "armed"
    assert run.go(2, readings=False).keeper.state == "off"


def test_the_command_was_not_sent() -> None:
    run = Run().armed()
    run.keeper.good_enough(run.now_s)
    run.keeper.not_sent("nobody is there.")
    assert run.keeper.state == "alarm"
    assert run.loud == ["hold_not_sent"]
    assert not run.keeper.may_send(run.now_s)
    run.rate_T_per_s = 0.0
    assert "hold_stands_late" not in run.go(5).codes, "nothing was sent, nothing is proven"


def test_it_is_not_known_whether_it_was_sent() -> None:
    run = Run().asked()
    run.keeper.unknown("signal 9 killed it")
    assert run.loud == ["hold_unknown"]
    assert run.keeper.state == "checking"
    run.rate_T_per_s = 0.0
    assert run.go(3).keeper.state == "held", "the field decides"


def test_a_process_that_hangs_is_overdue() -> None:
    run = Run().armed()
    assert not run.keeper.overdue(1e9)
    run.keeper.good_enough(run.now_s)
    assert not run.keeper.overdue(run.now_s + 20)
    assert run.keeper.overdue(run.now_s + 30)


# The field stands.


def standing(fields: Callable[[float], float], seconds: float, **keys: object) -> bool:
    found = Standing(section(**keys))
    for index in range(round(seconds / 0.1) + 1):
        found.add(0.1 * index, fields(0.1 * index))
    return found.stands


def test_a_field_at_rest_stands_and_one_that_creeps_does_not() -> None:
    chance = random.Random(1)
    assert standing(lambda t: 1.0 + chance.gauss(0, 2e-5), 2.5)
    assert not standing(lambda t: 1.0 + 0.06 / 60 * t, 2.5)
    assert standing(lambda t: 1.0 + 0.04 / 60 * t, 2.5)
    assert not standing(lambda t: 1.0, 1.5), "not for long enough"


@pytest.mark.parametrize("at_s", [0.2, 0.5, 1.0, 1.5, 1.8])
def test_a_field_that_turns_round_does_not_stand(at_s: float) -> None:
    assert not standing(lambda t: 1.0 - 0.02 * abs(t - 0.5 - at_s), 2.5)


def test_standing_by_how_close_the_readings_lie() -> None:
    keys = {"standing_T_per_min": None, "standing_T": 1e-3}
    assert standing(lambda t: 1.0 + 4e-4 * math.sin(9 * t), 2.5, **keys)
    assert not standing(lambda t: 1.0 + 6e-4 * math.sin(9 * t), 2.5, **keys)


def test_few_readings_prove_nothing() -> None:
    found = Standing(section())
    for index in range(5):
        found.add(0.5 * index, 1.0)
    assert not found.stands
    found.add(0.5 * 4, 1.0)  # the same moment again is no other reading
    assert not found.stands


@settings(derandomize=True, deadline=None, max_examples=200)
@given(
    rate=st.floats(0.11, 1e3),
    noise=st.floats(0, 1e-5),
    period=st.floats(0.02, 0.3),
    turn=st.floats(-5, 15),
    seed=st.integers(0, 1000),
)
def test_a_ramp_at_more_than_twice_the_limit_never_stands(
    rate: float, noise: float, period: float, turn: float, seed: int
) -> None:
    """Wherever it turns round, if it does."""
    chance, found = random.Random(seed), Standing(section())
    for index in range(round(10 / period)):
        time_s = index * period
        found.add(time_s, 1 - rate / 60 * abs(time_s - turn) + chance.gauss(0, noise))
        assert not found.stands


# The planned course.


def course(*fields: float) -> list[str]:
    """What a ramp from 0 to 2 T and back to 0 T has to say of these."""
    found = Course((0.0, 2.0, 0.0))
    return [problem for field in fields if (problem := found.add(field)) is not None]


def ramp(*corners: float) -> list[float]:
    """Readings every 5 mT along these fields, with noise."""
    chance = random.Random(3)
    fields = []
    for a, b in pairwise(corners):
        count = max(1, round(abs(b - a) / 5e-3))
        fields += [a + (b - a) * i / count + chance.gauss(0, 1e-3) for i in range(count)]
    return fields


@pytest.mark.parametrize(
    "corners", [(0, 2, 0), (-1, 2, 0), (1, 0, 2, 0), (5, 0, 2, 0.5), (0, 1.95, 0), (0, 1, 1, 2)]
)
def test_a_planned_course_is_not_remarked(corners: tuple[float, ...]) -> None:
    assert course(*ramp(*corners)) == []


@pytest.mark.parametrize(
    ("corners", "words"),
    [
        ((0, 1, 0), "turned round at 0.99"),
        ((0, 2, 1, 2), "turned round at 1.0"),
        ((0, 2, 2.1), "outside"),
        ((0, 2, -0.1), "outside"),
    ],
)
def test_another_course_is(corners: tuple[float, ...], words: str) -> None:
    assert words in course(*ramp(*corners))[0]


def test_one_wild_reading_is_nothing() -> None:
    fields = ramp(0, 1)
    fields[100] = 37.0
    fields[150] = -37.0
    assert course(*fields) == []


# The code.


def test_codes_differ_from_run_to_run_and_are_easy_to_type() -> None:
    codes = {new_code() for _ in range(200)}
    assert len(codes) > 190
    assert all(len(code) == LENGTH and set(code) <= set(LETTERS) for code in codes)
    assert is_code(" qrst ", CODE)
