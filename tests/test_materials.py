"""The table of materials against its sources."""

from __future__ import annotations

import pytest
from scipy.constants import m_e

from analyse import MATERIALS, Material
from analyse.materials import find_material

# Vurgaftman, Meyer, Ram-Mohan, J. Appl. Phys. 89, 5815 (2001), Table I, as transcribed; GaN:
# Vurgaftman, Meyer, J. Appl. Phys. 94, 3675 (2003), from memory; silicon's transverse mass:
# Hensel, Hasegawa, Nakayama, Phys. Rev. 138, A225 (1965), from memory.
MASSES = {
    "GaAs": 0.067, "InAs": 0.026, "InSb": 0.0135, "InP": 0.0795, "GaSb": 0.039, "GaN": 0.20,
    "Si": 0.1905,
}  # fmt: skip

# Novoselov et al., Nature 438, 197 (2005) with v_F = 1e6 m/s: m = hbar k_F / v_F, recomputed.
GRAPHENE = [(1e15, 0.006488765827), (1e16, 0.02051927922), (5e16, 0.04588250318)]


@pytest.mark.parametrize(("name", "mass"), MASSES.items())
def test_masses(name: str, mass: float) -> None:
    assert MATERIALS[name].effective_mass == mass
    assert MATERIALS[name].mass_kg(3e15) == mass * m_e


def test_ingaas_with_its_bowing() -> None:
    # The same table: InAs and GaAs in proportion, less 0.0091 x (1 - x), at an indium share x = 0.53: 0.0430032.
    x = 0.53
    mass = x * 0.026 + (1 - x) * 0.067 - 0.0091 * x * (1 - x)
    assert MATERIALS["InGaAs"].effective_mass == pytest.approx(mass, abs=5e-5)


def test_zno_lies_in_the_range_that_is_quoted() -> None:
    # 0.28 to 0.30, from memory; Tsukazaki et al., arXiv 0811.4639 (abstract), r_s 3.1 to 5.2 for
    # 16 to 5.6e11 cm^-2, implies 0.30 at a permittivity of 8.3.
    mass = MATERIALS["ZnO"].effective_mass
    assert mass is not None
    assert 0.28 <= mass <= 0.30


@pytest.mark.parametrize(("density", "mass"), GRAPHENE)
def test_graphene_mass_grows_with_density(density: float, mass: float) -> None:
    graphene = MATERIALS["graphene"]
    assert graphene.effective_mass is None
    assert graphene.mass_kg(density) / m_e == pytest.approx(mass, rel=1e-8)
    assert graphene.mass_kg(-density) == graphene.mass_kg(density)


def test_degeneracies() -> None:
    assert all(material.spin_degeneracy == 2 for material in MATERIALS.values())
    valleys = {name: material.valley_degeneracy for name, material in MATERIALS.items()}
    assert valleys.pop("Si") == valleys.pop("graphene") == 2
    assert set(valleys.values()) == {1}


@pytest.mark.parametrize("material", MATERIALS.values(), ids=lambda material: material.name)
def test_each_has_a_source_and_is_found_by_its_name(material: Material) -> None:
    assert len(material.source) > 10
    for name in (material.name, material.name.lower(), f" {material.name.upper()} "):
        assert find_material(name) is material


def test_an_unknown_material_is_an_error_that_says_what_to_do() -> None:
    with pytest.raises(ValueError, match=r"'unobtainium' .*GaAs.*give effective_mass") as caught:
        find_material("unobtainium")
    assert all(name in str(caught.value) for name in MATERIALS)
