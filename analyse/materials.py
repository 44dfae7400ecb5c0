"""Effective mass and degeneracies by material, each with its source.

The mass depends on density, strain and field; a better value for the sample at hand, with its
own source, belongs into the configuration.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.constants import hbar

_VMR = "Vurgaftman, Meyer, Ram-Mohan, J. Appl. Phys. 89, 5815 (2001), Table I"


@dataclass(frozen=True)
class Material:
    """A two-dimensional electron gas by its host.

    ``effective_mass`` is in units of the electron's mass; None where the bands are linear, and
    then ``fermi_velocity_m_per_s`` gives the cyclotron mass at each density.
    """

    name: str
    effective_mass: float | None
    spin_degeneracy: int
    valley_degeneracy: int
    source: str
    fermi_velocity_m_per_s: float | None = None

    def mass_kg(self, sheet_density_per_m2: float) -> float:
        """Mass in kg that enters the scattering time, at the given density in m^-2."""
        from scipy.constants import m_e

        if self.effective_mass is not None:
            return self.effective_mass * m_e
        assert self.fermi_velocity_m_per_s is not None
        degeneracy = self.spin_degeneracy * self.valley_degeneracy
        k_fermi = math.sqrt(4 * math.pi * abs(sheet_density_per_m2) / degeneracy)
        return hbar * k_fermi / self.fermi_velocity_m_per_s


MATERIALS: dict[str, Material] = {
    material.name: material
    for material in (
        Material("GaAs", 0.067, 2, 1, _VMR),
        Material("InAs", 0.026, 2, 1, _VMR),
        Material("InSb", 0.0135, 2, 1, _VMR),
        Material("InGaAs", 0.0430, 2, 1, f"{_VMR}, In0.53Ga0.47As with its bowing"),
        Material("InP", 0.0795, 2, 1, _VMR),
        Material("GaSb", 0.039, 2, 1, _VMR),
        Material("GaN", 0.20, 2, 1, "Vurgaftman, Meyer, J. Appl. Phys. 94, 3675 (2003)"),
        Material("Si", 0.1905, 2, 2, "(100) surface: transverse mass of Hensel, Hasegawa, "
                 "Nakayama, Phys. Rev. 138, A225 (1965); valleys: Ando, Fowler, Stern (1982)"),
        Material("ZnO", 0.29, 2, 1, "0.28 to 0.30, as commonly quoted for MgZnO/ZnO"),
        Material("graphene", None, 2, 2, "linear bands, Novoselov et al., Nature 438, 197 (2005)",
                 fermi_velocity_m_per_s=1.0e6),
    )
}


def find_material(name: str) -> Material:
    """The material of that name, capitals or not.

    Raises ValueError naming what is known, if it is not in the table.
    """
    for known, material in MATERIALS.items():
        if known.lower() == name.strip().lower():
            return material
    raise ValueError(
        f"material {name!r} is not in the table ({', '.join(MATERIALS)}); "
        "give effective_mass and effective_mass_source instead"
    )
