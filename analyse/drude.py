"""Drude's formulas: from the Hall line's slope and the zero-field resistivity to the numbers.

n = 1 / (e |dB rho_xy|), mu = |dB rho_xy| / rho_0, tau = mu m / e. What follows from them for a
degenerate two-dimensional gas with degeneracy g = g_s g_v: k_F = sqrt(4 pi n / g),
v_F = hbar k_F / m, E_F = hbar^2 k_F^2 / 2m (linear bands: hbar k_F v_F), l = v_F tau,
D = v_F^2 tau / 2. Constants from scipy.constants (CODATA).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.constants import e, h, hbar

from analyse.materials import Material

EXACT_OHM_PER_1E15 = 1.0 / (1e15 * e)
"""Hall resistivity in ohm at 1 T of 1e15 carriers per m^2: 6241.5 Ohm."""


def density_from_slope(slope_ohm_per_T: float) -> float:
    """Sheet density in m^-2 from the Hall slope (either sign). ZeroDivisionError at zero."""
    return 1.0 / (e * abs(slope_ohm_per_T))


def mobility_from(slope_ohm_per_T: float, rho_0_ohm: float) -> float:
    """Mobility in m^2/Vs from Hall slope and zero-field resistivity."""
    return abs(slope_ohm_per_T) / rho_0_ohm


def scattering_time_from(mobility_m2_per_V_s: float, mass_kg: float) -> float:
    """Scattering (momentum relaxation) time in s."""
    return mobility_m2_per_V_s * mass_kg / e


@dataclass(frozen=True)
class Transport:
    """What follows from density, mobility and mass, in SI units."""

    sheet_resistance_ohm: float
    k_fermi_per_m: float
    fermi_energy_J: float
    fermi_velocity_m_per_s: float
    mean_free_path_m: float
    diffusion_m2_per_s: float
    k_fermi_times_path: float
    crossing_field_T: float
    sheet_density_per_m2: float

    def filling_factor(self, field_T: float) -> float:
        """Filling factor n h / (e B); infinite at zero field."""
        if field_T == 0:
            return math.inf
        return self.sheet_density_per_m2 * h / (e * abs(field_T))


def transport(density_per_m2: float, mobility_m2_per_V_s: float, gas: Material) -> Transport:
    """All derived quantities. Arguments must be positive."""
    mass = gas.mass_kg(density_per_m2)
    tau = scattering_time_from(mobility_m2_per_V_s, mass)
    degeneracy = gas.spin_degeneracy * gas.valley_degeneracy
    k_f = math.sqrt(4 * math.pi * density_per_m2 / degeneracy)
    v_f = hbar * k_f / mass
    linear = gas.effective_mass is None
    energy = hbar * k_f * v_f if linear else hbar**2 * k_f**2 / (2 * mass)
    path = v_f * tau
    return Transport(
        1.0 / (density_per_m2 * e * mobility_m2_per_V_s),
        k_f, energy, v_f, path, v_f**2 * tau / 2, k_f * path,
        1.0 / mobility_m2_per_V_s, density_per_m2,
    )
