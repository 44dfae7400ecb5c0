"""What the simulated laboratory contains; the ``[laboratory]`` part of a configuration."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from acquire.config.sections import Name, NotNegative, Positive, Section, Several

Port = Annotated[int, Field(ge=0, le=65535)]


class Sample(Section):
    """The Hall bar: Drude transport, oscillations, contacts that are not quite opposite."""

    sheet_density_per_m2: Positive
    mobility_m2_per_V_s: Positive
    carriers: Literal["electrons", "holes"] = "electrons"
    effective_mass: Positive = 0.067
    quantum_lifetime_s: Positive = 1e-12
    temperature_K: Positive = 1.5
    squares: Positive = 4.0
    misalignment_squares: float = 0.0


class Magnet(Section):
    """A magnet supply that ramps along ``path_T`` once it runs, and its field reading."""

    port: Port = 0
    path_T: Several[float]
    rate_T_per_min: Positive
    wait_s: NotNegative = 3.0
    remanent_T: float = 0.0
    noise_T: NotNegative = 0.0


class Lockin(Section):
    """A lock-in on one pair of contacts: white noise and signal through equal RC stages."""

    name: Name
    port: Port = 0
    measures: Literal["longitudinal", "hall"]
    time_constant_s: Positive = 0.3
    poles: Annotated[int, Field(ge=1, le=8)] = 4
    noise_V_per_rtHz: NotNegative = 1e-9
    phase_deg: float = 0.0
    sensitivity_V: Positive = 1.0


class Scenario(Section):
    """A whole laboratory."""

    seed: int = 1
    current_A: Positive
    sample: Sample
    magnet: Magnet
    lockins: Several[Lockin]
