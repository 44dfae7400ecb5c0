"""Noise with a given spectrum behind RC stages: drawn, and its autocovariance.

A one-sided spectral density S(f) of the readings (aliases folded in) is put on the frequencies of
a record several times as long as the ramp; normal amplitudes on them give a stationary sequence
whose autocovariance is exactly the cosine sum of the same numbers. The lowest frequency is that
of the long record, so 1/f noise is cut there.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from bench.rc_stages import Array, RCStages

LONGER = 4
"""Length of the record over the length of the ramp."""

Spectrum = Callable[[Array], Array]


def flicker(density: float, corner_Hz: float, stages: RCStages) -> Spectrum:
    """The 1/f part of noise that is white above ``corner_Hz``: density^2 corner/f, filtered."""

    def spectrum(frequency_Hz: Array) -> Array:
        f = np.asarray(frequency_Hz, float)
        safe = np.where(f > 0, f, 1.0)
        return np.where(f > 0, density**2 * corner_Hz / safe * stages.power_gain(f), 0.0)

    return spectrum


def interpolated_readings(variance: float, spacing_s: float, stages: RCStages) -> Spectrum:
    """Independent errors of evenly spaced readings, joined by straight lines, then filtered."""

    def spectrum(frequency_Hz: Array) -> Array:
        f = np.asarray(frequency_Hz, float)
        return 2.0 * variance * spacing_s * np.sinc(f * spacing_s) ** 4 * stages.power_gain(f)

    return spectrum


def _line_powers(spectrum: Spectrum, count: int, spacing_s: float) -> Array:
    """Variance at each frequency of the long record, aliases folded in."""
    length = LONGER * count
    f = np.fft.rfftfreq(length, spacing_s)
    powers = spectrum(f)
    for fold in range(1, 25):
        more = spectrum(fold / spacing_s - f) + spectrum(fold / spacing_s + f)
        powers = powers + more
        if more.max() < 1e-9 * powers.max():
            break
    powers = powers / (length * spacing_s)
    powers[0] *= 0.5                    # one line where the others stand for two
    if length % 2 == 0:
        powers[-1] *= 0.5
    return np.asarray(powers)


def draw_noise(
    rng: np.random.Generator, spectrum: Spectrum, count: int, spacing_s: float
) -> Array:
    """A stationary normal sequence of that spectrum, (count,)."""
    powers = _line_powers(spectrum, count, spacing_s)
    length = LONGER * count
    cosines, sines = rng.standard_normal((2, len(powers)))
    lines = (cosines - 1j * sines) * np.sqrt(powers) * (length / 2.0)
    lines[0] = cosines[0] * np.sqrt(powers[0]) * length
    if length % 2 == 0:
        lines[-1] = cosines[-1] * np.sqrt(powers[-1]) * length
    return np.asarray(np.fft.irfft(lines, length)[:count])


def autocovariance(spectrum: Spectrum, count: int, spacing_s: float) -> Array:
    """Autocovariance of what :func:`draw_noise` draws, at lags 0..count-1."""
    powers = _line_powers(spectrum, count, spacing_s)
    length = LONGER * count
    lines = powers * (length / 2.0)
    lines[0] = powers[0] * length
    if length % 2 == 0:
        lines[-1] = powers[-1] * length
    return np.asarray(np.fft.irfft(lines, length)[:count])
