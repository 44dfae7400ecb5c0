"""The whole configuration: one TOML file, one frozen object."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated

from pydantic import Field, field_validator, model_validator

from acquire.config.hall_bar import HallBarSection
from acquire.config.hold import HoldSection
from acquire.config.keys import KeysSection
from acquire.config.reader import ReaderSection
from acquire.config.sections import Name, NotNegative, Positive, Section, Several, Share
from acquire.config.table import TableSection
from acquire.laboratory.scenario import Scenario


class RunSection(Section):
    """Where runs go and what they are called."""

    title: Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,39}$")]
    folder: Annotated[str, Field(min_length=1)] = "runs"
    sample: str = ""
    operator: str = ""
    note: str = ""


class RampSection(Section):
    """The planned ramp: the fields it passes, in order, and its rate. Only ever read, never sent."""

    path_T: Several[float]
    rate_T_per_min: Positive

    @field_validator("path_T")
    @classmethod
    def _moves(cls, path: tuple[float, ...]) -> tuple[float, ...]:
        if len(path) < 2 or any(a == b for a, b in pairwise(path)):
            raise ValueError("needs at least two fields, and no two equal ones in a row")
        return path

    @property
    def duration_s(self) -> float:
        """Time the planned ramp takes, in seconds."""
        travel = sum(abs(b - a) for a, b in zip(self.path_T, self.path_T[1:]))
        return travel / self.rate_T_per_min * 60.0


class TargetSection(Section):
    """How good the answer must be: relative half-widths of the intervals.

    ``past_equal_resistivities``: nothing is called stable before the ramp has passed the field
    where rho_xx = rho_xy; a second kind of carrier may hide below it.
    """

    confidence: Annotated[float, Field(ge=0.5, lt=1)] = 0.95
    sheet_density_relative: Share = 0.01
    mobility_relative: Share = 0.01
    scattering_time_relative: Share | None = None
    past_equal_resistivities: bool = True


class WindowSection(Section):
    """The field window of the fit, as magnitudes of field; what is not given is found."""

    low_T: NotNegative | None = None
    high_T: Positive | None = None

    @model_validator(mode="after")
    def _order(self) -> WindowSection:
        if self.high_T is not None and (self.low_T or 0.0) >= self.high_T:
            raise ValueError("low_T must be below high_T")
        return self


class FieldSection(Section):
    """Where the field comes from, and what is known of its truth.

    ``delay_s``: by how much the field readings lag behind the field itself.
    ``longest_gap_s``: over a longer gap in the field readings nothing is interpolated;
    five periods of its reader where it is not given.
    """

    reader: Name
    value: Name
    delay_s: NotNegative = 0.0
    longest_gap_s: Positive | None = None
    relative_standard_uncertainty: NotNegative = 0.0


class Rig(Section):
    """A configuration that was found good. Made by :func:`acquire.config.load`."""

    run: RunSection
    ramp: RampSection | None = None
    target: TargetSection = TargetSection()
    window: WindowSection = WindowSection()
    field: FieldSection
    hall_bars: Several[HallBarSection]
    readers: Several[ReaderSection] = ()
    table: TableSection | None = None
    hold: HoldSection | None = None
    keys: KeysSection = KeysSection()
    laboratory: Scenario | None = None

    def reader(self, name: str) -> ReaderSection:
        """The reader of that name; KeyError if there is none."""
        for reader in self.readers:
            if reader.name == name:
                return reader
        raise KeyError(name)
