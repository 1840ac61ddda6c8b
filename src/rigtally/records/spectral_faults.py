"""Faults that show in the spectrum of a channel: mains hum, and content folded at half the sampling rate."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from rigtally.records.record import Channel, Fault

Array = NDArray[np.float64]

MAINS = (50.0, 60.0)
# a national grid keeps its frequency within so much of the nominal one; loggers add a little
MAINS_BAND = 0.004
LONGEST = 1 << 21
SEGMENT = 1024


def find_hum(channel: Channel, interval: float, false_alarm: float) -> list[Fault]:
    """A line at 50 Hz or 60 Hz that stands out of its neighbourhood.

    Periodogram with a Hann window. Noise gives each bin an exponential distribution about the local mean, so
    the largest of m bins passes x times the mean with the chance m·exp(−x). A line that makes up the channel,
    or has a peer within a fifth of its frequency, is taken as excitation and not reported.
    """
    x = _whole(channel.samples[:LONGEST])
    count = x.size
    if count < 64:
        return []
    window = np.hanning(count)
    power = np.abs(np.fft.rfft((x - x.mean()) * window)) ** 2
    spacing = 1.0 / (count * interval)
    unit = channel.written_unit or channel.unit
    found = []
    for mains in MAINS:
        # twelve bins of neighbourhood on each side, all below half the sampling rate
        reach = max(0.2 * mains, 16 * spacing)
        if mains - reach < 2 * spacing or mains + reach > (power.size - 2) * spacing:
            continue
        centre = mains / spacing
        inside = slice(math.floor(centre * (1 - MAINS_BAND)) - 1, math.ceil(centre * (1 + MAINS_BAND)) + 2)
        peak = inside.start + int(np.argmax(power[inside]))
        near = np.arange(math.floor((mains - reach) / spacing), math.ceil((mains + reach) / spacing) + 1)
        near = near[(np.abs(near - peak) > 4) & ((near < inside.start - 2) | (near > inside.stop + 1))]
        # a smooth signal's spectrum falls steeply: compare with the higher of both sides
        sides = [near[near < peak], near[near > peak]]
        floor = max(float(np.median(power[side])) for side in sides if side.size) / math.log(2.0)
        bins = inside.stop - inside.start
        limit = math.log(2.0 * len(MAINS) * bins / false_alarm)
        # peers within an octave: harmonics of a drive, or lines of a multisine
        wide = power[max(peak // 2, 2) : 2 * peak + 1].copy()
        wide[max(peak - 4 - max(peak // 2, 2), 0) : peak + 5 - max(peak // 2, 2)] = 0.0
        peer = max(0.2 * float(power[peak]), math.log(wide.size / false_alarm) * floor)
        if power[peak] <= limit * floor or float(wide.max()) > peer:
            continue
        amplitude = 2.0 * math.sqrt(float(power[peak])) / float(window.sum())
        if amplitude > 0.3 * math.sqrt(2.0) * float(np.std(x)):
            continue
        frequency = peak * spacing
        found.append(
            Fault(
                "mains-hum",
                f"a line of {amplitude / abs(channel.factor):.3g} {unit}".rstrip()
                + f" amplitude at {frequency:.4g} Hz (mains)",
                size=amplitude,
            )
        )
    return found


def find_folding(samples: Array, resolution: float, false_alarm: float) -> list[Fault]:
    """A spectrum that rises towards half the sampling rate: nothing shows an anti-alias filter.

    What does not stand above the rounding to `resolution` (power q²/12) is not looked at.

    Mean power in the highest tenth of the band against the band from 0.6 to 0.8, over Hann segments of 1024
    samples. For white noise their ratio scatters by √(1/m₁ + 1/m₂) about 1, m the independent bins in each.
    """
    from scipy.special import ndtri

    x = _whole(samples[:LONGEST])
    length = min(SEGMENT, x.size // 4)
    if length < 64:
        return []
    blocks = x.size // length
    table = x[: blocks * length].reshape(blocks, length)
    table = (table - table.mean(axis=1, keepdims=True)) * np.hanning(length)
    power = np.mean(np.abs(np.fft.rfft(table, axis=1)) ** 2, axis=0)
    bins = power.size - 1
    top = power[int(0.88 * bins) : int(0.98 * bins)]
    middle = power[int(0.6 * bins) : int(0.8 * bins)]
    # the Hann window makes neighbouring bins alike: 1.5 bins are worth one
    scatter = math.sqrt(1.5 / blocks * (1.0 / top.size + 1.0 / middle.size))
    ratio = float(np.mean(top) / np.mean(middle)) if float(np.mean(middle)) > 0 else 0.0
    limit = max(2.0, math.exp(-float(ndtri(false_alarm)) * 1.3 * scatter))
    rounding = (
        resolution**2 / 12.0 * float(np.sum(np.hanning(length) ** 2)) if math.isfinite(resolution) else 0.0
    )
    if ratio <= limit or float(np.mean(top)) < 5.0 * rounding:
        return []
    return [
        Fault(
            "no-anti-alias",
            f"the spectrum rises towards half the sampling rate (by {ratio:.3g} in power): content from "
            "above it may be folded back, and nothing shows an anti-alias filter",
            size=ratio,
        )
    ]


def _whole(samples: Array) -> Array:
    """Samples with the missing ones bridged by straight lines, to look at the spectrum only."""
    known = np.isfinite(samples)
    if known.all():
        return samples
    rows = np.arange(samples.size)
    return np.interp(rows, rows[known], samples[known]) if known.any() else np.zeros(0)
