"""What the simulated laboratory contains; the ``[laboratory]`` part of a configuration."""

from __future__ import annotations

from collections import Counter
from itertools import pairwise
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from acquire.config.sections import Name, NotNegative, Positive, Section, Several

MAGNET = "magnet"
"""The magnet supply's name; lock-ins have names of their own."""

Port = Annotated[int, Field(ge=0, le=65535)]
LineEnd = Literal["\n", "\r\n"]
What = Literal[
    "delay", "split", "drop", "garble", "duplicate", "overload", "disconnect", "silence",
    "ignore", "off",
]


class Sample(Section):
    """The Hall bar: Drude transport, oscillations, contacts that are not quite opposite.

    ``misalignment_squares``: by how many squares the Hall contacts are shifted along the bar;
    so much of the longitudinal resistivity is in the Hall voltage.
    ``degeneracy``: spin times valley degeneracy, which sets the oscillations' period.
    """

    sheet_density_per_m2: Positive
    mobility_m2_per_V_s: Positive
    carriers: Literal["electrons", "holes"] = "electrons"
    effective_mass: Positive = 0.067
    degeneracy: Annotated[int, Field(ge=1, le=12)] = 2
    quantum_lifetime_s: Positive = 1e-12
    temperature_K: Positive = 1.5
    squares: Positive = 4.0
    misalignment_squares: float = 0.0


class Magnet(Section):
    """A magnet supply that ramps along ``path_T``, beginning ``wait_s`` after the start, or, if it
    ``waits_for_question``, after it was first asked for the field: so nothing of the ramp is missed
    by readers that take long to start.

    The sample's field is the supply's own plus ``remanent_T``. What the supply tells of its own
    is rounded to ``resolution_T`` and has white noise of ``noise_T`` (standard deviation).
    """

    port: Port = 0
    line_end: LineEnd = "\n"
    path_T: Several[float]
    rate_T_per_min: Positive
    wait_s: NotNegative = 3.0
    waits_for_question: bool = False
    remanent_T: float = 0.0
    noise_T: NotNegative = 0.0
    resolution_T: NotNegative = 1e-6

    @field_validator("path_T")
    @classmethod
    def _moves(cls, path: tuple[float, ...]) -> tuple[float, ...]:
        if len(path) < 2 or any(a == b for a, b in pairwise(path)):
            raise ValueError("needs at least two fields, and no two equal ones in a row")
        return path


class Buffer(Section):
    """A lock-in's buffer: a sample (X, Y, status word, and its number if there is a ``counter``)
    every ``sample_period_s``, by a clock that is off by the share ``clock_error``. ``when_full``:
    whether the oldest samples are dropped then, or no more are taken until it has been emptied.
    """

    sample_period_s: Positive
    capacity: Annotated[int, Field(ge=1, le=100_000)] = 10_000
    when_full: Literal["drops_oldest", "stops"] = "drops_oldest"
    format: Literal["text", "float32", "float64"] = "float32"
    byte_order: Literal["little", "big"] = "big"
    counter: bool = False
    clock_error: Annotated[float, Field(gt=-0.1, lt=0.1)] = 0.0


