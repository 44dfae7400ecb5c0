"""Confidence sequences against published numbers, and their coverage against naive intervals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import t as t_distribution
from strd import NORRIS

from analyse import SquareRootInformation, normal_mixture, t_radius
from analyse.confidence import Evidence, best_phi

# Lindon, Ham, Tingley, Bojinov, arXiv 2210.08589, in the form with phi fixed before the data;
# formula as in the first author's package avlm, numbers recomputed.
PHI_FORM = [
    (50 - 2, 50.0, 1.0, 3.32266430992),
    (200 - 2, 2000.0, 10.0, 3.40943736685),
    (1000 - 2, 333333.0, 100.0, 3.76744145582),
]

# The same package's g form is the phi form with r = g / (g + n); two coefficients, g = 1.
G_FORM = [
    (10, 4.002312688),
    (30, 3.354997313),
    (100, 3.347539742),
    (300, 3.454239020),
    (1000, 3.603333579),
    (5000, 3.811815879),
]

# Norris (NIST StRD), slope with phi = 1e4: readings, slope, radius, interval.
NORRIS_SLOPE = [
    (10, 1.00312276933413, 4.366361763, (1.00031022614, 1.00593531253)),
    (20, None, 3.840391375, (1.00189005954, 1.00481421695)),
    (36, 1.00211681802045, 3.743049947, (1.00050806695, 1.00372556909)),
]


@pytest.mark.parametrize(("nu", "z2", "phi", "radius"), PHI_FORM)
def test_radius_in_the_phi_form(nu: float, z2: float, phi: float, radius: float) -> None:
    assert t_radius(nu, z2, phi, 0.05) == pytest.approx(radius, rel=1e-11)


@pytest.mark.parametrize(("n", "radius"), G_FORM)
def test_radius_in_the_g_form(n: int, radius: float) -> None:
    assert t_radius(n - 2, float(n), 1.0, 0.05) == pytest.approx(radius, rel=1e-9)


def test_published_example_of_the_package() -> None:
    # README of avlm: n = 100, 8 coefficients, optimal g = 11.5815: radius 3.1040 (5 digits);
    # p values 9.77e-6 at t = 5.776 and 3.19e-14 at t = 10.769.
    assert t_radius(92, 100.0, 11.5815, 0.05) == pytest.approx(3.103938, rel=1e-6)
    assert math.exp(-Evidence(92, 100.0, ((1.0, 11.5815),)).against(5.776)) == pytest.approx(9.77e-6, rel=2e-3)
    assert math.exp(-Evidence(92, 100.0, ((1.0, 11.5815),)).against(10.769)) == pytest.approx(3.19e-14, rel=2e-3)


@pytest.mark.parametrize(("n", "slope", "radius", "interval"), NORRIS_SLOPE)
def test_norris_slope(
    n: int, slope: float | None, radius: float, interval: tuple[float, float]
) -> None:
    information = SquareRootInformation(2)
    for row, y in zip(NORRIS.design[:n], NORRIS.y[:n]):
        information.update(row, y)
    solution = information.solve()
    assert solution is not None
    error = math.sqrt(solution.rss / (n - 2) * solution.inverse[1, 1])
    if n == 10:
        assert error == pytest.approx(6.44138837966e-4, rel=1e-10)
    if n == 36:
        assert t_distribution.isf(0.025, 34) == pytest.approx(2.0322445, rel=1e-7)
    found = t_radius(n - 2, 1 / solution.inverse[1, 1], 1e4, 0.05)
    assert found == pytest.approx(radius, rel=1e-9)
    if slope is not None:
        assert solution.theta[1] == pytest.approx(slope, rel=1e-13)
    ends = (solution.theta[1] - found * error, solution.theta[1] + found * error)
    assert ends == pytest.approx(interval, rel=1e-11)


@pytest.mark.parametrize("alpha", [0.2, 0.05, 0.01, 1e-4])
@pytest.mark.parametrize("nu", [3.5, 10.0, 400.0])
@pytest.mark.parametrize("z2", [0.3, 20.0, 1e5])
def test_evidence_at_the_radius_is_one_over_alpha(alpha: float, nu: float, z2: float) -> None:
    radius, evidence = t_radius(nu, z2, 1.0, alpha), Evidence(nu, z2, ((1.0, 1.0),))
    if math.isfinite(radius):
        assert math.exp(evidence.against(radius)) == pytest.approx(1 / alpha, rel=1e-9)
    assert evidence.against(0.0) == evidence.at_estimate < 0.0


@pytest.mark.parametrize(
    ("nu", "z2", "phi", "alpha"),
    [(0.0, 1.0, 1.0, 0.05), (-1.0, 1.0, 1.0, 0.05), (5.0, 0.0, 1.0, 0.05), (5.0, 1.0, 0.0, 0.05),
     (5.0, 1.0, 1.0, 0.0), (5.0, 1.0, 1.0, 1.0), (0.5, 0.01, 1.0, 0.05)],
)  # fmt: skip
def test_no_bound_yet(nu: float, z2: float, phi: float, alpha: float) -> None:
    assert t_radius(nu, z2, phi, alpha) == math.inf


def test_the_first_readings_have_no_bound_until_they_suffice() -> None:
    radii = [t_radius(n - 2, n**3 / 12, 1.0, 0.05) for n in range(3, 400)]
    bounded = [radius for radius in radii if math.isfinite(radius)]
    assert radii[0] == math.inf
    assert radii[len(radii) - len(bounded) :] == bounded
    fixed = [t_distribution.isf(0.025, n - 2) for n in range(400 - len(bounded), 400)]
    assert all(one > two for one, two in zip(bounded, fixed))


def test_normal_mixture_boundary() -> None:
    # Howard, Ramdas, McAuliffe, Sekhon, Ann. Statist. 49, 1055 (2021), as in the unit tests of
    # the authors' library: optimal at v = 100, alpha = 0.05.
    assert best_phi(100.0, 0.05) == pytest.approx(12.60056, rel=1e-6)
    assert normal_mixture(100.0, 12.60056, 0.05) == pytest.approx(30.35209, rel=1e-6)


@pytest.mark.parametrize(
    ("v", "u"), [(10, 12.0900779), (100, 30.3512241303), (1000, 102.65736), (10000, 356.63586)]
)
def test_normal_mixture_at_its_exact_optimum(v: float, u: float) -> None:
    # rho = v / (-W_-1(-alpha^2 / e) - 1) at v = 100, alpha = 0.05; recomputed.
    assert normal_mixture(v, 12.177348870, 0.05) == pytest.approx(u, rel=1e-7)


def test_best_phi_is_close_to_the_narrowest() -> None:
    phis = np.geomspace(1e-3, 1e3, 2001)
    radii = [t_radius(300.0, 50.0, phi, 0.05) for phi in phis]
    assert t_radius(300.0, 50.0, best_phi(50.0, 0.05), 0.05) < 1.001 * min(radii)


def test_coverage_at_every_moment_of_a_ramp() -> None:
    """400 ramps of 1000 readings; the fixed-sample interval misses the truth somewhere in most."""
    rng = np.random.default_rng(20)
    count, ramps = 1000, 400
    x = np.linspace(0.0, 1.0, count)
    y = 0.3 + 2.0 * x + rng.standard_normal((ramps, count))
    looked_at = np.unique(np.geomspace(3, count, 120).astype(int))
    held, held_fixed = np.ones(ramps, bool), np.ones(ramps, bool)
    for n in looked_at:
        centred = x[:n] - x[:n].mean()
        z2 = float(centred @ centred)
        slope = y[:, :n] @ centred / z2
        level = y[:, :n].mean(axis=1)
        rss = ((y[:, :n] - level[:, None] - slope[:, None] * centred) ** 2).sum(axis=1)
        error = np.sqrt(rss / max(n - 2, 1) / z2)
        away = np.abs(slope - 2.0)
        held &= away <= error * t_radius(n - 2, z2, 0.5, 0.05)
        held_fixed &= away <= error * t_distribution.isf(0.025, n - 2)
    # 4 binomial standard deviations
    assert held.mean() > 0.95 - 4 * math.sqrt(0.05 * 0.95 / ramps)
    assert held_fixed.mean() < 0.5
