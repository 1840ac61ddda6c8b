"""Two loggers, each with its own clock, joined by a channel that both recorded.

The second clock reads t₂ where the first reads t₁ = offset + (1 + rate)·t₂. Both readings of the shared
channel, x₁ and x₂, are of one signal s up to a gain and a constant: x₁(t₁) = g·x₂(t₂(t₁)) + c + noise.
Offset and rate are those of least squares on both, each smoothed down to the band in which they agree: a
moving mean is zero-phase, so that it does not move the answer, and weights the cross-spectrum's phase by
what is signal in it. Noise in x₂ enters its derivative as well; the Hessian is therefore taken from
products of the two channels' derivatives, in which independent noises cancel, and u from the
residual with its correlation.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.levels import correlation_length
from rigtally.records.record import Fault, Record

Array = NDArray[np.float64]

# what two crystal clocks may differ by before anything is known of them (standard uncertainty; common
# practice, no source)
RATE_PRIOR = 1e-4
LEAST_CORRELATION = 0.5
# samples of the moving means that are tried
SMOOTHINGS = (1, 5, 25, 101)


@dataclass(frozen=True)
class ClockFit:
    """How the second clock stands to the first: t₁ = offset + (1 + rate)·t₂.

    Attributes
    ----------
    offset : Uncertain
        Seconds, at t₂ = 0 of the second record's own scale.
    rate : Uncertain
        Relative (1e-6 is one part in a million).
    alignment : Uncertain
        0 with the u of t₁ in the middle of the shared stretch, seconds.
    correlation : float
        Of the two readings once they are aligned.
    """

    offset: Uncertain
    rate: Uncertain
    alignment: Uncertain
    correlation: float


def join_records(first: Record, second: Record, shared: str, shared_second: str | None = None) -> Record:
    """The first record with the second's channels, by a channel that both recorded (see `fit_clocks`,
    `joined`).

    Parameters
    ----------
    first, second : Record
    shared, shared_second : str
        The channel in the first and, where it is named otherwise there, in the second.

    Raises
    ------
    LogError
        codes "no-such-channel", "not-shared" (the two readings do not agree).
    """
    fit = fit_clocks(first, second, shared, shared_second or shared)
    return joined(first, second, fit, f"channel {shared!r}")


def joined(first: Record, second: Record, fit: ClockFit, by: str) -> Record:
    """The first record with the second's channels, read at the first's instants.

    A channel of the second is interpolated (monotone cubic, which adds no overshoot to a step) to the first
    clock, which its fault "joined" says, with the offset and the rate; `u_skew` is the u of the alignment.
    Outside the second's time it is NaN. Channels of the second whose name is taken get the suffix "_2".
    """
    taken = set(first.names)
    gain = 1.0 + fit.rate.value
    at = (first.time - fit.offset.value) / gain
    behind, off = fit.offset, fit.rate
    text = (
        f"read by another logger, whose clock is {behind.value:.6g} ± {behind.expanded():.1g} s behind and "
        f"runs {1e6 * off.value:.3g} ± {1e6 * off.expanded():.1g} ppm off; interpolated to this clock"
    )
    added = []
    for channel in second.channels:
        label = channel.name
        while label in taken:
            label += "_2"
        taken.add(label)
        fault = Fault("joined", text, size=fit.alignment.u)
        added.append(
            replace(
                channel,
                name=label,
                samples=_interpolated(second.time, channel.samples, at),
                skew=0.0,
                u_skew=fit.alignment.u,
                faults=(*channel.faults, fault),
            )
        )
    how = (
        *first.provenance.how_read,
        f"joined with {second.provenance.file or 'a second log'} by {by}",
    )
    return replace(
        first,
        channels=(*first.channels, *added),
        provenance=replace(first.provenance, how_read=how),
    )


def fit_clocks(first: Record, second: Record, shared: str, shared_second: str) -> ClockFit:
    """Offset and rate of the second clock against the first.

    Raises
    ------
    LogError
        code "not-shared": the two readings correlate by less than 0.5 at their best.
    """
    one = _Reading(first.time, first.channel(shared).samples)
    two = _Reading(second.time, second.channel(shared_second).samples)
    step = max(one.step, two.step)
    # noise hides a signal's slopes until it is smoothed: the smoothing under which they agree best is taken
    tries = []
    for count in SMOOTHINGS:
        pair = one.smoothed(count * step), two.smoothed(count * step)
        tries.append((*_coarse(*pair, step), pair))
    offset, _, (smooth_one, smooth_two) = max(tries, key=lambda found: abs(found[1]))
    rate = 0.0
    fit = None
    centre = 0.5 * float(two.time[0] + two.time[-1])
    for _ in range(12):
        fit = _refine(smooth_one, smooth_two, offset, rate)
        still = (
            abs(fit.offset.value + fit.rate.value * centre - offset - rate * centre) < 1e-3 * fit.alignment.u
        )
        offset, rate = fit.offset.value, fit.rate.value
        if still:
            break
    if fit is None or not fit.offset.determined or fit.correlation < LEAST_CORRELATION:
        raise LogError(
            f"the two logs do not agree on {shared!r}",
            where=second.provenance.file,
            do="name a channel that both loggers recorded while it moved",
            code="not-shared",
        )
    return fit


class _Reading:
    """One reading of the shared channel: instants and samples without gaps."""

    def __init__(self, time: Array, samples: Array) -> None:
        known = np.isfinite(samples)
        self.time = time[known]
        self.samples = samples[known]
        self.step = float(np.median(np.diff(self.time))) if self.time.size > 1 else 1.0

    def smoothed(self, length: float) -> _Reading:
        """Moved through a mean of `length` seconds, twice (zero phase, a triangle in time)."""
        count = max(round(length / self.step), 1) | 1
        out = _Reading(self.time, self.samples)
        if 1 < count < self.samples.size // 4:
            kernel = np.full(count, 1.0 / count)
            triangle = np.convolve(kernel, kernel)
            kept = np.convolve(self.samples, triangle, mode="valid")
            out.samples, out.time = kept, self.time[count - 1 : self.time.size - count + 1]
        return out


def _coarse(one: _Reading, two: _Reading, step: float) -> tuple[float, float]:
    """Offset to within a step, by the largest normalised cross-correlation of the differences, and of what
    size.

    The differences are taken because a step or a drift correlates with itself at any offset.
    """
    grids = []
    for reading in (one, two):
        at = np.arange(reading.time[0], reading.time[-1], step)
        values = np.interp(at, reading.time, reading.samples)
        grids.append(np.gradient(values - values.mean()))
    a, b = grids
    size = 1 << (a.size + b.size).bit_length()
    product = np.fft.rfft(a, size) * np.conj(np.fft.rfft(b, size))
    correlation = np.fft.irfft(product, size)
    best = int(np.argmax(np.abs(correlation)))
    lag = best if best < size // 2 else best - size
    scale = math.sqrt(float(a @ a) * float(b @ b))
    seen = float(correlation[best]) / scale if scale > 0 else 0.0
    return float(one.time[0] - two.time[0] + lag * step), seen


def _refine(one: _Reading, two: _Reading, offset: float, rate: float) -> ClockFit:
    """One Gauss-Newton step of offset, rate, gain and constant, with the sandwich covariance of the
    result."""
    from scipy.interpolate import CubicSpline

    at = (one.time - offset) / (1.0 + rate)
    inside = (at >= two.time[0]) & (at <= two.time[-1])
    if inside.sum() < 16:
        unknown = Uncertain(offset, math.nan, "s")
        return ClockFit(unknown, Uncertain(rate, math.nan), Uncertain(0.0, math.nan, "s"), 0.0)
    t, x = one.time[inside], one.samples[inside]
    spline = CubicSpline(two.time, two.samples)
    other, slope = spline(at[inside]), spline(at[inside], 1)
    slope_one = CubicSpline(one.time, one.samples)(t, 1)
    centre = 0.5 * (t[0] + t[-1])
    ones = np.ones_like(t)
    (gain, constant), *_ = np.linalg.lstsq(np.stack([other, ones], axis=1), x, rcond=None)
    residual = x - gain * other - constant
    # t₂ falls by δ and by ρ (t − centre): the model moves by −g s'
    moves = -gain * np.stack([slope, slope * (t - centre)], axis=1)
    moves_one = -np.stack([slope_one, slope_one * (t - centre)], axis=1)
    hessian = 0.5 * (moves.T @ moves_one + moves_one.T @ moves)
    # noise that was smoothed counts for its correlation length, which the smooth slopes do not resolve
    length = correlation_length(residual)
    noise = length * float(residual @ residual) / max(t.size - 4, 1)
    meat = noise * (moves.T @ moves)
    prior = np.diag([0.0, noise / RATE_PRIOR**2])
    bread = np.linalg.pinv(hessian + prior, hermitian=True)
    change = bread @ (moves.T @ residual - prior @ np.array([0.0, rate]))
    change[0] = float(np.clip(change[0], -4.0 * one.step, 4.0 * one.step))
    covariance = bread @ (meat + prior * noise) @ bread.T
    new_rate = rate + float(change[1])
    # δ is the shift in the middle of the stretch; at t₂ = 0 the rate's u comes in by the distance
    new_offset = offset + float(change[0]) - float(change[1]) * centre
    far = np.array([1.0, -centre])
    u_offset = math.sqrt(max(float(far @ covariance @ far), 0.0))
    correlation = float(np.corrcoef(x, other)[0, 1]) if np.ptp(other) > 0 and np.ptp(x) > 0 else 0.0
    dof = max(t.size / length - 4.0, 1.0)
    return ClockFit(
        Uncertain(new_offset, u_offset, "s", dof),
        Uncertain(new_rate, math.sqrt(max(float(covariance[1, 1]), 0.0)), "", dof),
        Uncertain(0.0, math.sqrt(max(float(covariance[0, 0]), 0.0)), "s", dof),
        abs(correlation),
    )


def _interpolated(time: Array, samples: Array, at: Array) -> Array:
    """Monotone cubic through the known samples; NaN outside them and across missing ones."""
    from scipy.interpolate import PchipInterpolator

    known = np.isfinite(samples)
    out = np.full(at.size, np.nan)
    if known.sum() < 4:
        return out
    inside = (at >= time[known][0]) & (at <= time[known][-1])
    out[inside] = PchipInterpolator(time[known], samples[known])(at[inside])
    if not known.all():
        right = np.clip(np.searchsorted(time, at), 1, time.size - 1)
        out[~(known[right] & known[right - 1])] = np.nan
    return out
