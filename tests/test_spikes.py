"""Wild readings: which are called so, and that none is lost on the way."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

from analyse.spikes import SpikeGate


def judged(values: list[float | None], longest: int = 1) -> list[int]:
    """The places of what is wild; None is a row without a value."""
    gate: SpikeGate[int] = SpikeGate(longest)
    found: list[tuple[int, bool]] = []
    for index, value in enumerate(values):
        found += gate.pass_by(index) if value is None else gate.push(value, index)
    found += gate.flush()
    assert [index for index, _ in found] == list(range(len(values)))
    return [index for index, wild in found if wild]


def noise(count: int, seed: int = 1) -> list[float | None]:
    """White noise of standard deviation 1."""
    return list(np.random.default_rng(seed).standard_normal(count).tolist())


def raised(values: list[float | None], places: list[int], by: float) -> list[float | None]:
    """The same with some values raised."""
    return [
        value + by if value is not None and index in places else value
        for index, value in enumerate(values)
    ]


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("scale", [1e-12, 1.0, 1e12])
def test_a_single_wild_point(sign: int, scale: float) -> None:
    values = [scale * value for value in noise(100) if value is not None]
    assert judged(raised(list(values), [60], sign * 50 * scale)) == [60]


def test_several_wild_points_apart() -> None:
    places = [50, 52, 80, 121, 198]
    assert judged(raised(noise(200), places, 80.0)) == places


def test_a_few_wild_points_in_a_row() -> None:
    values = raised(noise(100), [50, 51, 52], 80.0)
    assert judged(values, longest=3) == [50, 51, 52]
    assert judged(values, longest=2) == []


@pytest.mark.parametrize("longest", [1, 3, 20])
def test_a_step_is_never_wild(longest: int) -> None:
    assert judged(raised(noise(200), list(range(50, 200)), 100.0), longest) == []


@pytest.mark.parametrize("longest", [1, 3, 20])
def test_a_ramp_is_never_wild_and_a_glitch_on_it_is(longest: int) -> None:
    values = [100.0 * k + value for k, value in enumerate(noise(200)) if value is not None]
    assert judged(list(values), longest) == []
    assert judged(raised(list(values), [150], 5000.0), longest) == [150]


def test_nothing_is_wild_before_the_usual_step_is_known() -> None:
    assert judged(raised(noise(100), [1, 3, 5], 1000.0)) == []


def test_a_jump_at_the_end_may_be_a_step() -> None:
    assert judged(raised(noise(100), [99], 1000.0)) == []


def test_a_glitch_amid_readings_that_are_all_equal() -> None:
    assert judged(raised([1.5] * 100, [50], 1.0)) == [50]


@pytest.mark.parametrize("share", [0.01, 0.08, 0.3])
def test_the_last_digit_is_not_wild(share: float) -> None:
    """Readings that are mostly equal: the first that differs may be a glitch, the others are not,
    and a real glitch still is."""
    rng = np.random.default_rng(7)
    values = [1.0 + 0.1 * bool(one) for one in rng.random(3000) < share]
    found = judged(list(values), longest=3)
    assert len(found) <= 3
    assert judged(raised(list(values), [2000], 30.0), longest=3) == [*found, 2000]


def test_a_glitch_after_a_single_last_digit_is_wild() -> None:
    assert judged(raised(raised([1.5] * 200, [50], 0.1), [100], 8.0)) == [50, 100]


def test_white_noise_is_hardly_ever_wild() -> None:
    assert judged(noise(20_000, seed=2)) == []


def test_huge_values_do_no_harm() -> None:
    values = noise(100)
    values[50], values[70] = 1e300, -1.7e308
    assert judged(values) == [50, 70]


def test_rows_without_a_value_keep_their_place() -> None:
    values = raised(noise(100), [60], 80.0)
    values[20] = values[59] = values[61] = values[62] = None
    assert judged(values) == [60]


def test_a_jump_followed_by_silence_is_let_go() -> None:
    gate: SpikeGate[int] = SpikeGate()
    for index, value in enumerate(noise(50)):
        assert value is not None
        gate.push(value, index)
    assert gate.push(1e3, 50) == []
    found = [one for index in range(51, 151) for one in gate.pass_by(index)]
    assert [index for index, _ in found] == list(range(50, 151))
    assert [index for index, wild in found if wild] == [50]


@pytest.mark.parametrize("longest", [1, 10])
def test_memory_is_bounded_and_state_pickles(longest: int) -> None:
    gate: SpikeGate[int] = SpikeGate(longest)
    values = [value for value in noise(3000) if value is not None]
    sizes = []
    for _ in range(3):
        for k, value in enumerate(values):
            gate.push(value * (100.0 if k % 7 == 0 else 1.0), k)
        sizes.append(len(pickle.dumps(gate)))
    assert max(sizes[1:]) < sizes[0] + 60 * (longest + 1)
    copy = pickle.loads(pickle.dumps(gate))
    for value in (1e6, 0.0, 0.1):
        assert copy.push(value, 1) == gate.push(value, 1)
