"""Streaming least squares by square-root information (QR), one observation at a time.

The upper triangle R of the augmented design matrix [X | y] is kept; a new row is rotated into it
(Givens). There is no prior: the rank shows on the diagonal, and streaming equals batch to
rounding at every prefix. Keep regressors centred and scaled by constants fixed beforehand.
Reference: Golub, Van Loan, Matrix Computations, section 6.5.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.linalg.lapack import dgeqrf


@dataclass(frozen=True)
class Solution:
    """A least-squares solution.

    ``theta`` (p,), ``inverse`` (p, p) is (X'X)^-1, ``rss`` the residual sum of squares,
    ``count`` the number of observations.
    """

    theta: np.ndarray
    inverse: np.ndarray
    rss: float
    count: int


class SquareRootInformation:
    """Triangle of [X | y] with p regressors; errors are taken as of equal variance.

    ``residual`` is the recursive residual of the last observation, (y - x'b) / sqrt(1 + x'(X'X)^-1 x)
    with b and X'X of those before it: what was not foreseen, of the errors' own variance and
    independent of those before (Brown, Durbin, Evans, JRSS B 37, 149 (1975)); 0 while they do not
    determine b.
    """

    __slots__ = ("count", "p", "residual", "rows")

    def __init__(self, p: int) -> None:
        if p < 1:
            raise ValueError(f"needs at least one regressor, not {p}")
        self.p = p
        self.rows = [[0.0] * (p + 1) for _ in range(p + 1)]
        self.count = 0
        self.residual = 0.0

    def update(self, regressors: Sequence[float], y: float) -> None:
        """Take one observation. Raises ValueError for a wrong length or numbers not finite."""
        if len(regressors) != self.p:
            raise ValueError(f"expected {self.p} regressors, got {len(regressors)}")
        new = [*map(float, regressors), float(y)]
        if not all(map(math.isfinite, new)):
            raise ValueError("regressors and y must be finite")
        self._rotate(new)
        self.count += 1
        self.residual = new[self.p]

    def _rotate(self, new: list[float]) -> None:
        width = self.p + 1
        for i, row in enumerate(self.rows):
            b = new[i]
            if b == 0.0:
                continue
            a = row[i]
            r = math.hypot(a, b)
            c, s = a / r, b / r
            row[i] = r
            for j in range(i + 1, width):
                x, z = row[j], new[j]
                row[j] = c * x + s * z
                new[j] = c * z - s * x

    def merge(self, other: SquareRootInformation) -> None:
        """Take all observations of another triangle; the other stays as it is."""
        if other.p != self.p:
            raise ValueError("triangles of different size")
        for row in other.rows:
            self._rotate(list(row))
        self.count += other.count

    def triangle(self) -> np.ndarray:
        """A copy of the triangle, (p + 1, p + 1)."""
        return np.array(self.rows)

    @property
    def rank(self) -> int:
        """Number of regressors that the observations determine."""
        diagonal = [abs(self.rows[i][i]) for i in range(self.p)]
        norms = [math.sqrt(sum(self.rows[k][i] ** 2 for k in range(i + 1))) for i in range(self.p)]
        return sum(d > 1e-12 * n and d > 0.0 for d, n in zip(diagonal, norms))

    def solve(self) -> Solution | None:
        """The solution, or None while the rank is not full."""
        return solve_triangle(self.triangle(), self.count) if self.rank == self.p else None


def solve_triangle(triangle: np.ndarray, count: int) -> Solution:
    """Solution of an augmented triangle (p + 1, p + 1) of full rank."""
    p = triangle.shape[1] - 1
    inverse = np.linalg.inv(triangle[:p, :p])
    return Solution(
        inverse @ triangle[:p, p], inverse @ inverse.T, float(triangle[p, p] ** 2), count
    )


def triangle_of(rows: np.ndarray) -> np.ndarray:
    """The triangle (k, k) of at least k rows of k columns, by LAPACK's QR without its frame."""
    k = rows.shape[1]
    factored = dgeqrf(rows)[0]
    return factored[:k] * _upper(k)


@lru_cache(maxsize=8)
def _upper(k: int) -> np.ndarray:
    return np.triu(np.ones((k, k)))


def inverse_root(rows: Sequence[Sequence[float]], p: int) -> list[list[float]] | None:
    """Inverse of the leading p x p upper triangle; None if it is singular to 1e-9."""
    inverse = [[0.0] * p for _ in range(p)]
    for j in range(p):
        norm = math.sqrt(sum(rows[i][j] ** 2 for i in range(j + 1)))
        if not abs(rows[j][j]) > 1e-9 * norm:
            return None
        inverse[j][j] = 1.0 / rows[j][j]
        for i in range(j - 1, -1, -1):
            total = sum(rows[i][k] * inverse[k][j] for k in range(i + 1, j + 1))
            inverse[i][j] = -total / rows[i][i]
    return inverse
