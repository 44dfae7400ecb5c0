"""Drude's numbers against constants, recomputed tables and the trade's own examples."""

from __future__ import annotations

import math

import pytest
from scipy.constants import e, eV, h, hbar, k, m_e, physical_constants

from analyse import MATERIALS, Material, Transport, transport
from analyse.drude import (
    EXACT_OHM_PER_1E15,
    density_from_slope,
    mobility_from,
    scattering_time_from,
)

R_K = 25812.80745930450666  # h/e^2, exact since the SI of 2019

# R_K/nu in ohm, exact to the digits given.
PLATEAUS = {
    1: 25812.8074593045, 2: 12906.4037296523, 3: 8604.26915310150, 4: 6453.20186482613,
    5: 5162.56149186090, 6: 4302.13457655075, 7: 3687.54392275779, 8: 3226.60093241306,
    10: 2581.28074593045, 12: 2151.06728827538, 14: 1843.77196137889, 16: 1613.30046620653,
    18: 1434.04485885025, 20: 1290.64037296523, 22: 1173.30942996839, 26: 992.800286896327,
    30: 860.426915310150,
}  # fmt: skip

GAAS = MATERIALS["GaAs"]
# The table of Beenakker and van Houten has 0.19 for silicon's mass.
SILICON = Material("Si", 0.19, 2, 2, "C. W. J. Beenakker, H. van Houten")

# C. W. J. Beenakker, H. van Houten, Solid State Physics 44, 1 (1991), Table I (arXiv
# cond-mat/0412664), recomputed to six digits from the same inputs (density and mobility in SI).
# k_F in 1e6/cm, v_F in 1e7 cm/s, E_F in meV, tau in ps, D in cm^2/s, rho in kOhm, l in nm, k_F l.
RECOMPUTED = [
    (GAAS, 4e15, 1.0, (1.58533, 2.73925, 14.2918, 0.380937, 142.918, 1.56038, 104.348, 16.5427)),
    (GAAS, 4e15, 100.0, (1.58533, 2.73925, 14.2918, 38.0937, 14291.8, 0.0156038, 10434.8, 1654.27)),
    (SILICON, 1e15, 1.0, (0.560499, 0.341514, 0.629969, 1.08027, 6.29969, 6.24151, 36.8927, 2.06783)),
    (SILICON, 1e16, 1.0, (1.77245, 1.07996, 6.29969, 1.08027, 62.9969, 0.624151, 116.665, 20.6783)),
]  # fmt: skip
# The table as printed, to two digits, from memory (k_F l of GaAs left out: it was built from a
# rounded l and is 4.5 % off).
PRINTED = [
    (GAAS, 4e15, 1.0, (1.58, 2.7, 14, 0.38, 140, 1.6, 1e2)),
    (GAAS, 4e15, 100.0, (1.58, 2.7, 14, 38, 14000, 0.016, 1e4)),
    (SILICON, 1e15, 1.0, (0.56, 0.34, 0.63, 1.1, 6.4, 6.3, 37)),
    (SILICON, 1e16, 1.0, (1.77, 1.1, 6.3, 1.1, 64, 0.63, 118)),
]


def in_units_of_the_table(found: Transport, tau_s: float) -> tuple[float, ...]:
    """k_F, v_F, E_F, tau, D, rho, l and k_F l as the table gives them."""
    return (
        found.k_fermi_per_m / 1e8,
        found.fermi_velocity_m_per_s / 1e5,
        found.fermi_energy_J / eV * 1e3,
        tau_s * 1e12,
        found.diffusion_m2_per_s * 1e4,
        found.sheet_resistance_ohm / 1e3,
        found.mean_free_path_m * 1e9,
        found.k_fermi_times_path,
    )


def test_constants_are_those_of_the_si_and_codata() -> None:
    # Exact since 2019; the electron's mass is measured: 9.1093837139(28)e-31 kg (CODATA 2022),
    # ...7015(28) in CODATA 2018.
    assert (e, h, k) == (1.602176634e-19, 6.62607015e-34, 1.380649e-23)
    assert hbar == pytest.approx(1.0545718176461565e-34, rel=1e-15)
    assert m_e == pytest.approx(9.1093837139e-31, rel=1e-8)
    assert h / e**2 == pytest.approx(R_K, rel=1e-15)
    assert physical_constants["von Klitzing constant"][0] == pytest.approx(R_K, rel=1e-9)


@pytest.mark.parametrize(("nu", "ohm"), PLATEAUS.items())
def test_hall_resistivity_at_a_whole_filling_factor(nu: int, ohm: float) -> None:
    assert R_K / nu == pytest.approx(ohm, rel=1e-14)
    found = transport(3e15, 10.0, GAAS)
    field_T = ohm * 3e15 * e
    assert found.filling_factor(field_T) == pytest.approx(nu, rel=1e-13)
    assert found.filling_factor(-field_T) == found.filling_factor(field_T)


def test_filling_factor_without_a_field() -> None:
    assert transport(3e15, 10.0, GAAS).filling_factor(0.0) == math.inf


