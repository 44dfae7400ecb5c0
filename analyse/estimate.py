"""What an estimator says at a field point. Frozen, with nothing shared with its state."""

from __future__ import annotations

from dataclasses import dataclass

from analyse.drude import Transport
from analyse.numbers import Number
from analyse.quick import QuickReading
from analyse.sweeps import Sweep


@dataclass(frozen=True)
class Caution:
    """Something that a person should know now.

    ``code`` is stable; ``text`` says in one sentence what is seen, with its size, what may be
    the cause and what to do. ``touches_answer``: while it is open nothing is called stable.
    """

    code: str
    text: str
    touches_answer: bool = True


@dataclass(frozen=True)
class Measured:
    """A fitted coefficient in its unit with its combined standard uncertainty."""

    value: float
    standard_uncertainty: float


@dataclass(frozen=True)
class Moment:
    """A moment of the ramp."""

    time_s: float
    field_T: float


@dataclass(frozen=True)
class BudgetLine:
    """One source of uncertainty: relative standard uncertainties in the three numbers."""

    source: str
    kind: str
    sheet_density: float
    mobility: float
    scattering_time: float


@dataclass(frozen=True)
class Estimate:
    """All that is known at one field point; None stands for not known yet."""

    time_s: float
    field_T: float | None
    rho_xx_ohm: float | None
    rho_xy_ohm: float | None
    field_points: int
    used: bool
    sheet_density: Number | None
    mobility: Number | None
    scattering_time: Number | None
    rho_0: Measured | None
    hall_slope: Measured | None
    hall_offset_ohm: float | None
    carriers: str
    window_T: tuple[float, float] | None
    quick_density: QuickReading | None
    quick_mobility: QuickReading | None
    transport: Transport | None
    budget: tuple[BudgetLine, ...]
    verdict: str
    waiting_for: tuple[str, ...]
    stable_at: Moment | None
    time_to_target_s: float | None
    field_to_target_T: float | None
    field_to_target_range_T: tuple[float | None, float | None]
    cautions: tuple[Caution, ...]
    sweeps: tuple[Sweep, ...]
