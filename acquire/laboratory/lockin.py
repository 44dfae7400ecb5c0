"""The inside of a simulated lock-in: what stands at its input and what it shows of it."""

from __future__ import annotations

import math
import zlib
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from acquire.laboratory.cascade import Cascade
from acquire.laboratory.scenario import Lockin

Numbers = NDArray[np.float64]

FORGETS = 60.0
"""Time constants after which the stages hold nothing of what was before (1e-17 for 8 of them)."""
SHORTEST_S = 1e-6  # less is no time at all
LONGEST_S = 0.02  # within so short a step the signal is as good as straight
LONGEST_SHARE = 0.05  # of the time constant: slow filters don't see finer


@dataclass(frozen=True)
class Shown:
    """What a lock-in shows: in volts, cut at full scale, which is what ``overload`` says."""

    x_V: float
    y_V: float
    overload: bool = False


def generator_of(seed: int, name: str) -> np.random.Generator:
    """A source of noise for each instrument, which no other instrument touches."""
    return np.random.default_rng([seed, zlib.crc32(name.encode())])


class SimulatedLockin:
    """Nothing happens inside until it is asked; then its filter catches up with the time.

    Parameters
    ----------
    signal : volts between the contacts against the times of the laboratory, both as arrays.
    seed : the same one gives the same noise when it is asked at the same times.
    """

    def __init__(self, section: Lockin, signal: Callable[[Numbers], Numbers], seed: int) -> None:
        self.section = section
        self.sensitivity_V = section.sensitivity_V
        self.reference_deg = 0.0
        self._signal = signal
        self._generator = generator_of(seed, section.name)
        self._cascade = self._stages(section.poles, section.time_constant_s, np.zeros(2))
        self._at_s = -math.inf

    @property
    def time_constant_s(self) -> float:
        """Of each stage."""
        return self._cascade.time_constant_s

    @property
    def poles(self) -> int:
        """Number of stages."""
        return self._cascade.poles

    def set_filter(self, time_s: float, time_constant_s: float, poles: int) -> None:
        """Change the filter; all its stages begin with what the last one held."""
        self._catch_up(time_s)
        self._cascade = self._stages(poles, time_constant_s, self._cascade.output)

    def shown(self, time_s: float) -> Shown:
        """What it shows at a moment; of the past, what it showed last."""
        self._catch_up(time_s)
        x, y = (float(value) for value in self._cascade.output)
        full = self.sensitivity_V
        over = max(abs(x), abs(y)) > full
        return Shown(max(-full, min(x, full)), max(-full, min(y, full)), over)

    def _stages(self, poles: int, time_constant_s: float, start: Numbers) -> Cascade:
        noise = self.section.noise_V_per_rtHz
        return Cascade(poles, time_constant_s, noise, start, self._generator)

    def _catch_up(self, time_s: float) -> None:
        if time_s - self._at_s < SHORTEST_S:
            return
        horizon_s = time_s - FORGETS * self.time_constant_s
        if self._at_s < horizon_s:
            self._at_s = horizon_s
            self._cascade.settle(self._vectors(np.array([horizon_s]))[0])
        longest_s = max(LONGEST_S, LONGEST_SHARE * self.time_constant_s)
        steps = math.ceil((time_s - self._at_s) / longest_s)
        times, length_s = np.linspace(self._at_s, time_s, steps + 1, retstep=True)
        self._cascade.advance(float(length_s), self._vectors(times))
        self._at_s = time_s

    def _vectors(self, times_s: Numbers) -> Numbers:
        """The signal as X and Y before the filter, shape (times, 2)."""
        angle = math.radians(self.section.phase_deg - self.reference_deg)
        return np.outer(self._signal(times_s), [math.cos(angle), math.sin(angle)])
