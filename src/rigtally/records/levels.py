"""State levels of a waveform (IEEE Std 181 terms), each with its uncertainty."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]

# a slope of the level is followed from this many standard uncertainties on
DRIFT_SEEN = 5.0
LONGEST = 1 << 15


def correlation_length(residual: Array) -> float:
    """Samples that one independent sample is worth: 1 + 2 Σ ρ_k, summed while pairs of ρ stay positive.

    Initial positive sequence: Geyer, Practical Markov Chain Monte Carlo, Statistical Science 7 (1992) 473.
    """
    count = residual.size
    if count < 8:
        return 1.0
    size = 1 << (2 * count - 1).bit_length()
    spectrum = np.fft.rfft(residual - residual.mean(), size)
    covariance = np.fft.irfft(np.abs(spectrum) ** 2, size)[: count // 2]
    if covariance[0] <= 0.0:
        return 1.0
    rho = covariance / covariance[0]
    pairs = rho[: rho.size // 2 * 2].reshape(-1, 2).sum(axis=1)
    negative = np.flatnonzero(pairs <= 0.0)
    kept = pairs[: negative[0]] if negative.size else pairs
    return float(np.clip(2.0 * kept.sum() - 1.0, 1.0, count / 2.0))


def level(
    samples: Array, unit: str = "", resolution: float = float("nan"), side: str = "middle"
) -> Uncertain:
    """Level of a stretch that stands still, or drifts slowly.

    The mean, with the residual's own correlation in u. Where a straight drift shows (five u or more) the
    level is that of the line at the end named by `side`. A resolution coarse against the scatter adds
    q/√12, which no number of samples averages out.

    Parameters
    ----------
    samples : (n,) array
        NaN is left out.
    side : "first", "middle" or "last"

    Returns
    -------
    Uncertain
        u NaN with fewer than three samples.
    """
    known = samples[np.isfinite(samples)]
    if known.size > LONGEST:
        known = known[-LONGEST:] if side == "last" else known[:LONGEST]
    if known.size == 0:
        return Uncertain(math.nan, math.nan, unit)
    mean = float(known.mean())
    rounding = resolution / math.sqrt(12.0) if math.isfinite(resolution) else 0.0
    if known.size < 3:
        return Uncertain(mean, math.nan, unit)
    rows = np.arange(known.size) - 0.5 * (known.size - 1)
    spread = float(rows @ rows)
    slope = float(rows @ known) / spread
    residual = known - mean - slope * rows
    length = correlation_length(residual)
    worth = known.size / length
    scatter = math.sqrt(float(residual @ residual) / max(known.size - 2, 1))
    value, share = mean, 1.0 / worth
    if abs(slope) > DRIFT_SEEN * scatter * math.sqrt(length / spread) and side != "middle":
        at = 0.5 * (known.size - 1) * (1.0 if side == "last" else -1.0)
        value, share = mean + slope * at, share + length * at * at / spread
    u = scatter * math.sqrt(share)
    # scatter well above the resolution averages the rounding out: its mean error falls as exp(−2 (π σ/q)²)
    held = rounding * math.exp(-2.0 * (math.pi * scatter / resolution) ** 2) if rounding > 0.0 else 0.0
    return Uncertain(value, math.hypot(u, held), unit, dof=max(worth - 1.0, 1.0))


def histogram_levels(samples: Array, sigma: float) -> tuple[float, float]:
    """Low and high state level: the mode of the lower and of the upper half of the histogram.

    IEEE Std 181 / IEC 60469 (definition from memory). A bin is no narrower than the noise, so that a state
    fills a few bins; within the mode's ±2 bins the mean is taken.

    Returns
    -------
    float, float
        Both NaN for fewer than four samples or a constant.
    """
    known = samples[np.isfinite(samples)]
    if known.size < 4:
        return math.nan, math.nan
    low, high = float(known.min()), float(known.max())
    if low == high:
        return math.nan, math.nan
    extent = high - low
    bins = int(np.clip(extent / max(sigma, extent / 500.0), 12, 500))
    bins += bins % 2
    counts, edges = np.histogram(known, bins=bins, range=(low, high))
    half = bins // 2
    width = edges[1] - edges[0]

    def around(mode: int) -> float:
        near = known[(known >= edges[mode] - 2 * width) & (known <= edges[mode + 1] + 2 * width)]
        return float(near.mean())

    return around(int(np.argmax(counts[:half]))), around(half + int(np.argmax(counts[half:])))
