"""Segments: where they are cut, that nothing is lost or counted twice, and that they stay few."""

from __future__ import annotations

import itertools
import math
import random

import numpy as np
import pytest

from analyse.basis import COLUMNS, regressors
from analyse.segments import (
    MAX_EFFECTIVE,
    MAX_SEGMENTS,
    MIN_EFFECTIVE,
    Pool,
    Segments,
    field_bin,
)
from analyse.square_root import SquareRootInformation

Reading = tuple[int, float, float, float, float]


def ramp(count: int, kappa: float = 1.0, first: float = 0.0, last: float = 1.0) -> list[Reading]:
    """(sweep, time, field, resistivity, kappa) of one ramp, seeded noise."""
    rng = np.random.default_rng(1)
    fields = np.linspace(first, last, count)
    return [
        (0, 0.2 * k, float(field), float(2000 * field + rng.normal()), kappa)
        for k, field in enumerate(fields)
    ]


def fed(readings: list[Reading], role: str = "hall") -> Segments:
    """All readings taken."""
    segments = Segments(role, 1.0)
    for reading in readings:
        segments.add(*reading)
    return segments


def pooled(segments: Segments) -> Pool:
    """Everything in one pool."""
    pool = Pool()
    for segment in segments.all():
        pool.take(segment)
    return pool


def batch(readings: list[Reading], role: str = "hall") -> np.ndarray:
    """[X | y]' [X | y] of all readings."""
    rows = np.array([[*regressors(role, field), rho] for _, _, field, rho, _ in readings])
    return np.asarray(rows.T @ rows)


@pytest.mark.parametrize("role", ["hall", "longitudinal"])
@pytest.mark.parametrize("kappa", [1.0, 9.6])
def test_pooled_they_are_the_batch(role: str, kappa: float) -> None:
    readings = ramp(800, kappa, first=-0.4)
    pool = pooled(fed(readings, role))
    product = batch(readings, role)
    scale = np.sqrt(np.outer(np.diag(product), np.diag(product)))
    assert (pool.triangle.T @ pool.triangle) / scale == pytest.approx(product / scale, abs=1e-12)
    assert pool.count == 800
    assert pool.kappa == pytest.approx(kappa)
    assert pool.effective == pytest.approx(800 / kappa)
    assert (pool.low_T, pool.high_T) == pytest.approx((0.0, 1.0), abs=2e-3)


def test_a_segment_is_long_enough_to_tell_its_noise_and_short_in_field() -> None:
    segments = fed(ramp(4000))
    for segment in segments.closed:
        assert MIN_EFFECTIVE <= segment.effective <= MAX_EFFECTIVE
        assert segment.high_T / max(segment.low_T, 1e-3) < 1.5 or segment.effective < 10
        variance = segment.own_rss() / segment.own_dof()
        assert variance == pytest.approx(1.0, abs=1.2 + 3 / math.sqrt(segment.count))
    times = [(one.start_s, one.end_s) for one in segments.all()]
    assert all(a[1] < b[0] for a, b in itertools.pairwise(times))


def test_a_segment_never_spans_zero_nor_two_sweeps() -> None:
    readings = ramp(400, first=-1.0)
    readings += [(1, 80 + t, -field, -rho, kappa) for _, t, field, rho, kappa in readings]
    segments = fed(readings)
    assert {segment.sweep for segment in segments.all()} == {0, 1}
    for segment in segments.closed:
        assert segment.sign * segment.mean_field_T > 0 or segment.high_T < 0.04
    turn = next(k for k, one in enumerate(segments.all()) if one.sweep == 1)
    assert segments.all()[turn].start_s == 80.0


def test_own_line_of_a_segment_is_its_own() -> None:
    readings = ramp(30, first=0.52, last=0.54)  # within one bin
    (segment,) = fed(readings).all()
    fields = np.array([field for _, _, field, _, _ in readings])
    rho = np.array([rho for _, _, _, rho, _ in readings])
    fit = np.polynomial.Polynomial.fit(fields, rho, 1)
    assert segment.own_rss() == pytest.approx(float(np.sum((rho - fit(fields)) ** 2)), rel=1e-9)
    assert segment.own_dof() == 28
    assert segment.mean() == pytest.approx(rho.mean(), rel=1e-12)
    assert segment.mean_field_T == pytest.approx(fields.mean(), rel=1e-12)


