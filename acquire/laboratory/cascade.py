"""Equal RC stages in a row, driven by a signal and by white noise; exact for any step of time.

Stage i (1 to n) obeys T dx_i/dt = x_(i-1) - x_i, where x_0 is the input: a signal that is straight
within a step, plus white noise of one-sided spectral density v (in V/rtHz, so v^2/2 per hertz on
both sides). Over a step h, with s = h/T and P the regularised lower incomplete gamma function:

    transition  F_ij = e^-s s^(i-j)/(i-j)!                       for i >= j
    input       from u_0 to u_1: u_0 P(i, s) + (u_1 - u_0) (1 - (1/s) sum_(k=1..i) P(k, s))
    noise       Gaussian with covariance Q_ij = v^2/2T binom(i+j-2, i-1) 2^(1-i-j) P(i+j-1, 2s)

These follow from the impulse response t^(i-1) e^(-t/T) / (T^i (i-1)!) by integration. For an
endless step Q_nn is v^2 times the noise bandwidth, e.g. 1/4T for one stage.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import comb, factorial

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainc

Numbers = NDArray[np.float64]


@dataclass(frozen=True)
class Step:
    """What a step of one length does to ``n`` stages.

    ``start``, ``end``: weights of the input at the step's two ends; ``noise``: the lower
    triangular root of the noise's covariance for v = 1.
    """

    transition: Numbers  # (n, n)
    start: Numbers  # (n,)
    end: Numbers  # (n,)
    noise: Numbers  # (n, n)


def make_step(poles: int, time_constant_s: float, length_s: float) -> Step:
    """The step of ``length_s`` > 0 for ``poles`` stages of ``time_constant_s`` each."""
    s = length_s / time_constant_s
    order = np.arange(1, poles + 1)
    level = gammainc(order, s)
    end = 1.0 - np.cumsum(level) / s
    return Step(
        _transition(poles, s), level - end, end, _noise_root(poles, s) / np.sqrt(time_constant_s)
    )


def _transition(poles: int, s: float) -> Numbers:
    column = np.array([np.exp(-s) * s**k / factorial(k) for k in range(poles)])
    matrix = np.zeros((poles, poles))
    for j in range(poles):
        matrix[j:, j] = column[: poles - j]
    return matrix


def _noise_root(poles: int, s: float) -> Numbers:
    """The root for T = 1. The covariance is scaled to a correlation first: for a short step its
    elements lie many powers of ten apart."""
    order = np.arange(1, poles + 1)
    i, j = np.meshgrid(order, order, indexing="ij")
    binomial = np.array([[comb(a + b - 2, a - 1) for b in order] for a in order], float)
    covariance = 0.5 * binomial * 2.0 ** (1 - i - j) * gammainc(i + j - 1, 2 * s)
    scale = np.sqrt(np.diag(covariance))
    return scale[:, None] * np.linalg.cholesky(covariance / np.outer(scale, scale))


class Cascade:
    """``poles`` stages in several channels side by side (X and Y), each with noise of its own.

    Parameters
    ----------
    noise_V_per_rtHz : one-sided spectral density of the white noise at the input.
    start : what the stages hold at first, one number a channel.
    generator : where the noise comes from.
    """

    def __init__(
        self,
        poles: int,
        time_constant_s: float,
        noise_V_per_rtHz: float,
        start: Numbers,
        generator: np.random.Generator,
    ) -> None:
        self.poles, self.time_constant_s = poles, time_constant_s
        self._density = noise_V_per_rtHz
        self._generator = generator
        self._state = np.tile(np.asarray(start, float), (poles, 1))  # (poles, channels)

    @property
    def output(self) -> Numbers:
        """What the last stage holds, one number a channel."""
        return np.array(self._state[-1])

    def settle(self, signal: Numbers) -> None:
        """Make all stages hold the signal, without noise."""
        self._state[:] = signal

    def advance(self, length_s: float, signal: Numbers) -> None:
        """Go on by equal steps of ``length_s`` (> 0).

        ``signal`` has the shape (steps + 1, channels): its values at the steps' ends, between
        which it is straight.
        """
        step = make_step(self.poles, self.time_constant_s, length_s)
        steps, channels = len(signal) - 1, signal.shape[1]
        white = self._generator.standard_normal((steps, self.poles, channels))
        kicks = self._density * (step.noise @ white)
        kicks += step.start[:, None] * signal[:-1, None] + step.end[:, None] * signal[1:, None]
        for kick in kicks:
            self._state = step.transition @ self._state + kick
