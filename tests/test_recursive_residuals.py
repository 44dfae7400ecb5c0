"""Recursive residuals and their cumulated sum against statsmodels and the original formulas.

Brown, Durbin, Evans, JRSS B 37, 149 (1975). statsmodels' cusum differs from theirs in two things: it
divides by the standard deviation about the mean, and its bound at 10 % has 0.950 for 0.850; so
its residuals are taken as they are, and the rest is checked against numbers recomputed by hand.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.stats import norm
from statsmodels.regression.recursive_ls import RecursiveLS
from strd import NORRIS

from analyse import SquareRootInformation


def recursive(design: np.ndarray, y: np.ndarray) -> np.ndarray:
    information = SquareRootInformation(design.shape[1])
    found = []
    for row, value in zip(design, y):
        information.update(row, value)
        found.append(information.residual)
    return np.array(found)


def boundary(alpha: float) -> float:
    """a of the boundary, by its authors' equation."""
    return float(brentq(
        lambda a: norm.sf(3 * a) + math.exp(-4 * a * a) * norm.cdf(a) - alpha / 2, 0.5, 2.0
    ))


def test_residuals_against_statsmodels() -> None:
    rng = np.random.default_rng(4)
    u = np.linspace(0.0, 1.0, 60)
    design = np.stack([np.ones_like(u), u, u**3], axis=1)
    y = design @ [1.0, -3.0, 0.4] + 0.1 * rng.standard_normal(60)
    fit = RecursiveLS(y, design).fit()
    ours = recursive(design, y)
    assert ours[:3] == pytest.approx(0.0, abs=1e-12)
    assert ours[3:] == pytest.approx(fit.resid_recursive[3:], rel=1e-6, abs=1e-9)
    assert float(ours @ ours) == pytest.approx(fit.ssr, rel=1e-9)


def test_norris_by_hand() -> None:
    """NIST's Norris data; values recomputed from the formulas."""
    ours = recursive(NORRIS.design, NORRIS.y)
    first = [-0.4222955, -0.14835727, -0.56914126, 0.96308611, -0.39153454, -1.27121842]
    assert ours[2:8] == pytest.approx(first, abs=1e-6)
    assert float(ours @ ours) == pytest.approx(26.6173985294, rel=1e-10)
    s = math.sqrt(float(ours @ ours) / 34)
    assert s == pytest.approx(0.8847963961, rel=1e-9)
    assert float(ours.sum()) / s == pytest.approx(-18.97768337, rel=1e-7)
    squares = np.cumsum(ours[2:] ** 2) / float(ours @ ours)
    assert squares[:4] == pytest.approx([0.00669988, 0.00752678, 0.01969633, 0.05454327], abs=1e-7)


def test_the_two_faults_of_the_reference_are_still_what_they_were() -> None:
    """So that nobody compares with its cusum as it stands: should this fail, it has been mended."""
    fit = RecursiveLS(NORRIS.y, NORRIS.design).fit()
    ours = recursive(NORRIS.design, NORRIS.y)[2:]
    assert fit.cusum[-1] == pytest.approx(ours.sum() / np.std(ours, ddof=1), rel=1e-6)
    low, high = fit._cusum_significance_bounds(0.10, points=np.array([2.0]))
    assert float(np.ravel(high)[0]) == pytest.approx(0.950 * math.sqrt(34), rel=1e-6)
    assert boundary(0.10) == pytest.approx(0.849931, abs=1e-6)
    assert boundary(0.05) == pytest.approx(0.947899, abs=1e-6)
    assert boundary(0.01) == pytest.approx(1.142974, abs=1e-6)


def test_a_jump_shows_in_the_cumulated_sum_and_white_noise_does_not() -> None:
    """200 series of 100; the boundary at 1 % is passed by at most 2.5 % of the white ones (its true
    size is below the nominal one; Monte Carlo error 0.7 %), and by all where the level jumps by 2 half-way."""
    rng = np.random.default_rng(6)
    u = np.linspace(0.0, 1.0, 100)
    design = np.ones((100, 1))
    bound = boundary(0.01) * math.sqrt(99) * (1 + 2 * np.arange(1, 100) / 99)
    passed = {0.0: 0, 2.0: 0}
    for jump in passed:
        for _ in range(200):
            y = 1 + jump * (u > 0.5) + rng.standard_normal(100)
            w = recursive(design, y)[1:]
            total = np.cumsum(w) / math.sqrt(float(w @ w) / 99)
            passed[jump] += bool((np.abs(total) > bound).any())
    assert passed[0.0] <= 5
    assert passed[2.0] == 200