def test_adding_tells_when_a_segment_was_closed() -> None:
    segments, closed = Segments("hall", 1.0), 0
    for reading in ramp(500):
        closed += segments.add(*reading)
        assert len(segments.closed) == closed
    assert segments.all() == [*segments.closed, segments.active]


@pytest.mark.parametrize(
    "field_of",
    [
        lambda k, rng: abs((k / 40) % 2 - 1),  # sweeps without end
        lambda k, rng: rng.random(),  # a field that is nothing but noise
        lambda k, rng: rng.uniform(-1, 1),
        lambda k, rng: k * 1e-4,
    ],
)
@pytest.mark.parametrize("every_reading_a_sweep", [False, True])
def test_they_stay_few_and_lose_nothing(field_of: object, every_reading_a_sweep: bool) -> None:
    rng = random.Random(3)
    segments, readings, taken = Segments("hall", 1.0), [], Pool()
    for k in range(1500):
        field = field_of(k, rng)  # type: ignore[operator]
        sweep = k if every_reading_a_sweep else k // 40
        readings.append((sweep, 0.2 * k, field, 2000 * field + rng.gauss(0, 1), 1.0))
        if segments.add(*readings[-1]):
            taken.take(segments.closed[-1])
    assert len(segments.closed) <= MAX_SEGMENTS
    product = batch(readings)
    scale = np.sqrt(np.outer(np.diag(product), np.diag(product)))
    pool = pooled(segments)
    assert pool.count == len(readings)
    assert (pool.triangle.T @ pool.triangle) / scale == pytest.approx(product / scale, abs=1e-11)
    # Who takes each segment as it is closed has every reading once as well.
    assert segments.active is not None
    taken.take(segments.active)
    assert taken.count == len(readings)


def test_a_copy_of_a_pool_is_its_own() -> None:
    segments = fed(ramp(300))
    pool = pooled(segments)
    kept = pool.triangle.copy()
    copy = pool.copy()
    copy.take(segments.closed[0])
    assert np.array_equal(pool.triangle, kept)
    assert (copy.count, pool.count) == (300 + segments.closed[0].count, 300)
    assert segments.closed[0].qr.count < 60


def test_both_directions_need_a_fair_share() -> None:
    assert not pooled(fed(ramp(400))).both_directions
    assert not pooled(fed(ramp(400, first=-0.05))).both_directions
    assert pooled(fed(ramp(400, first=-0.6))).both_directions
    assert not pooled(fed(ramp(18, first=-1.0))).both_directions


@pytest.mark.parametrize("scale", [1e-14, 1e-3, 1.0, 1e4])
def test_bins_are_octaves_of_the_magnitude(scale: float) -> None:
    assert field_bin(scale) == field_bin(-scale) >= 0
    assert field_bin(0.0) == 0
    if scale >= 1e-3:
        assert field_bin(2 * scale) - field_bin(scale) == 6


def test_an_empty_pool() -> None:
    pool = Pool()
    assert (pool.count, pool.kappa, pool.effective) == (0, 1.0, 0.0)
    assert not pool.both_directions
    assert pool.triangle.shape == (COLUMNS + 1, COLUMNS + 1)


def test_segments_add_up_like_one_stream() -> None:
    one, other = SquareRootInformation(COLUMNS), fed(ramp(90))
    for _, _, field, rho, _ in ramp(90):
        one.update(regressors("hall", field), rho)
    first = other.closed[0]
    for segment in other.all()[1:]:
        first.join(segment)
    assert first.count == 90
    assert first.qr.triangle()[:2, :2] == pytest.approx(one.triangle()[:2, :2], rel=1e-9)
    assert (first.start_s, first.end_s) == pytest.approx((0.0, 0.2 * 89))
