"""Least squares by square-root information against NIST's certified values and statsmodels."""

from __future__ import annotations

import itertools
import math
import pickle

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from strd import DATASETS, NORRIS, Dataset

from analyse import SquareRootInformation
from analyse.square_root import inverse_root, triangle_of

# The digits that a QR decomposition in double precision reaches on each set (Norris 12.5, Pontius
# 13.9, Longley 10.9, against exact rational arithmetic on NIST's printed data), less one; on
# Pontius less two, for one rotation after the other.
DIGITS = {"Norris": 11.5, "Pontius": 11.9, "NoInt1": 13.0, "Longley": 9.9}


def streamed(design: np.ndarray, y: np.ndarray) -> SquareRootInformation:
    """One observation at a time."""
    information = SquareRootInformation(design.shape[1])
    for row, value in zip(design, y):
        information.update(row, value)
    return information


def digits(found: float, certified: float) -> float:
    """Log relative error: how many digits agree (15 at most, as NIST prints 15)."""
    return min(15.0, -math.log10(max(abs(found / certified - 1.0), 1e-15)))


@pytest.mark.parametrize("data", DATASETS, ids=lambda data: data.name)
def test_nist_certified_values(data: Dataset) -> None:
    solution = streamed(data.design, data.y).solve()
    assert solution is not None
    residual_sd = math.sqrt(solution.rss / (len(data.y) - len(solution.theta)))
    assert digits(residual_sd, data.residual_sd) > DIGITS[data.name]
    errors = residual_sd * np.sqrt(np.diag(solution.inverse))
    for theta, error, (estimate, deviation) in zip(solution.theta, errors, data.certified):
        assert digits(theta, estimate) > DIGITS[data.name]
        assert digits(error, deviation) > DIGITS[data.name]


def test_norris_covariance_of_the_two_coefficients() -> None:
    # Exact rational arithmetic on NIST's data: -7.74327536315643622e-05.
    solution = streamed(NORRIS.design, NORRIS.y).solve()
    assert solution is not None
    covariance = solution.inverse[0, 1] * solution.rss / 34
    assert digits(covariance, -7.74327536315643622e-05) > 11.5


@pytest.mark.parametrize("data", DATASETS, ids=lambda data: data.name)
def test_every_prefix_is_statsmodels_ols(data: Dataset) -> None:
    # Columns scaled to 1, or statsmodels' pseudo-inverse cuts off the small singular values.
    scale = np.abs(data.design).max(axis=0)
    design = data.design / scale
    p = design.shape[1]
    information = SquareRootInformation(p)
    for count in range(1, len(data.y) + 1):
        information.update(design[count - 1], data.y[count - 1])
        assert information.count == count
        rank = np.linalg.matrix_rank(design[:count], tol=1e-11)
        assert information.rank == rank
        solution = information.solve()
        if rank < p:
            assert solution is None
            continue
        assert solution is not None
        if count <= p + 1:
            continue  # statsmodels has no variance yet, or one of rounding errors
        reference = sm.OLS(data.y[:count], design[:count]).fit(method="pinv")
        condition = np.linalg.cond(design[:count])
        apart = np.abs(solution.theta - reference.params)
        assert np.all(apart < 1e-6 * reference.bse)
        size = np.linalg.norm(reference.params)
        assert np.all(apart < (1e-12 + 1e-15 * condition) * size)
        assert solution.rss == pytest.approx(reference.ssr, rel=1e-14 * condition + 1e-10)
        variances = np.diag(reference.normalized_cov_params)
        assert np.diag(solution.inverse) == pytest.approx(variances, rel=1e-13 * condition + 1e-9)


def test_rank_is_seen_from_the_first_observation_on() -> None:
    information = SquareRootInformation(3)
    assert (information.rank, information.solve()) == (0, None)
    for count, t in enumerate((0.1, 0.2, 0.3), start=1):
        information.update([1.0, t, t * t], 2.0)
        assert information.rank == count
    assert information.solve() is not None


def test_rank_stays_while_the_regressor_stands_still() -> None:
    information = SquareRootInformation(2)
    for _ in range(4000):
        information.update([1.0, 0.25], 3.0)
    assert (information.rank, information.solve()) == (1, None)
    information.update([1.0, 0.26], 3.02)
    solution = information.solve()
    assert solution is not None
    assert solution.theta == pytest.approx([2.5, 2.0], rel=1e-9)


def test_an_ill_conditioned_line_of_time() -> None:
    # 1, t, t^2 over t = 300..300.5 has condition 4e11; the covariance form is lost at step 1.
    t = np.linspace(300.0, 300.5, 500)
    design = np.column_stack([np.ones_like(t), t, t**2])
    y = 4.0 - 0.5 * (t - 300.25) + 2.0 * (t - 300.25) ** 2
    solution = streamed(design, y).solve()
    assert solution is not None
    assert design @ solution.theta == pytest.approx(y, abs=1e-8)


