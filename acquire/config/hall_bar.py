"""Hall bars: geometry, material, where their voltages come from, how they are driven."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from acquire.config.sections import Name, NotNegative, Positive, Section


class Filter(Section):
    """The low-pass filter behind a reading: ``poles`` equal RC stages.

    Each of the two is given as a number, or as the name of one of the reader's settings,
    from which the instrument's own answer is then used.
    """

    time_constant_s: Positive | None = None
    time_constant_setting: Name | None = None
    poles: Annotated[int, Field(ge=1, le=8)] | None = None
    poles_setting: Name | None = None

    @model_validator(mode="after")
    def _one_of_each(self) -> Filter:
        if (self.time_constant_s is None) == (self.time_constant_setting is None):
            raise ValueError("give either time_constant_s or time_constant_setting")
        if (self.poles is None) == (self.poles_setting is None):
            raise ValueError("give either poles or poles_setting")
        return self


class Signal(Section):
    """A voltage (or resistance) of the sample, taken from values of one reader.

    ``detection``: ``X`` uses ``x`` alone; ``XY`` turns the vector (x, y) by ``phase_deg`` and
    uses its first component; ``R`` takes ``x`` as a magnitude. What stands at the sample is the
    reading divided by ``gain`` and multiplied by ``sign``.

    Names of the reader's settings: ``phase_setting`` is the instrument's reference phase in
    degrees, which is taken off ``phase_deg``; with ``full_scale_setting`` the readings are shares
    of the full scale that the setting tells, and are multiplied by it; after a change of
    ``range_setting``, as of any of these, readings are used again when they have settled.
    """

    reader: Name
    x: Name
    y: Name | None = None
    detection: Literal["X", "XY", "R"] = "X"
    phase_deg: float = 0.0
    phase_setting: Name | None = None
    gain: Positive = 1.0
    full_scale_setting: Name | None = None
    range_setting: Name | None = None
    sign: Literal[1, -1] = 1
    filter: Filter | None = None
    relative_standard_uncertainty: NotNegative = 0.0

    @model_validator(mode="after")
    def _needs_y(self) -> Signal:
        if (self.detection == "XY") != (self.y is not None):
            raise ValueError('detection = "XY" and the key y go together')
        for key in ("phase_deg", "phase_setting"):
            if getattr(self, key) and self.detection != "XY":
                raise ValueError(f'{key} needs detection = "XY"')
        return self


class MeasuredCurrent(Signal):
    """The current as a reading: a voltage over ``shunt_ohm``, or a value in ampere without it."""

    shunt_ohm: Positive | None = None


class Excitation(Section):
    """How the current through the Hall bar is known: given, from a source, or measured.

    With ``source_V`` and ``series_ohm`` the sample's own resistance is taken into account:
    I = (V - V_xx * source_to_drain_squares / squares - |V_xy|) / (series_ohm + contact_ohm).
    """

    current_A: Positive | None = None
    source_V: Positive | None = None
    series_ohm: Positive | None = None
    contact_ohm: NotNegative = 0.0
    source_to_drain_squares: Positive | None = None
    measured: MeasuredCurrent | None = None
    relative_standard_uncertainty: NotNegative = 0.0

    @model_validator(mode="after")
    def _one_way(self) -> Excitation:
        ways = [self.current_A is not None, self.source_V is not None, self.measured is not None]
        if sum(ways) != 1:
            raise ValueError("give exactly one of current_A, source_V (with series_ohm), measured")
        if (self.source_V is None) != (self.series_ohm is None):
            raise ValueError("source_V and series_ohm go together")
        if self.source_V is None and (self.contact_ohm or self.source_to_drain_squares):
            raise ValueError("contact_ohm and source_to_drain_squares belong to source_V")
        return self


class HallBarSection(Section):
    """One Hall bar. Geometry as ``squares`` or as ``length_m`` and ``width_m``."""

    name: Name
    squares: Positive | None = None
    length_m: Positive | None = None
    width_m: Positive | None = None
    squares_relative_standard_uncertainty: NotNegative = 0.0
    material: str | None = None
    effective_mass: Positive | None = None
    effective_mass_source: str | None = None
    effective_mass_relative_standard_uncertainty: NotNegative = 0.0
    spin_degeneracy: Annotated[int, Field(ge=1, le=2)] | None = None
    valley_degeneracy: Annotated[int, Field(ge=1, le=6)] | None = None
    expected_carriers: Literal["electrons", "holes"] | None = None
    longitudinal: Signal
    hall: Signal
    excitation: Excitation | None = None

    @model_validator(mode="after")
    def _geometry_and_mass(self) -> HallBarSection:
        pair = self.length_m is not None and self.width_m is not None
        half = (self.length_m is None) != (self.width_m is None)
        if half or pair == (self.squares is not None):
            raise ValueError("give either squares, or length_m and width_m")
        if (self.material is None) == (self.effective_mass is None):
            raise ValueError("give either material or effective_mass (in units of m_e)")
        return self

    @property
    def number_of_squares(self) -> float:
        """Length over width between the longitudinal contacts."""
        if self.squares is not None:
            return self.squares
        assert self.length_m is not None and self.width_m is not None
        return self.length_m / self.width_m
