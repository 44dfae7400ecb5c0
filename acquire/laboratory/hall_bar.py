"""Resistances of the simulated Hall bar against field.

Symbols: n density, mu mobility, m effective mass, B field in tesla, omega_c = e|B|/m, tau_q quantum
lifetime, f the oscillations' frequency in 1/B.

Drude: rho_xx = 1/(n e mu), rho_xy = B/(q n e) with q = -1 for electrons, +1 for holes.

Shubnikov-de Haas oscillations, first harmonic (Ando, Fowler, Stern, Rev. Mod. Phys. 54, 437 (1982);
prefactor and phase as commonly written): rho_xx is multiplied by

    1 + A cos(2 pi f/|B| - pi),   A = 4 [X/sinh X] exp(-pi/(omega_c tau_q)),
    X = 2 pi^2 k T/(hbar omega_c),   f = n h/(g e),   g spin times valley degeneracy.

The formula is for small A; above 1 it would go below zero. There rho_xx stays at
:data:`LOWEST_SHARE` of its value at zero field: minima become flat and all but vanish, as they do in
real samples, though these have plateaus in rho_xy there, which this one has not.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.constants import e, h, hbar, k, m_e

from acquire.laboratory.scenario import Sample

LOWEST_SHARE = 0.02
_OUT_OF_SIGHT = 300.0  # an exponent so large that nothing is left of an oscillation

Numbers = NDArray[np.float64]


class HallBar:
    """The sample of a scenario. All methods take fields of any shape, in tesla, and return ohm."""

    def __init__(self, sample: Sample) -> None:
        self.sample = sample
        charge = e if sample.carriers == "holes" else -e
        density = sample.sheet_density_per_m2
        self.rho_0_ohm: float = 1.0 / (density * e * sample.mobility_m2_per_V_s)
        self.hall_slope_ohm_per_T: float = 1.0 / (density * charge)
        self.oscillation_frequency_T: float = density * h / (sample.degeneracy * e)

    def oscillation_amplitude(self, field_T: ArrayLike) -> Numbers:
        """A, the oscillations' relative amplitude, from 0 to 4."""
        mass = self.sample.effective_mass * m_e
        omega = np.abs(np.asarray(field_T, float)) * e / mass
        with np.errstate(divide="ignore"):
            x = 2 * np.pi**2 * k * self.sample.temperature_K / (hbar * omega)
            dingle = np.pi / (omega * self.sample.quantum_lifetime_s)
        seen = x + dingle < _OUT_OF_SIGHT
        x, dingle = np.where(seen, x, 1.0), np.where(seen, dingle, 0.0)
        amplitude = 4 * x / np.sinh(x) * np.exp(-dingle)
        return np.where(seen, amplitude, 0.0)

    def rho_xx_ohm(self, field_T: ArrayLike) -> Numbers:
        """Longitudinal resistivity, positive at every field."""
        field = np.abs(np.asarray(field_T, float))
        amplitude = self.oscillation_amplitude(field)
        inverse = np.divide(1.0, field, out=np.zeros_like(field), where=amplitude > 0)
        phase = 2 * np.pi * self.oscillation_frequency_T * inverse - np.pi
        share = np.maximum(1 + amplitude * np.cos(phase), LOWEST_SHARE)
        return np.asarray(self.rho_0_ohm * share)

    def rho_xy_ohm(self, field_T: ArrayLike) -> Numbers:
        """Hall resistivity."""
        return np.asarray(self.hall_slope_ohm_per_T * np.asarray(field_T, float))

    def longitudinal_ohm(self, field_T: ArrayLike) -> Numbers:
        """What stands between the longitudinal contacts, over the current."""
        return np.asarray(self.sample.squares * self.rho_xx_ohm(field_T))

    def hall_ohm(self, field_T: ArrayLike) -> Numbers:
        """What stands between the Hall contacts, over the current."""
        admixed = self.sample.misalignment_squares * self.rho_xx_ohm(field_T)
        return np.asarray(self.rho_xy_ohm(field_T) + admixed)
