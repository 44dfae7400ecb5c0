"""Hall bars: what must be given, what wins, what is refused."""

from __future__ import annotations

import math
import pickle

import pytest
from scipy.constants import m_e

from analyse import MATERIALS, HallBar


def test_a_material_gives_mass_degeneracies_and_source() -> None:
    bar = HallBar(4.0, "Si")
    assert bar.carrier_gas == MATERIALS["Si"]
    assert HallBar(4, "gaas").carrier_gas.effective_mass == 0.067


def test_what_is_given_wins_over_the_material() -> None:
    bar = HallBar(
        2.5, "GaAs", 0.07, "cyclotron resonance, R0417", spin_degeneracy=1, valley_degeneracy=3
    )
    gas = bar.carrier_gas
    assert (gas.effective_mass, gas.source) == (0.07, "cyclotron resonance, R0417")
    assert (gas.spin_degeneracy, gas.valley_degeneracy) == (1, 3)


def test_a_mass_alone_is_enough() -> None:
    gas = HallBar(1.0, effective_mass=0.2).carrier_gas
    assert (gas.effective_mass, gas.spin_degeneracy, gas.valley_degeneracy) == (0.2, 2, 1)
    assert gas.source == "user"


def test_a_given_mass_takes_the_place_of_linear_bands() -> None:
    assert HallBar(1.0, "graphene").carrier_gas.fermi_velocity_m_per_s == 1e6
    gas = HallBar(1.0, "graphene", effective_mass=0.03).carrier_gas
    assert gas.mass_kg(1e15) == gas.mass_kg(1e16) == 0.03 * m_e
    assert gas.valley_degeneracy == 2


@pytest.mark.parametrize("squares", [0.0, -4.0, math.nan, math.inf])
def test_refuses_squares_that_are_none(squares: float) -> None:
    with pytest.raises(ValueError, match="squares must be a positive number"):
        HallBar(squares, "GaAs")


@pytest.mark.parametrize("mass", [0.0, -0.067, math.nan, math.inf])
def test_refuses_a_mass_that_is_none(mass: float) -> None:
    with pytest.raises(ValueError, match="effective_mass must be a positive number"):
        HallBar(4.0, effective_mass=mass)


def test_refuses_no_mass_and_an_unknown_material() -> None:
    with pytest.raises(ValueError, match="needs a material or an effective_mass"):
        HallBar(4.0)
    with pytest.raises(ValueError, match="not in the table"):
        HallBar(4.0, "kryptonite")


def test_frozen_and_pickled() -> None:
    bar = HallBar(4.0, "InAs", squares_relative_uncertainty=0.01)
    assert pickle.loads(pickle.dumps(bar)) == bar
    with pytest.raises(AttributeError):
        bar.squares = 5.0  # type: ignore[misc]
