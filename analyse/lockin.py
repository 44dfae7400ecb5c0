"""The low-pass filter of a lock-in: n equal RC stages of time constant T, H = 1/(1 + i w T)^n.

Formulas: impulse response t^(n-1) e^(-t/T) / (T^n (n-1)!), step response P(n, t/T) (regularised
incomplete gamma function), delay of a steady ramp n T, equivalent noise bandwidth
Gamma(n-1/2) / (4 sqrt(pi) Gamma(n) T), and for white noise behind it the autocorrelation
e^-s sum_j a_j s^j with s = |t|/T (the Bessel polynomials).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

from scipy.special import gammaincinv


@dataclass(frozen=True)
class LockinFilter:
    """``poles`` cascaded RC stages of ``time_constant_s`` each.

    Raises ValueError if the time constant is not positive or poles not in 1..8.
    """

    time_constant_s: float
    poles: int

    def __post_init__(self) -> None:
        if not (math.isfinite(self.time_constant_s) and self.time_constant_s > 0):
            raise ValueError(f"time_constant_s must be positive, not {self.time_constant_s!r}")
        if not (isinstance(self.poles, int) and 1 <= self.poles <= 8):
            raise ValueError(f"poles must be a whole number from 1 to 8, not {self.poles!r}")

    @property
    def delay_s(self) -> float:
        """By how much the output lags behind a steady ramp: n T."""
        return self.poles * self.time_constant_s

    @property
    def noise_bandwidth_Hz(self) -> float:
        """Equivalent noise bandwidth, one-sided."""
        n = self.poles
        return math.gamma(n - 0.5) / (
            4 * math.sqrt(math.pi) * math.gamma(n) * self.time_constant_s
        )

    @property
    def integral_time_s(self) -> float:
        """Integral of the noise autocorrelation over all lags, 1 / (2 noise bandwidth)."""
        return 1.0 / (2.0 * self.noise_bandwidth_Hz)

    def settle_s(self, remainder: float = 1e-3) -> float:
        """Time after a step until all but ``remainder`` of it has come through."""
        return self.time_constant_s * float(gammaincinv(self.poles, 1.0 - remainder))

    def autocorrelation(self, lag_s: float) -> float:
        """Autocorrelation of filtered white noise at a lag."""
        s = abs(lag_s) / self.time_constant_s
        if s > 700:
            return 0.0
        total = 0.0
        for coefficient in reversed(_noise_polynomial(self.poles)):
            total = total * s + coefficient
        return math.exp(-s) * total

    def inflation(self, spacing_s: float) -> float:
        """Variance of a mean of many readings ``spacing_s`` apart, over that of as many
        independent ones: 1 + 2 sum_k rho(k spacing)."""
        if not spacing_s > 0:
            raise ValueError(f"spacing_s must be positive, not {spacing_s!r}")
        if spacing_s < 0.05 * self.time_constant_s:
            return self.integral_time_s / spacing_s      # the sum's limit; error < 1e-4 here
        total, lag = 1.0, spacing_s
        while True:
            rho = self.autocorrelation(lag)
            total += 2.0 * rho
            if rho < 1e-12:
                return total
            lag += spacing_s


@lru_cache(maxsize=16)
def _noise_polynomial(n: int) -> tuple[float, ...]:
    """Coefficients a_0..a_(n-1) of the autocorrelation's polynomial, a_0 = 1."""
    m = n - 1
    raw = [
        math.factorial(2 * m - j) / (math.factorial(j) * math.factorial(m - j)) * 2.0**j
        for j in range(n)
    ]
    return tuple(value / raw[0] for value in raw)
