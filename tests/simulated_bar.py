"""Readings of a simulated Hall bar, for the tests of the estimator. Shares no code with analyse.

Field and voltages are made on a fine grid; the voltages, noise included, pass the same cascade of
RC stages, each exact for an input that is straight between grid points.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter, lfiltic

ELECTRON_C = 1.602176634e-19
BANDWIDTH = {1: 1 / 4, 2: 1 / 8, 3: 3 / 32, 4: 5 / 64}  # times 1/T: one-sided noise bandwidth

Row = tuple[str, float, float | None, float | None, str]
Streams = dict[str, list[Row]]


def cascade(values: np.ndarray, step_s: float, T: float, poles: int) -> np.ndarray:
    """Behind ``poles`` RC stages of time constant T, from a state of rest at the first value."""
    s = step_s / T
    decay = math.exp(-s)
    old, new = (1 - decay) / s - decay, 1 - (1 - decay) / s
    for _ in range(poles):
        state = lfiltic([new, old], [1.0, -decay], [values[0]], [values[0]])
        values, _ = lfilter([new, old], [1.0, -decay], values, zi=state)
    return values


@dataclass(frozen=True)
class Sample:
    """A single kind of carriers and how it is measured. ``density_per_m2`` < 0: electrons.

    ``corners``: (time in s, field in T), straight between; ``filter``: time constant and poles;
    ``noise_V``: standard deviation behind the filter; ``misaligned``: squares of the longitudinal
    resistivity in the Hall voltage.
    """

    density_per_m2: float = 3e15
    mobility: float = 20.0
    squares: float = 4.0
    current_A: float = 1e-6
    corners: tuple[tuple[float, float], ...] = ((0.0, 0.0), (60.0, 1.0))
    filter: tuple[float, int] | None = (0.3, 4)
    noise_V: float = 2e-7
    period_s: float = 0.2
    offset_s: float = 0.07
    misaligned: float = 0.0

    @property
    def slope(self) -> float:
        """Hall slope in ohm per tesla."""
        return 1 / (self.density_per_m2 * ELECTRON_C)

    @property
    def rho_0(self) -> float:
        """Longitudinal resistivity in ohm."""
        return abs(self.slope) / self.mobility

    def field(self, time_s: np.ndarray) -> np.ndarray:
        """Field in T."""
        times, fields = zip(*self.corners)
        return np.asarray(np.interp(time_s, times, fields))

    def streams(self, seed: int = 1) -> Streams:
        """Field, longitudinal and Hall readings, each a list of (channel, time, x, y, status)."""
        rng = np.random.default_rng(seed)
        last_s = self.corners[-1][0]
        T, poles = self.filter or (self.period_s, 0)
        step = min(T / 20, self.period_s / 4)
        fine = np.arange(-20 * T if poles else 0.0, last_s + step, step)
        per_step = self.noise_V
        if poles:
            per_step /= math.sqrt(2 * step * BANDWIDTH[poles] / T)
        along = np.full_like(fine, self.current_A * self.rho_0 * self.squares)
        rho_xy = self.slope * self.field(fine) + self.misaligned * self.rho_0
        volts = {"longitudinal": along, "hall": self.current_A * rho_xy}
        times = np.arange(0.0, last_s, self.period_s)
        field = self.field(times)
        out: Streams = {
            "field": [("field", float(t), float(b), None, "ok") for t, b in zip(times, field)]
        }
        for role, clean in volts.items():
            noisy = cascade(clean + per_step * rng.standard_normal(len(fine)), step, T, poles)
            read = np.interp(times + self.offset_s, fine, noisy) if poles else (
                np.interp(times + self.offset_s, fine, clean)
                + self.noise_V * rng.standard_normal(len(times))
            )
            out[role] = [
                (role, float(t + self.offset_s), float(v), None, "ok") for t, v in zip(times, read)
            ]
        return out


def by_time(streams: Streams) -> list[Row]:
    """All rows in the order of their times."""
    return sorted((row for rows in streams.values() for row in rows), key=lambda row: row[1])
