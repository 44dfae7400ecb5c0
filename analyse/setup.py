"""How a Hall bar is measured: signals, excitation, field, ramp, window, target. All frozen."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from analyse.lockin import LockinFilter


@dataclass(frozen=True)
class Signal:
    """A voltage, or a resistance, as one channel reads it.

    ``detection`` X uses x alone, XY turns (x, y) by ``phase_deg`` and uses the first component,
    R takes x as a magnitude. What stands at the sample is reading / ``gain`` * ``sign``.
    ``resistance`` is True where the reading is in ohm already (no excitation needed).
    ``filter`` is None where it is not known: then no delay is corrected and the correlation of
    the noise is taken from the residuals alone.
    """

    filter: LockinFilter | None = None
    detection: Literal["X", "XY", "R"] = "X"
    phase_deg: float = 0.0
    gain: float = 1.0
    sign: int = 1
    resistance: bool = False
    relative_uncertainty: float = 0.0

    def at_sample(self, x: float, y: float | None) -> float:
        """The signal at the sample, in the reading's unit. ValueError if XY lacks its y."""
        if self.detection == "XY":
            if y is None:
                raise ValueError("detection XY needs y")
            angle = math.radians(self.phase_deg)
            x = x * math.cos(angle) + y * math.sin(angle)
        elif self.detection == "R":
            x = abs(x)
        return x / self.gain * self.sign

    def quadrature(self, x: float, y: float | None) -> float | None:
        """The component that should be empty, at the sample; None where there is no y."""
        if y is None:
            return None
        angle = math.radians(self.phase_deg if self.detection == "XY" else 0.0)
        return (y * math.cos(angle) - x * math.sin(angle)) / self.gain * self.sign


@dataclass(frozen=True)
class Excitation:
    """The current: ``current_A`` given; or ``source_V`` behind ``series_ohm``; or ``measured``.

    Behind a series resistor the sample's own resistance is taken into account,
    I = (V - V_xx * source_to_drain_squares / squares - |V_xy|) / (series_ohm + contact_ohm).
    A measured current is the channel "current": a voltage over ``shunt_ohm``, or ampere.
    """

    current_A: float | None = None
    source_V: float | None = None
    series_ohm: float | None = None
    contact_ohm: float = 0.0
    source_to_drain_squares: float | None = None
    measured: Signal | None = None
    shunt_ohm: float | None = None
    relative_uncertainty: float = 0.0

    def __post_init__(self) -> None:
        ways = (self.current_A, self.source_V, self.measured)
        if sum(way is not None for way in ways) != 1:
            raise ValueError("give exactly one of current_A, source_V, measured")
        if (self.source_V is None) != (self.series_ohm is None):
            raise ValueError("source_V and series_ohm go together")
        for name in ("current_A", "source_V", "series_ohm", "shunt_ohm"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value > 0):
                raise ValueError(f"{name} must be a positive number, not {value!r}")


@dataclass(frozen=True)
class FieldSource:
    """The channel "field": its lag, the longest gap that is bridged, its calibration.

    ``longest_gap_s`` None: no limit.
    """

    delay_s: float = 0.0
    longest_gap_s: float | None = None
    relative_uncertainty: float = 0.0


@dataclass(frozen=True)
class Target:
    """How good the answer must be: relative half-widths at a joint confidence."""

    confidence: float = 0.95
    sheet_density: float = 0.01
    mobility: float = 0.01
    scattering_time: float | None = None
    cross_crossing_field: bool = True

    def __post_init__(self) -> None:
        if not 0.5 <= self.confidence < 1:
            raise ValueError(f"confidence must lie in 0.5..1, not {self.confidence!r}")
        for name in ("sheet_density", "mobility", "scattering_time"):
            value = getattr(self, name)
            if value is not None and not 0 < value < 1:
                raise ValueError(f"{name} must lie between 0 and 1, not {value!r}")


@dataclass(frozen=True)
class Ramp:
    """The planned ramp: fields in T, in order, and the rate in T/min."""

    path_T: tuple[float, ...]
    rate_T_per_min: float

    def __post_init__(self) -> None:
        if len(self.path_T) < 2 or not self.rate_T_per_min > 0:
            raise ValueError("a ramp needs two fields and a positive rate")

    @property
    def span_T(self) -> float:
        """Largest minus smallest planned field."""
        return max(self.path_T) - min(self.path_T)

    @property
    def largest_T(self) -> float:
        """Largest planned magnitude of field."""
        return max(abs(b) for b in self.path_T)

    @property
    def rate_T_per_s(self) -> float:
        """Rate in T/s."""
        return self.rate_T_per_min / 60.0


@dataclass(frozen=True)
class Window:
    """Magnitudes of field between which the fit is made; None: found from the data."""

    low_T: float | None = None
    high_T: float | None = None


@dataclass(frozen=True)
class Setup:
    """All that an estimator knows beforehand about one Hall bar's measurement."""

    longitudinal: Signal = Signal()
    hall: Signal = Signal()
    excitation: Excitation | None = None
    field: FieldSource = FieldSource()
    target: Target = Target()
    ramp: Ramp | None = None
    window: Window = Window()
    expected_carriers: str | None = None

    def __post_init__(self) -> None:
        volts = not (self.longitudinal.resistance and self.hall.resistance)
        if volts and self.excitation is None:
            raise ValueError("voltages need an excitation; or mark the signals as resistance")
