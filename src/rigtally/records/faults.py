"""Faults of the channels: what a record shows that its maker would want to know before any fit.

Each finder looks at one channel alone and keeps its rate of false alarms on a clean Gaussian record below one
in a hundred. Nothing is repaired.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.records.flat_tops import cut_off, equal_runs
from rigtally.records.record import Channel, Fault, Record
from rigtally.records.sample_noise import MEDIAN_TO_SIGMA, floor_sigma, noise_sigma, smallest_step
from rigtally.records.spectral_faults import find_folding, find_hum

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# noise over resolution from which equal neighbours are news
VISIBLE = 0.7
# noise over range below which a record is computed, not measured
ROUND_OFF = 1e-6
# chance of a false alarm of one finder on one clean channel
FALSE_ALARM = 1e-3
SHOWN = 8


def find_faults(record: Record) -> Record:
    """The record with `faults`, `resolution` and `full_scale` of each channel filled in.

    Stated resolutions and full scales are kept. A side of `full_scale` that shows no clipping is infinite.
    """
    return replace(record, channels=tuple(_examined(channel, record) for channel in record.channels))


def clipped_mask(channel: Channel) -> tuple[Mask, Mask]:
    """Which samples stand at or beyond the lower and the upper full scale.

    Returns
    -------
    (n,) bool, (n,) bool
        All False where no full scale is known.
    """
    samples = channel.samples
    if channel.full_scale is None:
        none = np.zeros(samples.size, dtype=bool)
        return none, none.copy()
    low, high = channel.full_scale
    with np.errstate(invalid="ignore"):
        return (samples <= low + _edge_width(channel, low), samples >= high - _edge_width(channel, high))


def _edge_width(channel: Channel, edge: float) -> float:
    if not math.isfinite(edge):
        return 0.0
    half_step = 0.5 * channel.resolution if math.isfinite(channel.resolution) else 0.0
    return max(half_step, 1e-9 * abs(edge))


def _examined(channel: Channel, record: Record) -> Channel:
    samples = channel.samples
    known = np.isfinite(samples)
    faults: list[Fault] = [fault for fault in channel.faults if fault.kind not in _KINDS]
    missing = int(samples.size - known.sum())
    if missing:
        faults.append(_missing(channel, missing))
    if known.sum() < 8:
        return replace(channel, faults=tuple(faults))
    if not math.isfinite(channel.resolution):
        step = abs(channel.factor) * smallest_step(channel.in_written_unit)
        # ten digits: the conversion's round-off is no part of it
        channel = replace(channel, resolution=float(f"{step:.10g}"))
    low, high = float(np.nanmin(samples)), float(np.nanmax(samples))
    if low == high:
        faults.append(Fault("constant", f"never changes: {_value(low, channel)}", int(known.sum()), size=low))
        return replace(channel, faults=tuple(faults))
    sigma = noise_sigma(samples)
    visible = _visible(channel, sigma)
    channel, clipped = _find_clipping(channel, sigma, low, high, visible)
    faults += clipped
    faults += _find_stuck(channel, sigma) if visible else []
    faults += _find_spikes(channel)
    faults += _find_coarse_steps(channel, sigma, high - low)
    if record.uniform:
        faults += find_hum(channel, record.interval, FALSE_ALARM)
        faults += find_folding(samples, channel.resolution, FALSE_ALARM)
    return replace(channel, faults=tuple(faults))


_KINDS = frozenset(
    {"missing", "constant", "clipped", "stuck", "spikes", "coarse-steps", "mains-hum", "no-anti-alias"}
)


def _missing(channel: Channel, count: int) -> Fault:
    rows = np.flatnonzero(~np.isfinite(channel.samples))
    share = count / channel.samples.size
    return Fault("missing", f"{_samples(count)} missing ({share:.2g}), left out", count, _first(rows), share)


def _samples(count: int) -> str:
    return f"{count} sample{'' if count == 1 else 's'}"


def _value(number: float, channel: Channel) -> str:
    """A value in the unit that the log wrote."""
    written = (number - channel.offset) / channel.factor
    return f"{written:.4g} {channel.written_unit or channel.unit}".rstrip()


def _difference(number: float, channel: Channel) -> str:
    """A difference of values in the unit that the log wrote."""
    return f"{number / abs(channel.factor):.4g} {channel.written_unit or channel.unit}".rstrip()


def _first(rows: NDArray[np.intp]) -> tuple[int, ...]:
    return tuple(int(row) for row in rows[:SHOWN])


def _visible(channel: Channel, sigma: float) -> bool:
    """Whether noise moves the samples by more than the resolution: equal values are then news.

    The noise must show as a floor of the spectrum, too, and above the round-off of a computed signal.
    """
    step = channel.resolution if math.isfinite(channel.resolution) else 0.0
    least = max(VISIBLE * step, ROUND_OFF * float(np.nanmax(channel.samples) - np.nanmin(channel.samples)))
    if not (math.isfinite(sigma) and sigma > least):
        return False
    floor = floor_sigma(channel.samples)
    return math.isnan(floor) or floor > least


def _find_clipping(
    channel: Channel, sigma: float, low: float, high: float, visible: bool
) -> tuple[Channel, list[Fault]]:
    """Samples piled up at the largest or smallest value.

    The density of a noisy signal falls towards its end: what stands at the end value cannot be more than the
    share of one resolution step of what stands in the half σ next to it. More than that (Poisson, one in 10⁶)
    is a pile. Without visible noise a flat top may as well be a held command: it is taken as cut off where
    the curves that lead to it and away from it would meet above it.
    """
    stated = channel.full_scale
    ends = [-math.inf, math.inf] if stated is None else list(stated)
    if stated is None:
        for side, edge in ((0, low), (1, high)):
            sign = 1.0 if side else -1.0
            cut = _piled(sign * channel.samples, sign * edge, sigma, channel) if visible else False
            if cut or cut_off(sign * channel.samples, channel.resolution):
                ends[side] = edge
    if all(math.isinf(end) for end in ends):
        return channel, []
    channel = replace(channel, full_scale=(ends[0], ends[1]))
    faults = []
    for mask, edge, word in zip(clipped_mask(channel), ends, ("lower", "upper"), strict=True):
        count = int(mask.sum())
        if count:
            share = count / mask.size
            faults.append(
                Fault(
                    "clipped",
                    f"{_samples(count)} ({share:.2g}) at the {word} end of the range, "
                    f"{_value(edge, channel)}: the true values lie beyond it",
                    count,
                    _first(np.flatnonzero(mask)),
                    edge,
                )
            )
    return channel, faults


def _piled(samples: Array, edge: float, sigma: float, channel: Channel) -> bool:
    from scipy.special import gammainc

    step = channel.resolution if math.isfinite(channel.resolution) else 0.0
    width = max(step, 0.5 * sigma)
    half = max(0.5 * step, 1e-12 * abs(edge))
    at_edge = int(np.count_nonzero(samples >= edge - half))
    if at_edge < 4:
        return False
    inside = int(np.count_nonzero((samples < edge - half) & (samples >= edge - half - width)))
    expected = (inside + 1) * step / width + 1e-3
    # P(at least k) of a Poisson count; one sample is at the end by definition
    return bool(gammainc(at_edge - 1, expected) < 1e-6)


def _find_stuck(channel: Channel, sigma: float) -> list[Fault]:
    """Runs of one value that noise would have broken: n·p^(L−1) below the chance of a false alarm.

    p = q/(2 σ √π) is the chance that two neighbours with noise σ fall into one step q.
    """
    samples = channel.samples
    step = channel.resolution if math.isfinite(channel.resolution) else 0.0
    chance = min(max(step / (2.0 * sigma * math.sqrt(math.pi)), 1e-3), 0.9)
    shortest = max(5, 2 + math.ceil(math.log(FALSE_ALARM / samples.size) / math.log(chance)))
    starts, lengths = equal_runs(samples)
    long = lengths >= shortest
    low, high = clipped_mask(channel)
    long &= ~(low[starts] | high[starts])
    if not np.any(long):
        return []
    count = int(lengths[long].sum())
    longest = int(np.argmax(np.where(long, lengths, 0)))
    value = _value(float(samples[starts[longest]]), channel)
    text = (
        f"{count} samples in {int(long.sum())} stretch(es) hold one value while the rest is noisy; the "
        f"longest, {int(lengths[longest])} samples at {value}, from sample {int(starts[longest])}"
    )
    return [Fault("stuck", text, count, _first(starts[long]), float(lengths[longest]))]


def _find_spikes(channel: Channel) -> list[Fault]:
    """Single samples far from both neighbours, which agree with each other.

    s_i = x_i − (x_(i−1) + x_(i+1))/2 against the normal quantile for n samples, and against seven times its
    own median modulus over the 20 samples around, so that an edge or a fast swing of the signal is no spike.
    """
    from scipy.special import ndtri

    x = channel.samples
    if x.size < 32:
        return []
    bend = x[1:-1] - 0.5 * (x[:-2] + x[2:])
    known = np.isfinite(bend)
    if not np.any(known):
        return []
    step = channel.resolution if math.isfinite(channel.resolution) else 0.0
    scale = max(MEDIAN_TO_SIGMA * float(np.median(np.abs(bend[known]))), 0.4 * step)
    if scale < 1.5 * step:
        # the median of few values is one of them: the mean modulus does not jump
        scale = max(scale, math.sqrt(0.5 * math.pi) * float(np.mean(np.abs(bend[known]))))
    if scale <= 0.0:
        return []
    limit = max(-float(ndtri(0.5 * FALSE_ALARM / bend.size)), 5.0) * scale
    across = np.abs(x[2:] - x[:-2])
    with np.errstate(invalid="ignore"):
        candidates = np.flatnonzero((np.abs(bend) > limit) & (across < 0.4 * np.abs(bend) + 2.0 * scale))
    if candidates.size == 0:
        return []
    offsets = np.concatenate([np.arange(-12, -2), np.arange(3, 13)])
    around = np.clip(candidates[:, None] + offsets, 0, bend.size - 1)
    local = np.nan_to_num(np.abs(bend[around]), nan=0.0)
    spikes = candidates[np.abs(bend[candidates]) > 7.0 * np.median(local, axis=1)] + 1
    if spikes.size == 0:
        return []
    largest = float(np.max(np.abs(bend[spikes - 1])))
    text = (
        f"{_samples(spikes.size)} far off both neighbours, by up to "
        f"{_difference(largest, channel)} ({largest / scale * math.sqrt(1.5):.3g} times the noise)"
    )
    return [Fault("spikes", text, int(spikes.size), _first(spikes), largest)]


def _find_coarse_steps(channel: Channel, sigma: float, extent: float) -> list[Fault]:
    """Resolution above the noise: rounding is then no longer noise of its own but follows the signal.

    σ from differences holds the rounding itself (q/√12), which is taken out before the two are compared.
    """
    step = channel.resolution
    if not math.isfinite(step) or not math.isfinite(sigma):
        return []
    noise = math.sqrt(max(sigma * sigma - step * step / 12.0, 0.0))
    if step <= 1.5 * noise or _few_values(channel.samples) or not _staircase(channel.samples):
        return []
    against = f"{step / noise:.2g} times the noise" if noise > 0.1 * step else "hiding the noise"
    text = (
        f"the resolution of {_difference(step, channel)} is {step / extent:.2g} of the range and coarse, "
        f"{against}"
    )
    return [Fault("coarse-steps", text, size=step / noise if noise > 0.1 * step else float("nan"))]


def _staircase(samples: Array) -> bool:
    """Whether neighbours share values while the channel moves: its two longest rests are left out."""
    _, lengths = equal_runs(samples)
    rests = np.sort(lengths)[-2:].sum() if lengths.size > 4 else 0
    return bool(samples.size - rests >= 1.3 * max(lengths.size - 2, 1))


def _few_values(samples: Array) -> bool:
    """Whether the channel knows ten values at most, as a command or a switch does."""
    probe = samples[:: max(samples.size // 10_000, 1)]
    return bool(np.unique(probe[np.isfinite(probe)]).size <= 10)
