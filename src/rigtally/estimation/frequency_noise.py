"""The residual's colour: an autoregression by an information criterion, its exact Gaussian whitening, hum lines.

The residual is described as e[k] = −a₁e[k−1] − … − a_p e[k−p] + ε[k] (Burg's recursion; order by BIC; Kay, Modern
Spectral Estimation, 1988; from memory). Whitened are all samples: from the p-th on by the predictor of order p,
the first p by the predictors of lower order, each divided by its own innovation's standard deviation, so that the
sum of squares is the exact Gaussian likelihood's and the baseline before a step keeps its weight.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Colour:
    """Predictors of order 0 … p and their innovation variances, relative to the last.

    Attributes
    ----------
    predictors : tuple of arrays; predictors[m] is (1, a₁ … a_m)
    variances : (p + 1,) innovation variances of each order, the last one 1
    innovation : standard deviation of ε
    """

    predictors: tuple[Array, ...]
    variances: Array
    innovation: float

    @property
    def order(self) -> int:
        """p; 0 is white."""
        return len(self.predictors) - 1

    def whiten(self, series: Array) -> Array:
        """(…, n) series to (…, n) with unit weight: variance innovation² in each sample."""
        p = self.order
        if p == 0:
            return series
        last = self.predictors[p]
        out = series.copy()
        for lag in range(1, p + 1):
            out[..., p:] += last[lag] * series[..., p - lag : series.shape[-1] - lag]
        for k in range(min(p, series.shape[-1])):
            own = series[..., k::-1] if k else series[..., :1]
            out[..., k] = (own @ self.predictors[k]) / np.sqrt(self.variances[k])
        return out

    def gain(self, angle: Array) -> Array:
        """|A(e^{jωT})|: by which white noise's bins are divided."""
        z = np.exp(-1j * angle)
        return np.asarray(np.abs(np.polynomial.polynomial.polyval(z, self.predictors[-1])))

    @property
    def log_determinant(self) -> float:
        """ln det of the covariance over innovation^2n (the first samples' share)."""
        return float(np.sum(np.log(self.variances[:-1])))

    def effective_share(self) -> float:
        """Independent samples per sample for the mean: (1 + a₁ + …)²·variance/innovation²."""
        return min(1.0, float(np.sum(self.predictors[-1])) ** 2 * float(self.variances[0]))


WHITE = Colour((np.ones(1),), np.ones(1), 1.0)


def from_reflections(reflections: Array, innovation: float) -> Colour:
    """Levinson's step-up from reflection coefficients (each |k| < 1)."""
    predictors = [np.ones(1)]
    variances = [1.0]
    for k in reflections:
        old = np.append(predictors[-1], 0.0)
        predictors.append(old + k * old[::-1])
        variances.append(variances[-1] * (1.0 - k * k))
    scale = np.array(variances) / variances[-1]
    return Colour(tuple(predictors), scale, innovation)


def autoregression(residuals: list[Array], highest: int, spent: float = 0.0) -> Colour:
    """The residual's colour, its order chosen by BIC; order 0 where it is white.

    Parameters
    ----------
    residuals : the same output's residual in each segment, (n,) each
    highest : largest order tried
    spent : parameters fitted, for the innovation's variance
    """
    forward = [e - 0.0 for e in residuals]
    backward = [e - 0.0 for e in residuals]
    total = float(sum(e.size for e in residuals))
    power = sum(float(e @ e) for e in residuals) / total
    if power <= 0.0:
        return WHITE
    variance = power
    reflections: list[float] = []
    score = [total * np.log(variance)]
    for order in range(1, highest + 1):
        up = down = 0.0
        for f, b in zip(forward, backward, strict=True):
            up += float(f[1:] @ b[:-1])
            down += float(f[1:] @ f[1:]) + float(b[:-1] @ b[:-1])
        if down <= 0.0:
            break
        k = -2.0 * up / down
        forward, backward = (
            [f[1:] + k * b[:-1] for f, b in zip(forward, backward, strict=True)],
            [b[:-1] + k * f[1:] for f, b in zip(forward, backward, strict=True)],
        )
        reflections.append(k)
        variance *= max(1.0 - k * k, 1e-12)
        score.append(total * np.log(variance) + order * np.log(total))
    best = int(np.argmin(score))
    innovation = np.sqrt(power * np.prod(1.0 - np.array(reflections[:best]) ** 2))
    return from_reflections(
        np.array(reflections[:best]), float(innovation * np.sqrt(total / max(total - spent - best, 1.0)))
    )


def lag_one(residual: Array) -> float:
    """Autocorrelation at one sample."""
    centred = residual - residual.mean()
    power = float(centred @ centred)
    return float(centred[1:] @ centred[:-1]) / power if power > 0 else float("nan")


def mains_lines(residual: Array, interval: float) -> tuple[float, ...]:
    """Angular frequencies (rad/s) of mains hum (50 or 60 Hz and harmonics) that stand clear of the residual.

    A line is clear where its bin holds more than 30 times the median of its neighbourhood (for pure noise the
    chance of that in one bin is 2^−30). The frequency is the maximum of the record's own transform near the
    line (a mains frequency is seldom exactly its name).
    """
    n = residual.size
    span = n * interval
    out: list[float] = []
    for mains in (50.0, 60.0):
        if span * mains < 20.0:
            continue
        for harmonic in range(1, 8):
            centre = mains * harmonic
            if centre > 0.45 / interval:
                break
            wide = 0.02 * centre + 3.0 / span
            bins = np.arange(int((centre - 10 * wide) * span), int((centre + 10 * wide) * span) + 1)
            bins = bins[(bins > 0) & (bins < n // 2)]
            if bins.size < 8:
                continue
            window = np.hanning(n)
            spectrum = np.abs(np.fft.rfft((residual - residual.mean()) * window)) ** 2
            power = spectrum[bins]
            near = np.abs(bins / span - centre) <= wide * 0.3 + 1.0 / span
            peak = int(np.argmax(np.where(near, power, 0.0)))
            if power[peak] < 30.0 * float(np.median(power)):
                continue
            out.append(_refined(residual * window, interval, 2.0 * np.pi * bins[peak] / span))
    return tuple(out)


def _refined(series: Array, interval: float, omega: float) -> float:
    """The transform's maximum near a bin, by parabolas on its logarithm."""
    time = interval * np.arange(series.size)
    step = 2.0 * np.pi / (series.size * interval) * 0.5
    for _ in range(4):
        heights = np.log(
            [np.abs(np.exp(-1j * w * time) @ series) + 1e-300 for w in (omega - step, omega, omega + step)]
        )
        bend = heights[0] - 2.0 * heights[1] + heights[2]
        if bend < 0:
            omega += step * float(np.clip(0.5 * (heights[0] - heights[2]) / bend, -1.0, 1.0))
        step *= 0.3
    return float(omega)
