"""Equal RC stages in a row, as they stand behind a lock-in: exact responses and exact noise.

n stages of time constant T answer an impulse by the density of a gamma distribution of shape n
and scale T. So a step is answered by P(n, t/T), the regularised incomplete gamma function, and
a ramp by its integral, t P(n, t/T) - n T P(n+1, t/T).

White noise of one-sided density d (V/sqrt(Hz)) has the autocovariance (d^2 / 2) delta(t). Driven
by it, the stages' outputs x_0..x_(n-1) after a time dt are F x + q, with (s = dt / T)
    F_ij = e^-s s^(i-j) / (i-j)!                                       for i >= j,
    cov(q)_ij = d^2/(2 T) binom(i+j, i) 2^-(i+j+1) P(i+j+1, 2 s),
and in the steady state the same without the last factor. No step is approximated.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import comb, factorial
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.signal import fftconvolve, lfilter
from scipy.special import gammainc, gammaincinv

Array = NDArray[Any]
MEMORY = 45.0
"""Time constants after which what came in is forgotten (to 1e-13 for four stages)."""


@dataclass(frozen=True)
class RCStages:
    """``poles`` stages of ``time_constant_s`` each."""

    time_constant_s: float
    poles: int

    @property
    def lag_s(self) -> float:
        """How far the output lags behind a steady ramp."""
        return self.poles * self.time_constant_s

    @property
    def settling_s(self) -> float:
        """Time after which all but 0.1 % of what was before has been forgotten."""
        return float(gammaincinv(self.poles, 0.999)) * self.time_constant_s

    @property
    def integral_time_s(self) -> float:
        """Time that an independent reading takes: the integral of the noise's autocorrelation
        over all lags, which is white noise's density at zero over the variance behind."""
        return 0.5 / float(self.covariance(1.0)[-1, -1])

    def step(self, time_s: Array) -> Array:
        """Output at times after a unit step at zero."""
        s = np.maximum(np.asarray(time_s, float), 0.0) / self.time_constant_s
        return np.asarray(gammainc(self.poles, s))

    def ramp(self, time_s: Array) -> Array:
        """Output at times after a ramp of unit rate begins at zero."""
        t = np.maximum(np.asarray(time_s, float), 0.0)
        s = t / self.time_constant_s
        return np.asarray(t * gammainc(self.poles, s) - self.lag_s * gammainc(self.poles + 1, s))

    def power_gain(self, frequency_Hz: Array) -> Array:
        """|H|^2 at frequencies."""
        turn = (2 * np.pi * self.time_constant_s * np.asarray(frequency_Hz, float)) ** 2
        return np.asarray((1.0 + turn) ** -float(self.poles))

    def follow(self, values: Array, spacing_s: float) -> Array:
        """Output at evenly spaced times for an input that is straight between its values.

        Before the first value the input has always stood at it. Exact for such an input.
        """
        values = np.asarray(values, float)
        first = values[0]
        rest = values - first
        if not rest.any():
            return values.copy()
        count = min(int(MEMORY * self.time_constant_s / spacing_s) + 2, len(values) + 1)
        ramp = self.ramp(spacing_s * np.arange(-1, count + 1))
        weights = np.diff(ramp, 2) / spacing_s
        return np.asarray(first + fftconvolve(rest, weights)[: len(values)])

    def transition(self, after_s: float) -> Array:
        """F: what the stages' states have become after a time without input, (n, n)."""
        s, n = after_s / self.time_constant_s, self.poles
        f = np.zeros((n, n))
        for i in range(n):
            for j in range(i + 1):
                f[i, j] = np.exp(-s) * s ** (i - j) / factorial(i - j)
        return f

    def covariance(self, density: float, after_s: float = np.inf) -> Array:
        """Covariance of the states that white noise builds up in a time, (n, n), in V^2."""
        n, s2 = self.poles, 2.0 * after_s / self.time_constant_s
        scale = density**2 / (2.0 * self.time_constant_s)
        return np.array(
            [
                [
                    scale * comb(i + j, i) * 0.5 ** (i + j + 1)
                    * (1.0 if np.isinf(s2) else float(gammainc(i + j + 1, s2)))
                    for j in range(n)
                ]
                for i in range(n)
            ]
        )

    def white_noise(
        self, rng: np.random.Generator, density: float, count: int, spacing_s: float
    ) -> Array:
        """Filtered white noise at evenly spaced times, from the steady state on, in V."""
        n = self.poles
        if density == 0.0:
            return np.zeros(count)
        start = np.linalg.cholesky(self.covariance(density)) @ rng.standard_normal(n)
        root = np.linalg.cholesky(self.covariance(density, spacing_s))
        drive = rng.standard_normal((count - 1, n)) @ root.T
        f = self.transition(spacing_s)
        states: list[Array] = []
        for i in range(n):
            push = drive[:, i].copy()
            for j in range(i):
                push += f[i, j] * states[j][:-1]
            keep = f[i, i]
            later, _ = lfilter([1.0], [1.0, -keep], push, zi=[keep * start[i]])
            states.append(np.concatenate(([start[i]], later)))
        return states[-1]

    def white_autocovariance(self, density: float, count: int, spacing_s: float) -> Array:
        """Autocovariance of filtered white noise at lags 0, 1, .. count-1 spacings, in V^2."""
        n = self.poles
        steady = self.covariance(density)[:, n - 1]
        s = spacing_s * np.arange(count) / self.time_constant_s
        powers = [s**k / factorial(k) for k in range(n)]
        total = sum(powers[n - 1 - j] * steady[j] for j in range(n))
        return np.asarray(np.exp(-s) * total)
