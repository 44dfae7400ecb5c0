"""Sweeps: cut where the field turns back, not where its reading jitters."""

import math

import numpy as np
import pytest

from analyse.scatter import scatter_about_line
from analyse.sweeps import KEPT, Sweep, Sweeps


def fed(fields_T: list[float], threshold_T: float = 0.002) -> Sweeps:
    sweeps = Sweeps(threshold_T)
    for k, field_T in enumerate(fields_T):
        sweeps.add(0.5 * k, field_T)
    return sweeps


def there_and_back(step_T: float = 0.001) -> list[float]:
    up = [k * step_T for k in range(1001)]
    return [*up, *up[-2::-1]]


def test_there_and_back_are_two_sweeps_that_meet_at_the_turn() -> None:
    up, down = fed(there_and_back()).all()
    assert (up.number, up.direction, up.from_T, up.to_T) == (0, 1, 0.0, pytest.approx(1.0))
    assert (down.number, down.direction, down.to_T) == (1, -1, 0.0)
    assert (down.from_T, down.from_s) == (up.to_T, up.to_s) == (pytest.approx(1.0), 500.0)


def test_nothing_before_the_first_field_and_no_direction_before_it_moves() -> None:
    assert Sweeps(0.01).all() == ()
    assert fed([0.3, 0.3001, 0.3]).all() == (Sweep(0, 0, 0.3, 0.3, 0.0, 1.0),)


@pytest.mark.parametrize("noise_T", [1e-4, 2e-3, 1e-2])
def test_noise_of_the_field_meter_makes_no_turns(noise_T: float) -> None:
    """Also where it is larger than the threshold; the true turn is found."""
    rng = np.random.default_rng(5)
    fields = [float(b + noise_T * rng.standard_normal()) for b in there_and_back()]
    assert [one.direction for one in fed(fields).all()] == [1, -1]


def test_a_turn_is_found_where_the_field_came_back_by_more_than_the_threshold() -> None:
    sweeps = Sweeps(0.01)
    fields = [*(0.1 * k for k in range(12)), 1.095, 1.2, 1.195, 1.18]
    numbers = [sweeps.add(float(k), b) for k, b in enumerate(fields)]
    assert numbers == [0] * 15 + [1]
    assert sweeps.all()[0].to_T == 1.2


def test_sweeps_without_end_take_no_more_room() -> None:
    sweeps = fed([abs(k % 40 - 20) / 20 for k in range(8000)])
    assert sweeps.number > 350
    assert len(sweeps.all()) == KEPT + 1


def test_scatter_against_numpy() -> None:
    rng = np.random.default_rng(3)
    x, y = np.arange(20.0), rng.standard_normal(20)
    left = y - np.polyval(np.polyfit(x, y, 1), x)  # reference: numpy's polynomial fit
    points = list(zip(x.tolist(), y.tolist(), strict=True))
    assert scatter_about_line(points) == pytest.approx(math.sqrt(left @ left / 18), rel=1e-9)
