"""All instruments of a scenario, each wired to the sample: lines in, replies out, no sockets.

Beside its own commands each instrument takes some that no real one has, for whoever runs the
simulation. They are always heard and answered at once, whatever misbehaviour acts:

=================================  ===========================================================
``SIMULATE:BEGIN delay,replies=3`` misbehave from now on; the keys are those of the scenario,
                                   ``instrument`` is the one that is told if it is not given
``SIMULATE:END`` (or with a name)  behave again
``SIMULATE:STATE?``                what acts now, ``none`` if nothing does
``SIMULATE:TIME?``                 seconds since the laboratory's start
``SIMULATE:FIELD?``                the field at the sample, in tesla
``SIMULATE:HEARD? PAUSE``          how often this line has come, carried out or not
=================================  ===========================================================
"""

from __future__ import annotations

import zlib
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from pydantic import ValidationError

from acquire.laboratory.commands import CommandError, Interpreter, Moment, asks
from acquire.laboratory.faults import Faults, Piece, Treatment
from acquire.laboratory.hall_bar import HallBar
from acquire.laboratory.instruments import lockin_interpreter, magnet_interpreter
from acquire.laboratory.lockin import SimulatedLockin
from acquire.laboratory.magnet import SimulatedMagnet
from acquire.laboratory.scenario import MAGNET, Lockin, Misbehaviour, Scenario

Numbers = NDArray[np.float64]

CONTROL = "SIMULATE:"


@dataclass(frozen=True)
class Outcome:
    """What follows from a line: pieces of a reply, or that the connection is to be cut."""

    pieces: tuple[Piece, ...] = ()
    cut: bool = False


@dataclass(frozen=True)
class Place:
    """One instrument at its place: what it understands, how it misbehaves, how its lines end, and
    how often each line came."""

    interpreter: Interpreter
    faults: Faults
    line_end: bytes
    port: int
    heard: Counter[str] = field(default_factory=Counter)


class Bench:
    """The laboratory without its sockets. Times are in seconds since its start and never run
    backwards. ``note`` hears of each reply: instrument, question, reply, time, what becomes of it.
    """

    def __init__(
        self,
        scenario: Scenario,
        note: Callable[[str, str, str, float, Treatment], None] = lambda *reply: None,
    ) -> None:
        self.scenario = scenario
        self._note = note
        self.hall_bar = HallBar(scenario.sample)
        self.magnet = SimulatedMagnet(scenario.magnet, scenario.seed)
        self.lockins = {
            section.name: SimulatedLockin(section, self._signal(section), scenario.seed)
            for section in scenario.lockins
        }
        self.places = self._places()
        for misbehaviour in scenario.misbehaviours:
            self.places[misbehaviour.instrument].faults.begin(misbehaviour, 0.0)

    def sample_field_T(self, time_s: Numbers | float) -> Numbers:
        """The field at the sample: what the supply makes, and what is left in the magnet."""
        return self.magnet.course.field_T(time_s) + self.scenario.magnet.remanent_T

    def hear(self, name: str, line: str, time_s: float) -> Outcome:
        """What follows from a line that an instrument gets."""
        place = self.places[name]
        if line.strip().upper().startswith(CONTROL):
            return self._sent(place, self._control(name, line.strip(), time_s))
        place.heard[line.strip().upper()] += 1
        treatment = place.faults.treatment(time_s, asks(line))
        if not treatment.hears:
            return Outcome()
        moment = Moment(time_s, treatment.overload)
        reply = place.interpreter.answer(line, moment, treatment.obeys)
        if reply is not None:
            self._note(name, line, reply, time_s, treatment)
        if treatment.cut:
            return Outcome(cut=True)
        if reply is None:
            return Outcome()
        return Outcome(treatment.pieces(reply.encode("latin-1") + place.line_end))

    def is_off(self, name: str, time_s: float) -> bool:
        """Whether an instrument takes no connections."""
        return self.places[name].faults.is_off(time_s)

    def _signal(self, section: Lockin) -> Callable[[Numbers], Numbers]:
        bar, current = self.hall_bar, self.scenario.current_A
        resistance = bar.longitudinal_ohm if section.measures == "longitudinal" else bar.hall_ohm
        return lambda times_s: np.asarray(current * resistance(self.sample_field_T(times_s)))

    def _places(self) -> dict[str, Place]:
        sections = {section.name: section for section in self.scenario.lockins}
        interpreters = {
            name: lockin_interpreter(lockin) for name, lockin in self.lockins.items()
        } | {MAGNET: magnet_interpreter(self.magnet)}
        return {
            name: Place(
                interpreter,
                Faults(self.scenario.seed + zlib.crc32(name.encode())),
                sections.get(name, self.scenario.magnet).line_end.encode(),
                sections.get(name, self.scenario.magnet).port,
            )
            for name, interpreter in interpreters.items()
        }

    def _sent(self, place: Place, reply: str) -> Outcome:
        return Outcome((Piece(0.0, reply.encode("latin-1", "replace") + place.line_end),))

    def _control(self, name: str, line: str, time_s: float) -> str:
        word, _, rest = line[len(CONTROL) :].partition(" ")
        try:
            match word.upper():
                case "BEGIN":
                    return self._begin(name, rest, time_s)
                case "END":
                    return self._end(rest.strip() or name)
                case "STATE?":
                    return ",".join(self.places[name].faults.acting(time_s)) or "none"
                case "TIME?":
                    return f"{time_s:.6f}"
                case "FIELD?":
                    return f"{float(self.sample_field_T(time_s)):+.9f}"
                case "HEARD?":
                    return str(self.places[name].heard[rest.strip().upper()])
            raise CommandError(-113, "Undefined header")
        except CommandError as error:
            return f"ERROR {error}"

    def _begin(self, name: str, text: str, time_s: float) -> str:
        misbehaviour = parse_misbehaviour(text, name)
        if misbehaviour.instrument not in self.places:
            raise CommandError(-224, f"No instrument {misbehaviour.instrument}")
        self.places[misbehaviour.instrument].faults.begin(misbehaviour, time_s)
        return "OK"

    def _end(self, name: str) -> str:
        if name not in self.places:
            raise CommandError(-224, f"No instrument {name}")
        self.places[name].faults.end()
        return "OK"


def parse_misbehaviour(text: str, instrument: str) -> Misbehaviour:
    """``delay,replies=3,delay_s=0.2`` as a part of a scenario. Raises CommandError."""
    what, *rest = (part.strip() for part in text.split(","))
    keys: dict[str, object] = {"what": what.lower(), "instrument": instrument}
    for part in rest:
        key, _, value = (side.strip() for side in part.partition("="))
        keys[key] = _value(value)
    try:
        return Misbehaviour.model_validate(keys)
    except ValidationError as error:
        first = error.errors()[0]
        place = ".".join(str(part) for part in first["loc"]) or "misbehaviour"
        raise CommandError(-224, f"{place}: {first['msg']}") from None


def _value(text: str) -> object:
    for kind in (int, float):
        try:
            return kind(text)
        except ValueError:
            continue
    return text