class Lockin(Section):
    """A lock-in on one pair of contacts: white noise and signal through equal RC stages.

    ``phase_deg``: by how much the signal leads the reference. ``answers``: whether it tells time
    constant, slope and range as codes (places in the three tables, counted from 0; the slope's
    code is the number of stages less 1) or as numbers (seconds, dB per octave, volts).
    """

    name: Name
    port: Port = 0
    line_end: LineEnd = "\n"
    measures: Literal["longitudinal", "hall"]
    answers: Literal["codes", "numbers"] = "codes"
    time_constant_s: Positive = 0.3
    time_constants_s: Several[Positive] = (0.001, 0.003, 0.01, 0.03, 0.1, 0.3, 1.0, 3.0, 10.0, 30.0)
    poles: Annotated[int, Field(ge=1, le=8)] = 4
    noise_V_per_rtHz: NotNegative = 1e-9
    phase_deg: float = 0.0
    buffer: Buffer | None = None
    sensitivity_V: Positive = 1.0
    sensitivities_V: Several[Positive] = (
        1e-7, 3e-7, 1e-6, 3e-6, 1e-5, 3e-5, 1e-4, 3e-4, 1e-3, 3e-3, 0.01, 0.03, 0.1, 0.3, 1.0,
    )  # fmt: skip

    @model_validator(mode="after")
    def _possible(self) -> Lockin:
        if self.name == MAGNET:
            raise ValueError(f"name {MAGNET!r} is the magnet supply's")
        if self.time_constant_s not in self.time_constants_s:
            raise ValueError(f"time_constant_s must be one of {list(self.time_constants_s)}")
        if self.sensitivity_V not in self.sensitivities_V:
            raise ValueError(f"sensitivity_V must be one of {list(self.sensitivities_V)}")
        return self


class Misbehaviour(Section):
    """Something that an instrument is to do wrong. It ends after ``lasts_s`` or ``replies``,
    whichever is first; never if neither is given.

    ========== ===========================================================================
    delay      the reply comes ``delay_s`` late
    split      half the reply at once, the rest ``delay_s`` later
    drop       the command is carried out, its reply is lost
    garble     some bytes of the reply are others, one at least not ASCII
    duplicate  the reply comes twice, the second time ``delay_s`` later
    overload   a lock-in stands at full scale with its overload bit set, the supply reads 9.9e37
    disconnect the connection is cut in place of a reply
    silence    nothing is heard: no command is carried out, no question answered
    ignore     questions are answered, other commands are not carried out
    off        all connections are cut and new ones refused, as if it had no power
    ========== ===========================================================================

    ``probability``: how likely each reply is to be hit, drawn with ``seed`` (the scenario's where
    it is not given). ``off`` is not about replies: it has neither ``replies`` nor ``probability``.
    """

    instrument: Name
    what: What
    from_s: NotNegative = 0.0
    lasts_s: Positive | None = None
    replies: Annotated[int, Field(ge=1)] | None = None
    delay_s: Positive = 0.5
    probability: Annotated[float, Field(gt=0, le=1)] = 1.0
    seed: Annotated[int, Field(ge=0)] | None = None

    @model_validator(mode="after")
    def _off_by_time(self) -> Misbehaviour:
        if self.what == "off" and (self.replies is not None or self.probability != 1):
            raise ValueError('"off" is not about replies: give lasts_s, not replies or probability')
        return self


class Scenario(Section):
    """A whole laboratory. The same ``seed`` gives the same noise for the same steps of time."""

    seed: Annotated[int, Field(ge=0)] = 1
    current_A: Positive
    sample: Sample
    magnet: Magnet
    lockins: Several[Lockin]
    misbehaviours: Several[Misbehaviour] = ()

    @property
    def instruments(self) -> tuple[str, ...]:
        """Names of all instruments, the lock-ins first."""
        return (*(lockin.name for lockin in self.lockins), MAGNET)

    @model_validator(mode="after")
    def _names(self) -> Scenario:
        twice = [name for name, count in Counter(self.instruments).items() if count > 1]
        if twice:
            raise ValueError(f"lockins: name given twice: {', '.join(twice)}")
        ports = Counter(port for port in self._ports() if port)
        taken = [str(port) for port, count in ports.items() if count > 1]
        if taken:
            raise ValueError(f"port given twice: {', '.join(taken)}")
        for misbehaviour in self.misbehaviours:
            if misbehaviour.instrument not in self.instruments:
                known = ", ".join(self.instruments)
                raise ValueError(
                    f"misbehaviours: no instrument is called {misbehaviour.instrument!r}; "
                    f"there are {known}"
                )
        return self

    def _ports(self) -> tuple[int, ...]:
        return (self.magnet.port, *(lockin.port for lockin in self.lockins))
