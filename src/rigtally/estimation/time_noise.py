"""The time road's noise: an autoregression with the exact Gaussian start, and the whitening that it gives.

For v[k] + a1 v[k-1] + … + ap v[k-p] = e[k] the innovations e are independent; the first p samples have the
process's stationary covariance, whose Cholesky factor whitens them. Nothing is dropped, so the baseline before
a step counts in full. The order is chosen by BIC. Sources: Box & Jenkins, Time Series Analysis (exact likelihood of an
autoregression); Burg's recursion; Schwarz, Annals of Statistics 6 (1978) 461 (from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky, solve_triangular, toeplitz

from rigtally.quantities.fir import moving_sum

Array = NDArray[np.float64]
MOST_ORDERS = 40


@dataclass(frozen=True)
class Noise:
    """An autoregression.

    Attributes
    ----------
    coefficients : (p + 1,) array
        1, a1 … ap; (1,) is white noise.
    sigma : float
        Standard deviation of the innovations, SI.
    """

    coefficients: Array
    sigma: float

    @property
    def white(self) -> bool:
        """No colour."""
        return self.coefficients.size == 1

    @cached_property
    def start(self) -> Array:
        """Lower Cholesky factor (p, p) of the covariance of p samples, for innovations of unit variance."""
        gamma = autocovariance(self.coefficients)
        return np.asarray(cholesky(toeplitz(gamma), lower=True))

    def whiten(self, rows: Array, runs: Sequence[slice]) -> Array:
        """(…, N) rows to unit independent noise, each run of samples for itself."""
        out = np.empty_like(rows)
        p = self.coefficients.size - 1
        for run in runs:
            piece = rows[..., run]
            if p == 0:
                out[..., run] = piece / self.sigma
                continue
            white = moving_sum(self.coefficients, piece)
            head = min(p, piece.shape[-1])
            low = self.start[:head, :head]
            white[..., :head] = solve_triangular(low, piece[..., :head].T, lower=True).T
            out[..., run] = white / self.sigma
        return out

    @property
    def independent_share(self) -> float:
        """Independent samples per sample for a mean: variance over the spectrum at zero frequency."""
        if self.white:
            return 1.0
        variance = float(autocovariance(self.coefficients)[0])
        return float(min(variance * np.sum(self.coefficients) ** 2, 1.0))


def autocovariance(coefficients: Array) -> Array:
    """(p,) stationary autocovariance at lags 0 … p-1 for unit innovations (Yule–Walker equations, solved)."""
    p = coefficients.size - 1
    matrix = np.zeros((p + 1, p + 1))
    for lag in range(p + 1):
        for k in range(p + 1):
            matrix[lag, abs(lag - k)] += coefficients[k]
    right = np.zeros(p + 1)
    right[0] = 1.0
    return np.asarray(np.linalg.solve(matrix, right))[:p]


def burg(pieces: Sequence[Array], most: int) -> list[tuple[Array, float]]:
    """(coefficients, innovation variance) of orders 0 … most, over several stretches at once."""
    forward = [piece[1:] for piece in pieces]
    backward = [piece[:-1] for piece in pieces]
    total = sum(piece.size for piece in pieces)
    variance = sum(float(piece @ piece) for piece in pieces) / total
    a = np.array([1.0])
    out = [(a, variance)]
    for _ in range(most):
        cross = sum(float(f @ b) for f, b in zip(forward, backward, strict=True))
        power = sum(float(f @ f + b @ b) for f, b in zip(forward, backward, strict=True))
        if power <= 0.0:
            break
        k = -2.0 * cross / power
        a = np.append(a, 0.0) + k * np.append(a, 0.0)[::-1]
        variance *= 1.0 - k * k
        out.append((a, variance))
        moved = [(f + k * b, b + k * f) for f, b in zip(forward, backward, strict=True)]
        forward = [f[1:] for f, _ in moved]
        backward = [b[:-1] for _, b in moved]
    return out


def estimate(pieces: Sequence[Array], coloured: bool, spent: int) -> Noise:
    """The noise of residuals (one array a run): order by BIC, innovations' variance with `spent` parameters.

    A white residual stays white: an order above 0 must lower BIC by more than 6 (strong evidence on
    Raftery's scale, from memory), so that white noise is taken for coloured in less than 1 % of records.
    """
    total = sum(piece.size for piece in pieces)
    free = max(total - spent, 1)
    usable = [piece for piece in pieces if piece.size > 3]
    a = np.array([1.0])
    if coloured and total > 40 and usable:
        most = int(min(MOST_ORDERS, total // 20, min(max(p.size for p in usable) // 3, MOST_ORDERS)))
        long = [piece for piece in usable if piece.size > most + 2] or [max(usable, key=lambda p: p.size)]
        found = burg(long, min(most, long[0].size - 3 if len(long) == 1 else most))
        count = sum(piece.size for piece in long)
        score = [count * np.log(max(v, 1e-300)) + k * np.log(count) for k, (_, v) in enumerate(found)]
        best = int(np.argmin(score))
        if best > 0 and score[0] - score[best] > 6.0:
            a = found[best][0]
    shape = Noise(a, 1.0)
    white = np.concatenate([shape.whiten(piece, [slice(0, piece.size)]) for piece in pieces])
    return Noise(a, float(np.sqrt(max(white @ white, 1e-300) / free)))