def test_exact_form_of_the_quick_density() -> None:
    # Common practice: 6.25 kOhm at 1 T for 1e15 m^-2; exactly 1 T / (1e15 m^-2 e) = 6241.5 Ohm.
    assert EXACT_OHM_PER_1E15 == pytest.approx(6241.5, abs=0.05)
    assert density_from_slope(EXACT_OHM_PER_1E15) == pytest.approx(1e15, rel=1e-15)


def test_the_trades_example() -> None:
    """6.47 kOhm over 2.5 T: 2.4e15 m^-2; 96 Ohm per square: 27 m^2/Vs; in GaAs 10.3 ps (common
    practice)."""
    slope = 6470.0 / 2.5
    assert density_from_slope(slope) == pytest.approx(2.4e15, rel=0.01)
    assert density_from_slope(-slope) == density_from_slope(slope)
    mobility = mobility_from(slope, 96.0)
    assert mobility == pytest.approx(27.0, rel=0.01)
    assert mobility_from(-slope, 96.0) == mobility
    assert scattering_time_from(mobility, 0.067 * m_e) * 1e12 == pytest.approx(10.3, abs=0.05)


@pytest.mark.parametrize(("gas", "density", "mobility", "row"), RECOMPUTED)
def test_two_dimensional_gas_recomputed(
    gas: Material, density: float, mobility: float, row: tuple[float, ...]
) -> None:
    found = transport(density, mobility, gas)
    tau = scattering_time_from(mobility, gas.mass_kg(density))
    assert in_units_of_the_table(found, tau) == pytest.approx(row, rel=1e-5)
    assert found.sheet_density_per_m2 == density


@pytest.mark.parametrize(("gas", "density", "mobility", "row"), PRINTED)
def test_two_dimensional_gas_as_printed(
    gas: Material, density: float, mobility: float, row: tuple[float, ...]
) -> None:
    found = transport(density, mobility, gas)
    tau = scattering_time_from(mobility, gas.mass_kg(density))
    assert in_units_of_the_table(found, tau)[:7] == pytest.approx(row, rel=0.05)


@pytest.mark.parametrize("mobility", [1.0, 100.0])
def test_omega_c_tau_is_one_at_the_crossing_field(mobility: float) -> None:
    # The same Table I: omega_c tau of 1 to 100 per tesla for GaAs.
    found = transport(4e15, mobility, GAAS)
    tau = scattering_time_from(mobility, GAAS.mass_kg(4e15))
    omega_c = e * found.crossing_field_T / GAAS.mass_kg(4e15)
    assert omega_c * tau == pytest.approx(1.0, rel=1e-14)
    assert found.crossing_field_T == pytest.approx(1 / mobility, rel=1e-15)


@pytest.mark.parametrize(("density", "ohm_per_T"), [(4e15, 1560.3773), (1e15, 6241.5091)])
def test_hall_coefficient(density: float, ohm_per_T: float) -> None:
    assert density_from_slope(ohm_per_T) == pytest.approx(density, rel=1e-7)


def test_worked_vector_of_a_good_gaas_sample() -> None:
    # m* = 0.067, n = 3e15 m^-2, mu = 50 m^2/Vs, recomputed.
    found = transport(3e15, 50.0, GAAS)
    assert scattering_time_from(50.0, GAAS.mass_kg(3e15)) == pytest.approx(19.04686087e-12, rel=1e-8)
    assert found.sheet_resistance_ohm == pytest.approx(41.6100604964, rel=1e-11)
    assert found.k_fermi_per_m == pytest.approx(1.372936849e8, rel=1e-9)
    assert found.fermi_energy_J / eV == pytest.approx(10.71887625e-3, rel=1e-8)
    assert found.mean_free_path_m == pytest.approx(4.518417252e-6, rel=1e-9)
    assert mobility_from(2080.50302482, 41.6100604964) == pytest.approx(50.0, rel=1e-11)
    assert found.k_fermi_times_path == found.k_fermi_per_m * found.mean_free_path_m


@pytest.mark.parametrize(
    ("density", "meV"), [(1e15, 36.892722), (1e16, 116.66503), (5e16, 260.87094)]
)
def test_graphene(density: float, meV: float) -> None:
    # Linear bands, v_F = 1e6 m/s, recomputed.
    found = transport(density, 1.0, MATERIALS["graphene"])
    assert found.fermi_energy_J / eV * 1e3 == pytest.approx(meV, rel=1e-7)
    assert found.fermi_velocity_m_per_s == pytest.approx(1e6, rel=1e-12)
    # Einstein's relation, D = sigma / (e^2 dn/dE) with dn/dE = 2 n / E_F.
    sigma = density * e * 1.0
    einstein = sigma / (e**2 * 2 * density / found.fermi_energy_J)
    assert found.diffusion_m2_per_s == pytest.approx(einstein, rel=1e-12)


def test_einsteins_relation_for_parabolic_bands() -> None:
    found = transport(4e15, 10.0, GAAS)
    states = GAAS.mass_kg(4e15) / (math.pi * hbar**2)  # g_s g_v = 2
    sigma = 4e15 * e * 10.0
    assert found.diffusion_m2_per_s == pytest.approx(sigma / (e**2 * states), rel=1e-12)


def test_no_slope_is_no_density() -> None:
    with pytest.raises(ZeroDivisionError):
        density_from_slope(0.0)
