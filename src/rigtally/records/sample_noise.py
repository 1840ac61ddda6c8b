"""Two numbers that every look at raw samples needs: the noise of one sample, and the smallest step."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# median |x| of a normal variate in standard deviations
MEDIAN_TO_SIGMA = 1.482602218505602
PROBE = 100_000
FLOOR_SAMPLES = 1 << 16
LONG, STRETCH = 1 << 17, 1 << 13


def noise_sigma(samples: Array) -> float:
    """Standard deviation of white noise on a smooth signal, from third differences.

    x_i − 3x_(i+1) + 3x_(i+2) − x_(i+3) has the variance 20 σ² for white noise and none for a parabola; its
    median modulus does not see the few differences that straddle a step or a spike. Coloured noise reads low.

    Parameters
    ----------
    samples : (n,) array
        NaN where there is none; differences over a NaN are left out.

    Returns
    -------
    float
        In the unit of the samples; NaN with fewer than 8 differences; 0 where most of them vanish.
    """
    if samples.size > LONG:
        # sixteen stretches of a long record tell its noise
        starts = np.linspace(0, samples.size - STRETCH, 16).astype(int)
        third = np.diff(samples[starts[:, None] + np.arange(STRETCH)], 3, axis=1).ravel()
    else:
        third = np.diff(samples, 3)
    third = third[np.isfinite(third)]
    if third.size < 8:
        return float("nan")
    return float(MEDIAN_TO_SIGMA * _grouped_median(np.abs(third)) / np.sqrt(20.0))


def _grouped_median(moduli: Array) -> float:
    """Median of moduli that may be multiples of a step: then by a straight line inside the class it falls
    into.

    Without it the median jumps from one multiple to the next as the noise grows.
    """
    median = float(np.median(moduli))
    slack = 1e-6 * max(median, float(np.mean(moduli)))
    same = np.abs(moduli - median) <= slack
    share = float(np.mean(same))
    if share < 0.05:
        return median
    above = moduli[moduli > median + slack]
    if above.size == 0 or (median <= slack and share > 0.9):
        return median
    step = float(above.min()) - median
    lower = max(median - 0.5 * step, 0.0)
    below = float(np.mean(moduli < median - slack))
    return lower + (median + 0.5 * step - lower) * (0.5 - below) / share


def floor_sigma(samples: Array) -> float:
    """Standard deviation of the noise floor: of white noise as strong as the median of the upper half
    spectrum.

    A fast sine, or a resonance, has large third differences and yet a low floor. Power of Hann-windowed
    noise is exponential, its median ln 2 of its mean. Coloured noise that falls with frequency reads low.

    Returns
    -------
    float
        NaN with fewer than 64 samples.
    """
    known = samples[np.isfinite(samples)][:FLOOR_SAMPLES]
    if known.size < 64:
        return float("nan")
    window = np.hanning(known.size)
    power = np.abs(np.fft.rfft((known - known.mean()) * window)) ** 2
    upper = power[power.size // 2 : -2]
    return float(np.sqrt(np.median(upper) / np.log(2.0) / np.sum(window**2)))


def smallest_step(written: Array) -> float:
    """The step of which all samples are multiples (up to one constant), or NaN where there is none.

    First the last printed decimal, then the lattice of a converter behind it.

    Parameters
    ----------
    written : (n,) array
        Samples in the unit in which they were written.
    """
    known = written[np.isfinite(written)]
    if known.size < 2:
        return float("nan")
    probe = np.unique(known[:: max(known.size // PROBE, 1)])
    if probe.size < 2:
        return float("nan")
    printed = _last_decimal(probe)
    for blur in (8.0 * float(np.spacing(np.abs(probe).max())), printed):
        lattice = _lattice(probe, blur) if np.isfinite(blur) else float("nan")
        if np.isfinite(lattice):
            return lattice
    return printed


def _last_decimal(values: Array) -> float:
    """Last decimal place of printed values (between 1000 and 1e-12), or NaN."""
    size = float(np.abs(values).max())
    for places in range(-3, 13):
        quantum = 10.0**-places
        # sixteen digits are a full double, not a print: 1e-12 of the size is the finest that is believed
        if quantum < 1e-12 * size:
            break
        off = np.abs(values - quantum * np.rint(values / quantum))
        if float(off.max()) <= 1e-6 * quantum + 4.0 * float(np.spacing(size)):
            return quantum
    return float("nan")


def _lattice(values: Array, blur: float) -> float:
    """Step of a converter whose codes were scaled and printed: gaps between values are multiples of it.

    `blur` is how far a printed value may stand off its code.
    """
    gaps = np.diff(values)
    gaps = gaps[gaps > 2.0 * blur]
    if gaps.size < 3 or gaps.size < 0.5 * (values.size - 1):
        return float("nan")
    step = float(gaps.min())
    near = gaps[gaps < 8.5 * step]
    for _ in range(3):
        counts = np.rint(near / step)
        step = float(np.sum(counts * near) / np.sum(counts * counts))
    counts = np.rint(gaps / step)
    off = np.abs(gaps - counts * step)
    # a random gap passes within ±0.05 of a whole number once in ten
    allowed = max(0.05 * step, 1.01 * blur)
    if np.any(counts < 1) or float(np.mean(off <= allowed)) < 0.98 or allowed > 0.25 * step:
        return float("nan")
    return step
