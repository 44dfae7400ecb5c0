"""Which commands the simulated instruments understand. Numbers are in volts, tesla, degrees.

A lock-in: ``X?``, ``Y?``, ``R?``, or ``XY?`` in one reply, or ``XYS?`` with the status word too;
``STATUS?`` (bit 4: at full scale); ``TIMECONSTANT?``, ``SLOPE?``, ``SENSITIVITY?`` as codes or as
numbers, as the scenario says; ``PHASE?``. The last four without ``?`` and with a code (the phase:
degrees) behind them set it. With a buffer: ``BUFFER?`` for all samples since it was emptied last, as
text or as a definite-length block, ``SAMPLEPERIOD?`` (s).

A magnet supply: ``FIELD?``, ``TARGET?``, ``RATE?`` (T/min), ``STATE?`` (0 waiting, 1 ramping, 2 at
target, 3 held); ``PAUSE`` holds the field, ``RESUME`` goes on.
"""

from __future__ import annotations

import math
from importlib.metadata import PackageNotFoundError, version

from acquire.laboratory.buffer import SimulatedBuffer
from acquire.laboratory.commands import Command, Interpreter, Moment, number, place
from acquire.laboratory.lockin import Shown, SimulatedLockin
from acquire.laboratory.magnet import SimulatedMagnet
from acquire.laboratory.scenario import MAGNET

OVERLOAD_BIT = 4
OVERFLOW = "+9.900000E+37"  # how SCPI writes a number that is none
MOST_POLES = 8
DB_PER_OCTAVE_AND_POLE = 6


def identity(model: str, name: str) -> str:
    """What an instrument answers to ``*IDN?``."""
    try:
        release = version("rampside")
    except PackageNotFoundError:  # the folders alone, not installed
        release = "0"
    return f"RAMPSIDE,SIMULATED {model},{name},{release}"


def lockin_interpreter(lockin: SimulatedLockin) -> Interpreter:
    """Everything that a lock-in understands."""
    commands = {**_outputs(lockin), **_told_settings(lockin), **_set_settings(lockin)}
    if lockin.section.buffer is not None:
        commands = _buffered(commands, SimulatedBuffer(lockin.section.buffer, lockin))
    return Interpreter(identity("LOCK-IN", lockin.section.name), commands)


def magnet_interpreter(magnet: SimulatedMagnet) -> Interpreter:
    """Everything that a magnet supply understands."""
    course = magnet.course

    def field(moment: Moment, text: str) -> str:
        return OVERFLOW if moment.overload else _decimal(magnet.reading_T(moment.time_s))

    return Interpreter(
        identity("MAGNET SUPPLY", MAGNET),
        {
            "FIELD?": field,
            "TARGET?": lambda moment, text: _decimal(course.target_T(moment.time_s)),
            "RATE?": lambda moment, text: _decimal(magnet.section.rate_T_per_min),
            "STATE?": lambda moment, text: str(int(magnet.state(moment.time_s))),
            "PAUSE": lambda moment, text: magnet.hold(moment.time_s),
            "RESUME": lambda moment, text: magnet.go_on(moment.time_s),
        },
    )


def _buffered(commands: dict[str, Command], buffer: SimulatedBuffer) -> dict[str, Command]:
    """The commands, each after the buffer has taken its samples up to then; and its own."""
    own: dict[str, Command] = {
        "BUFFER?": lambda moment, text: buffer.emptied(),
        "SAMPLEPERIOD?": lambda moment, text: buffer.period_text,
    }

    def after_samples(command: Command) -> Command:
        def run(moment: Moment, text: str) -> str | None:
            buffer.advance(moment.time_s)
            return command(moment, text)

        return run

    return {name: after_samples(command) for name, command in {**commands, **own}.items()}


def _outputs(lockin: SimulatedLockin) -> dict[str, Command]:
    def shown(moment: Moment) -> Shown:
        now = lockin.shown(moment.time_s)
        if not moment.overload:
            return now
        full = lockin.sensitivity_V
        return Shown(math.copysign(full, now.x_V), math.copysign(full, now.y_V), True)

    def both(now: Shown) -> str:
        return f"{_volts(now.x_V)},{_volts(now.y_V)}"

    def everything(moment: Moment, text: str) -> str:
        now = shown(moment)
        return f"{both(now)},{_status(now)}"

    return {
        "X?": lambda moment, text: _volts(shown(moment).x_V),
        "Y?": lambda moment, text: _volts(shown(moment).y_V),
        "R?": lambda moment, text: _volts(math.hypot(shown(moment).x_V, shown(moment).y_V)),
        "XY?": lambda moment, text: both(shown(moment)),
        "XYS?": everything,
        "STATUS?": lambda moment, text: str(_status(shown(moment))),
    }


def _told_settings(lockin: SimulatedLockin) -> dict[str, Command]:
    section = lockin.section
    coded = section.answers == "codes"

    def time_constant(moment: Moment, text: str) -> str:
        told = lockin.time_constant_s
        return str(section.time_constants_s.index(told)) if coded else _volts(told)

    def slope(moment: Moment, text: str) -> str:
        return str(lockin.poles - 1 if coded else DB_PER_OCTAVE_AND_POLE * lockin.poles)

    def sensitivity(moment: Moment, text: str) -> str:
        told = lockin.sensitivity_V
        return str(section.sensitivities_V.index(told)) if coded else _volts(told)

    return {
        "TIMECONSTANT?": time_constant,
        "SLOPE?": slope,
        "SENSITIVITY?": sensitivity,
        "PHASE?": lambda moment, text: f"{lockin.reference_deg:+.3f}",
    }


def _set_settings(lockin: SimulatedLockin) -> dict[str, Command]:
    section = lockin.section

    def time_constant(moment: Moment, text: str) -> None:
        told = section.time_constants_s[place(text, len(section.time_constants_s))]
        lockin.set_filter(moment.time_s, told, lockin.poles)

    def slope(moment: Moment, text: str) -> None:
        poles = place(text, MOST_POLES) + 1
        lockin.set_filter(moment.time_s, lockin.time_constant_s, poles)

    def sensitivity(moment: Moment, text: str) -> None:
        code = place(text, len(section.sensitivities_V))
        lockin.sensitivity_V = section.sensitivities_V[code]

    def phase(moment: Moment, text: str) -> None:
        lockin.shown(moment.time_s)  # what was before, with the phase that was
        lockin.reference_deg = number(text)

    return {
        "TIMECONSTANT": time_constant,
        "SLOPE": slope,
        "SENSITIVITY": sensitivity,
        "PHASE": phase,
    }


def _status(now: Shown) -> int:
    return OVERLOAD_BIT if now.overload else 0


def _volts(value: float) -> str:
    return f"{value:+.6E}"


def _decimal(value: float) -> str:
    return f"{value:+.9f}"
