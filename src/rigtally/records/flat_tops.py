"""Flat tops: runs of one value, and whether a signal was cut off there."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

SHORTEST = 5
# samples on each side of a top from which its curves are drawn
FEWEST, MOST = 6, 60
TOPS = 3


def equal_runs(samples: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """First sample and length of each run of equal values (a NaN is a run of its own)."""
    change = np.flatnonzero(samples[1:] != samples[:-1]) + 1
    starts = np.concatenate([[0], change]).astype(np.intp)
    lengths = np.diff(np.concatenate([starts, [samples.size]])).astype(np.intp)
    return starts, lengths


def cut_off(samples: Array, resolution: float) -> bool:
    """Whether the largest value is where a smooth signal was cut.

    On each side of the longest runs at the largest value a parabola through the samples is carried on to
    the middle of the run. A crest that was cut off would have stood above it, from both sides, by three
    resolution steps (or a thousandth of the range), and bends down on its way there on one of them at
    least. A ramp that stops, a held command and a level that is approached do not: they are no proof.
    """
    top = float(np.nanmax(samples))
    starts, lengths = equal_runs(samples)
    at_top = np.flatnonzero((samples[starts] == top) & (lengths >= SHORTEST))
    if at_top.size == 0:
        return False
    step = resolution if math.isfinite(resolution) else 0.0
    least = max(3.0 * step, 1e-3 * (top - float(np.nanmin(samples))))
    longest = at_top[np.argsort(lengths[at_top])[-TOPS:]]
    return any(_crest(samples, int(starts[k]), int(lengths[k]), top, least, step) for k in longest)


def _crest(samples: Array, start: int, length: int, top: float, least: float, step: float) -> bool:
    reach = int(np.clip(length, FEWEST, MOST))
    left = samples[max(start - reach, 0) : start]
    right = samples[start + length : start + length + reach][::-1]
    heights, bends = zip(*(_carried(side, length, step) for side in (left, right)), strict=True)
    return min(heights) - top > least and any(bends)


def _carried(side: Array, length: int, step: float) -> tuple[float, bool]:
    """Value in the middle of the run of the parabola through the samples before it, and whether it bends
    down.

    A parabola that bends up, or not by five times what rounding (q/√12 a sample) makes of it, is carried on
    as a straight line. −inf where the samples do not lead upwards.
    """
    if side.size < FEWEST or not np.all(np.isfinite(side)) or not np.all(np.diff(side) >= 0.0):
        return -math.inf, False
    x = np.arange(side.size) - 0.5 * (side.size - 1)
    basis = np.stack([np.ones_like(x), x, x * x], axis=1)
    (a, b, c), *_ = np.linalg.lstsq(basis, side, rcond=None)
    u = step / math.sqrt(12.0) * math.sqrt(float(np.linalg.inv(basis.T @ basis)[2, 2]))
    middle = float(x[-1]) + 1.0 + 0.5 * length
    if c < -max(5.0 * u, 1e-3 * abs(float(b)) / side.size):
        crest = min(float(-0.5 * b / c), middle)
        return float(a + b * crest + c * crest * crest), True
    slope = float(np.polyfit(x, side, 1)[0])
    return float(side[-1]) + slope * (middle - float(x[-1])), False