@pytest.mark.parametrize("offset", [0.0, 1.0, 1e3, 1e6, 1e9])
def test_scatter_beside_a_large_offset(offset: float) -> None:
    noise = np.random.default_rng(3).standard_normal(2000)
    y = offset + noise
    solution = streamed(np.ones((2000, 1)), y).solve()
    assert solution is not None
    expected = float(np.sum((y - y.mean()) ** 2))
    assert solution.rss == pytest.approx(expected, rel=1e-6)
    assert solution.rss >= 0


@given(
    st.lists(
        st.tuples(
            st.floats(-1, 1), st.floats(-1, 1), st.floats(-1e3, 1e3, allow_subnormal=False)
        ),
        min_size=1,
        max_size=30,
    ),
    st.integers(0, 30),
)
@settings(max_examples=60, deadline=None)
def test_merged_triangles_are_one_stream(
    rows: list[tuple[float, float, float]], cut: int
) -> None:
    table = np.array(rows)
    design, y = np.column_stack([np.ones(len(table)), table[:, :2]]), table[:, 2]
    whole = streamed(design, y)
    first, second = streamed(design[:cut], y[:cut]), streamed(design[cut:], y[cut:])
    kept = second.triangle()
    first.merge(second)
    assert first.count == whole.count
    assert np.array_equal(second.triangle(), kept)
    # The same information: R'R is X'X, whatever the order was.
    product = whole.triangle().T @ whole.triangle()
    assert first.triangle().T @ first.triangle() == pytest.approx(product, rel=1e-9, abs=1e-9)
    augmented = np.column_stack([design, y])
    assert product == pytest.approx(augmented.T @ augmented, rel=1e-9, abs=1e-9)


def test_merge_refuses_another_size() -> None:
    with pytest.raises(ValueError, match="different size"):
        SquareRootInformation(2).merge(SquareRootInformation(3))


@pytest.mark.parametrize(
    ("row", "y"),
    [([1.0], 1.0), ([1.0, 2.0, 3.0], 1.0), ([1.0, math.nan], 1.0), ([1.0, 2.0], math.inf)],
)
def test_a_bad_observation_changes_nothing(row: list[float], y: float) -> None:
    information = SquareRootInformation(2)
    information.update([1.0, 0.5], 2.0)
    before = information.triangle()
    with pytest.raises(ValueError, match="expected 2|finite"):
        information.update(row, y)
    assert np.array_equal(information.triangle(), before)
    assert information.count == 1


def test_needs_a_regressor() -> None:
    with pytest.raises(ValueError, match="at least one"):
        SquareRootInformation(0)


def test_input_and_state_are_not_shared() -> None:
    information = SquareRootInformation(2)
    row = [1.0, 0.5]
    assert information.update(row, 2.0) is None  # type: ignore[func-returns-value]
    assert row == [1.0, 0.5]
    information.triangle()[:] = 7.0
    assert information.triangle()[1, 1] == 0.0


def test_pickled_in_mid_stream_it_goes_on_to_the_last_bit() -> None:
    whole = streamed(NORRIS.design, NORRIS.y)
    half = pickle.loads(pickle.dumps(streamed(NORRIS.design[:17], NORRIS.y[:17])))
    for row, value in zip(NORRIS.design[17:], NORRIS.y[17:]):
        half.update(row, value)
    assert half.rows == whole.rows


def test_triangle_of_is_numpys_but_for_signs() -> None:
    rows = np.random.default_rng(5).standard_normal((40, 4))
    kept = rows.copy()
    assert np.abs(triangle_of(rows)) == pytest.approx(np.abs(np.linalg.qr(rows)[1]), rel=1e-12)
    assert np.array_equal(rows, kept)


def test_inverse_root_and_where_it_refuses() -> None:
    triangle = np.triu(np.random.default_rng(6).standard_normal((4, 4))) + 3 * np.eye(4)
    inverse = inverse_root(triangle.tolist(), 4)
    assert inverse is not None
    assert np.array(inverse) == pytest.approx(np.linalg.inv(triangle), rel=1e-12, abs=1e-15)
    triangle[2, 2] = 1e-10 * np.linalg.norm(triangle[:, 2])
    assert inverse_root(triangle.tolist(), 4) is None
    assert inverse_root(triangle.tolist(), 2) is not None


@pytest.mark.parametrize("order", list(itertools.permutations(range(3))))
def test_observations_in_another_order(order: tuple[int, ...]) -> None:
    rows = [([1.0, 0.1], 1.0), ([1.0, 0.7], 2.0), ([1.0, -0.4], 0.5)]
    plain, other = SquareRootInformation(2), SquareRootInformation(2)
    for k in range(3):
        plain.update(*rows[k])
        other.update(*rows[order[k]])
    one, two = plain.solve(), other.solve()
    assert one is not None
    assert two is not None
    assert two.theta == pytest.approx(one.theta, rel=1e-13)
    assert two.rss == pytest.approx(one.rss, rel=1e-11)
