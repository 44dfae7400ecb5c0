"""A Hall bar: its geometry and its carriers' mass and degeneracy."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

from analyse.materials import Material, find_material


@dataclass(frozen=True)
class HallBar:
    """A Hall bar.

    Parameters
    ----------
    squares
        Length between the longitudinal contacts over the width of the channel.
    material
        A name in :data:`analyse.materials.MATERIALS`; or give ``effective_mass``.
    effective_mass
        In units of the electron's mass; wins over the material's.
    effective_mass_source
        Where that number is from.
    spin_degeneracy, valley_degeneracy
        2 and 1, or the material's, unless given.
    squares_relative_uncertainty, mass_relative_uncertainty
        Relative standard uncertainties (systematic, for the budget).

    Raises ValueError for numbers that are not positive, an unknown material, or no mass.
    """

    squares: float
    material: str | None = None
    effective_mass: float | None = None
    effective_mass_source: str | None = None
    spin_degeneracy: int | None = None
    valley_degeneracy: int | None = None
    squares_relative_uncertainty: float = 0.0
    mass_relative_uncertainty: float = 0.0
    carrier_gas: Material = field(init=False, repr=False)

    def __post_init__(self) -> None:
        if not (math.isfinite(self.squares) and self.squares > 0):
            raise ValueError(f"squares must be a positive number, not {self.squares!r}")
        mass = self.effective_mass
        if mass is not None and not (math.isfinite(mass) and mass > 0):
            raise ValueError(f"effective_mass must be a positive number, not {mass!r}")
        if self.material is None and mass is None:
            raise ValueError("a Hall bar needs a material or an effective_mass")
        base = find_material(self.material) if self.material is not None else None
        name = base.name if base is not None else "given mass"
        source = self.effective_mass_source or (base.source if base and mass is None else "user")
        gas = Material(
            name,
            mass if mass is not None else (base.effective_mass if base else None),
            self.spin_degeneracy or (base.spin_degeneracy if base else 2),
            self.valley_degeneracy or (base.valley_degeneracy if base else 1),
            source,
            base.fermi_velocity_m_per_s if base is not None and mass is None else None,
        )
        object.__setattr__(self, "carrier_gas", gas)


TERMS = 20


def finite_length_factor(squares: float) -> float:
    """Hall voltage half-way between two contacts as wide as the bar, over that of a long bar.

    ``squares``: length over width from contact to contact. They short-circuit part of the Hall voltage.
    From Laplace's equation for a small Hall angle, G = 1 - (8 / pi^2) sum over odd k of
    1 / (k^2 cosh(k pi L / 2 W)); see Lippmann, Kuhrt, Z. Naturforsch. 13a, 462 (1958). Raises ValueError
    if not positive.
    """
    if not squares > 0:
        raise ValueError(f"squares must be positive, not {squares!r}")
    odd = range(1, 2 * TERMS, 2)
    half = math.pi * squares / 2
    return 1.0 - 8 / math.pi**2 * sum(1 / (k * k * math.cosh(min(k * half, 700.0))) for k in odd)
