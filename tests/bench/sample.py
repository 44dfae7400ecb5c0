"""Samples with known truth: resistivities of a Hall bar at each field, written apart.

One kind of carrier gives rho_xx = 1 / (n e mu) and rho_xy = B / (q n e), q = +1 for holes. On it
come, as wanted, a smooth magnetoresistance, a peak at zero field, oscillations with plateaus, or
a second kind of carrier (then there is no single true density).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import digamma

from bench.rc_stages import Array

ELEMENTARY_CHARGE = 1.602176634e-19      # C, exact
PLANCK = 6.62607015e-34                  # J s, exact
BOLTZMANN = 1.380649e-23                 # J/K, exact
ELECTRON_MASS = 9.1093837139e-31         # kg, CODATA 2022
GAAS_MASS = 0.067                        # of a conduction electron in GaAs, in electron masses


@dataclass(frozen=True)
class Sample:
    """A sheet of carriers.

    Parameters
    ----------
    density_per_m2, mobility_m2_per_V_s
        The truth.
    sign
        +1 for holes, -1 for electrons.
    magnetoresistance, magnetoresistance_T
        Relative rise of rho_xx, a b^2 / (1 + b^2 / 4) with b = B over the second.
    peak, peak_T
        Relative height of the peak of rho_xx at zero field (weak localisation) and the field
        from which it is broken up. The truth is what is left without it.
    quantum_lifetime_s, temperature_K
        Oscillations periodic in 1/B, two spins to a level; no oscillations while the first is 0.
    second_density_per_m2, second_mobility_m2_per_V_s
        Another sheet of the same sign in parallel.
    """

    density_per_m2: float
    mobility_m2_per_V_s: float
    sign: int = -1
    magnetoresistance: float = 0.0
    magnetoresistance_T: float = 1.0
    peak: float = 0.0
    peak_T: float = 0.01
    quantum_lifetime_s: float = 0.0
    temperature_K: float = 1.0
    second_density_per_m2: float = 0.0
    second_mobility_m2_per_V_s: float = 0.0
    mass: float = GAAS_MASS

    @property
    def rho_0(self) -> float:
        """Resistivity in ohm without peak, magnetoresistance and second carrier."""
        return 1.0 / (self.density_per_m2 * ELEMENTARY_CHARGE * self.mobility_m2_per_V_s)

    @property
    def hall_slope(self) -> float:
        """Slope of rho_xy in ohm per tesla, signed, without a second carrier."""
        return self.sign / (self.density_per_m2 * ELEMENTARY_CHARGE)

    @property
    def crossing_T(self) -> float:
        """Field at which rho_xx and rho_xy are equal."""
        return 1.0 / self.mobility_m2_per_V_s

    @property
    def scattering_time_s(self) -> float:
        """Momentum relaxation time."""
        return self.mobility_m2_per_V_s * self.mass * ELECTRON_MASS / ELEMENTARY_CHARGE

    def rho(self, field_T: Array) -> tuple[Array, Array]:
        """(rho_xx, rho_xy) in ohm at fields."""
        b = np.asarray(field_T, float)
        if self.second_density_per_m2 > 0:
            return self._two_sheets(b)
        level = 1.0 + self._magnetoresistance(b) + self._peak(b)
        strength, filling = self._oscillation(b)
        level = level * (1.0 - 4 * strength / (1 + 4 * strength) * np.cos(np.pi * filling))
        shift = strength**2 / np.pi * np.sin(np.pi * filling)
        return self.rho_0 * level, self.hall_slope * b / (1.0 - shift / filling)

    def _magnetoresistance(self, b: Array) -> Array:
        x = (b / self.magnetoresistance_T) ** 2
        return self.magnetoresistance * x / (1.0 + x / 4.0)

    def _peak(self, b: Array) -> Array:
        """Weak localisation in its diffusive form with a phase-breaking field of peak_T / 60."""
        if self.peak == 0.0:
            return np.zeros_like(b)
        size = np.maximum(np.abs(b), 1e-7)
        broken = _broken(self.peak_T / 60.0 / size) - _broken(self.peak_T / size)
        return np.asarray(self.peak * (1.0 - broken / np.log(60.0)))

    def _oscillation(self, b: Array) -> tuple[Array, Array]:
        """(damping factor of the first harmonic, filling factor)."""
        size = np.maximum(np.abs(b), 1e-6)
        filling = self.density_per_m2 * PLANCK / (ELEMENTARY_CHARGE * size)
        if self.quantum_lifetime_s == 0.0:
            return np.zeros_like(b), filling
        cyclotron = ELEMENTARY_CHARGE * size / (self.mass * ELECTRON_MASS)
        thermal = 4 * np.pi**3 * BOLTZMANN * self.temperature_K / (PLANCK * cyclotron)
        thermal = np.minimum(thermal, 300.0)
        damping = np.exp(-np.pi / (cyclotron * self.quantum_lifetime_s))
        return np.asarray(thermal / np.sinh(thermal) * damping), filling

    def _two_sheets(self, b: Array) -> tuple[Array, Array]:
        """Two conductivity tensors added and inverted; complex numbers stand for them."""
        total = np.zeros_like(b, dtype=complex)
        for n, mu in (
            (self.density_per_m2, self.mobility_m2_per_V_s),
            (self.second_density_per_m2, self.second_mobility_m2_per_V_s),
        ):
            total += n * ELEMENTARY_CHARGE * mu / (1.0 - 1j * self.sign * mu * b)
        rho = 1.0 / total
        return np.asarray(rho.real), np.asarray(-rho.imag)


def _broken(x: Array) -> Array:
    """psi(1/2 + x) - ln x: how far a field that is 1/x of a mark has broken the interference."""
    return np.asarray(digamma(0.5 + x) - np.log(x))
