"""The GUM's own worked examples through what the tool computes with.

JCGM 100:2008, Annex H.2 (resistance and reactance, Tables H.2 to H.4) and H.3 (calibration of a
thermometer, Table H.6); data as in the test suite of the GTC library, full digits recomputed.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from analyse import Excitation, HallBar, LockinFilter, Signal, SquareRootInformation
from analyse.basis import COLUMNS, HALL_LINE
from analyse.line_fit import LineFit, fit_columns
from analyse.numbers import effective_freedom
from analyse.pairing import Pair, Pairing
from analyse.segments import Pool, Segments
from analyse.setup import Setup

# H.2: volt, milliampere, radian
VOLT = (5.007, 4.994, 5.005, 4.990, 4.999)
MILLIAMPERE = (19.663, 19.639, 19.640, 19.685, 19.678)
PHASE = (1.0456, 1.0438, 1.0468, 1.0428, 1.0433)

# By row of Table H.4, recomputed.
RESISTANCE = (127.6725, 127.8924, 127.5063, 127.7104, 127.8765)
REACTANCE = (220.3216, 219.7883, 220.6447, 218.9715, 219.5084)
IMPEDANCE = (254.6407, 254.2899, 254.8371, 253.4925, 254.0400)

# The GUM's second way (H.2.4), the mean of five: value and standard uncertainty in full digits,
# and as the GUM prints it.
SECOND_WAY = {
    "R": (127.731630483, 0.0712735431786, 127.732, 0.071),
    "X": (219.846894603, 0.29548908561, 219.847, 0.295),
    "Z": (254.260049587, 0.236247501704, 254.260, 0.236),
}
CORRELATION = {"RX": -0.588276855797, "RZ": -0.485064613663, "XZ": 0.992507542132}

# H.3: degree Celsius
T = (21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511)
B = (-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160)


def impedances(detection: str, phase_deg: float = 0.0) -> tuple[list[float], list[float]]:
    """In phase and across, in ohm, of the five rows: as a lock-in gives them, the current read."""
    signal = Signal(detection=detection, phase_deg=phase_deg)  # type: ignore[arg-type]
    setup = Setup(signal, signal, Excitation(measured=Signal()))
    pairing = Pairing(HallBar(1.0, "GaAs"), setup)
    found: list[Pair] = []
    for k, (volt, milliampere, phase) in enumerate(zip(VOLT, MILLIAMPERE, PHASE)):
        angle = phase + math.radians(phase_deg)
        found += pairing.push("field", float(k), 0.0, None, "ok")
        found += pairing.push("current", float(k), milliampere * 1e-3, None, "ok")
        x, y = volt * math.cos(angle), volt * math.sin(angle)
        if detection == "R":
            x = volt
        found += pairing.push("hall", float(k), x, y, "ok")
    for channel in ("field", "current", "longitudinal", "hall"):
        found += pairing.end(channel)
    assert [pair.kind for pair in found] == ["ok"] * 5
    across = [pair.quadrature_ohm for pair in found]
    return [pair.rho_ohm for pair in found], [one for one in across if one is not None]


def mean_of(values: list[float]) -> tuple[float, float]:
    """Mean and its standard uncertainty, from the least squares that the tool uses."""
    information = SquareRootInformation(1)
    for value in values:
        information.update([1.0], value)
    solution = information.solve()
    assert solution is not None
    variance = solution.rss / (len(values) - 1) * solution.inverse[0, 0]
    return float(solution.theta[0]), math.sqrt(variance)


@pytest.mark.parametrize("phase_deg", [0.0, 30.0, -75.0])
def test_h2_rows_in_phase_and_across(phase_deg: float) -> None:
    resistance, reactance = impedances("XY", phase_deg)
    assert resistance == pytest.approx(RESISTANCE, abs=5e-5)
    assert reactance == pytest.approx(REACTANCE, abs=5e-5)


def test_h2_rows_of_the_magnitude() -> None:
    assert impedances("R")[0] == pytest.approx(IMPEDANCE, abs=5e-5)


def test_h2_means_with_their_uncertainty() -> None:
    resistance, reactance = impedances("X")
    found = {"R": resistance, "X": reactance, "Z": impedances("R")[0]}
    for name, (value, u, printed, u_printed) in SECOND_WAY.items():
        mean, error = mean_of(found[name])
        assert mean == pytest.approx(value, rel=1e-11)
        assert error == pytest.approx(u, rel=1e-9)
        assert round(mean, 3) == printed
        assert round(error, 3) == u_printed
    correlations = np.corrcoef([found[name] for name in "RXZ"])
    for pair, r in CORRELATION.items():
        one, other = ("RXZ".index(name) for name in pair)
        assert correlations[one, other] == pytest.approx(r, rel=1e-8)


def calibration(t_0: float) -> LineFit:
    """H.3's line through the fit that the Hall resistivity gets, t - t_0 in the place of field.

    The five regressors need their determinants to be far from zero, so 20 K are one unit.
    """
    segments, pool = Segments("hall", 20.0), Pool()
    for k, (t, b) in enumerate(zip(T, B)):
        segments.add(0, float(k), t - t_0, b, 1.0)
    for segment in segments.all():
        pool.take(segment)
    fit = fit_columns(pool, HALL_LINE)
    assert fit is not None
    return fit


def at(fit: LineFit, t: float, t_0: float) -> tuple[float, float]:
    """The correction at a temperature and its standard uncertainty."""
    row = [0.0] * COLUMNS
    row[0], row[1] = 1.0, (t - t_0) / 20.0
    value, leverage = fit.predict(row)
    return value, math.sqrt(fit.variance * leverage)


def test_h3_line() -> None:
    fit = calibration(20.0)
    y1, y2 = fit.theta[0], fit.theta[1] / 20.0
    s1, s2 = fit.standard_error(0), fit.standard_error(1) / 20.0
    assert (y1, s1) == pytest.approx((-0.171203790131, 0.00287759783516), rel=1e-10)
    assert (y2, s2) == pytest.approx((0.00218269773989, 0.000667938773228), rel=1e-10)
    assert (round(y1, 4), round(s1, 4)) == (-0.1712, 0.0029)  # as printed
    assert (round(y2, 5), round(s2, 5)) == (0.00218, 0.00067)
    assert math.sqrt(fit.s2) == pytest.approx(0.00349756396351, rel=1e-10)  # printed 0.0035: memory
    assert fit.nu == 9


def test_h3_correlation_of_the_two_coefficients() -> None:
    information = SquareRootInformation(2)
    for t, b in zip(T, B):
        information.update([1.0, t - 20.0], b)
    solution = information.solve()
    assert solution is not None
    assert solution.rss == pytest.approx(1.10096583109e-4, rel=1e-11)
    inverse = solution.inverse
    r = inverse[0, 1] / math.sqrt(inverse[0, 0] * inverse[1, 1])
    assert r == pytest.approx(-0.930429603093, rel=1e-11)
    assert round(r, 3) == -0.930  # as printed


def test_h3_predicted_correction_at_30_degrees() -> None:
    value, u = at(calibration(20.0), 30.0, 20.0)
    assert (value, u) == pytest.approx((-0.149376812732, 0.00413859575285), rel=1e-10)
    assert (round(value, 4), round(u, 4)) == (-0.1494, 0.0041)  # as printed


def test_h3_about_the_mean_temperature() -> None:
    # Printed values from memory: -0.1625, 0.0011, no correlation, the same u at 30 degrees.
    t_0 = sum(T) / len(T)
    assert t_0 == pytest.approx(24.0084545455, rel=1e-11)
    fit = calibration(t_0)
    assert fit.theta[0] == pytest.approx(-0.1624545455, rel=1e-9)
    assert fit.standard_error(0) == pytest.approx(0.00105455521, rel=1e-8)
    assert at(fit, 30.0, t_0) == pytest.approx((-0.149376812732, 0.00413859575285), rel=1e-9)


def test_type_a_uncertainty_of_correlated_readings_is_wider() -> None:
    """The GUM's line takes readings as independent; behind a filter they share their noise."""
    stages = LockinFilter(0.3, 4)
    widths = []
    for kappa in (1.0, stages.inflation(0.2)):
        segments, pool = Segments("hall", 1.0), Pool()
        rng = np.random.default_rng(1)
        for k in range(400):
            segments.add(0, 0.2 * k, k / 400, 2000 * k / 400 + rng.normal(), kappa)
        for segment in segments.all():
            pool.take(segment)
        fit = fit_columns(pool, HALL_LINE)
        assert fit is not None
        assert fit.nu == pytest.approx(400 / kappa - 2)
        widths.append(fit.standard_error(1))
    assert widths[1] / widths[0] == pytest.approx(math.sqrt(stages.inflation(0.2)), rel=0.05)


def test_effective_degrees_of_freedom_of_the_end_gauge() -> None:
    """GUM example H.1.6, from memory: four parts in nm, combined variance 1002 nm^2, 16.7."""
    parts = [(25.0, 18.0), (9.7, 25.6), (2.9, 50.0), (16.6, 2.0)]
    assert effective_freedom(math.sqrt(1002.0), parts) == pytest.approx(16.7, abs=0.05)
    assert math.isinf(effective_freedom(1.0, []))
    assert math.isinf(effective_freedom(0.0, parts))
    assert effective_freedom(3.0, [(3.0, 7.0)]) == pytest.approx(7.0)
