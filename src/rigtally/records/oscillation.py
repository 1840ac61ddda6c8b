"""Stretches of a channel that swing: dwells at one frequency, sweeps, and what is neither."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

FEWEST_CYCLES = 3
# frequencies within so much of each other belong to one dwell
SAME_FREQUENCY = 0.03
# m₄/m₂² of a half-cycle about the median, noise taken out: 1 for a square, 1.5 for a sine, 1.8 for a triangle
SQUARE = 1.2


@dataclass(frozen=True)
class Swing:
    """One stretch: kind "dwell", "sweep" or "broadband", samples [begin, end), frequencies in Hz at both
    ends."""

    kind: str
    begin: int
    end: int
    first_frequency: float
    last_frequency: float


def swings(time: Array, samples: Array, sigma: float, extent: float) -> tuple[Swing, ...] | None:
    """The swinging stretches of a channel, or None where it does not swing for most of its time.

    Half-cycles are counted between passages through a band about the median (4 σ or 5 % of the range wide
    on each side), so that noise is not counted.

    Parameters
    ----------
    time, samples : (n,) arrays
        No missing samples.
    """
    edges = half_cycles(samples, max(4.0 * sigma, 0.05 * extent))
    if edges.size < 2 * FEWEST_CYCLES + 1:
        return None
    passages = _passage_times(time, samples, edges)
    halves = np.diff(passages)
    peaks, fullness = _shape(samples, edges, sigma)
    moving = halves > 0
    if not moving.all():
        return None
    square = float(halves[fullness < SQUARE].sum() / halves.sum())
    resting = float(halves[halves > 8.0 * np.median(halves)].sum() / halves.sum()) if square > 0.2 else 0.0
    if (
        square > 0.5
        or resting > 0.5
        or _decays(peaks)
        or passages[-1] - passages[0] < 0.3 * (time[-1] - time[0])
    ):
        return None
    # whole cycles from passage to passage in the same direction
    frequency = 1.0 / (passages[2:] - passages[:-2])
    # a passage scatters by σ/(2π f A), whatever f: its share of a cycle is that of both ends
    scatter = np.sqrt(2.0) * sigma / (2.0 * np.pi * float(np.median(peaks)))
    return _runs(edges, frequency, samples.size, max(SAME_FREQUENCY, 6.0 * scatter))


def half_cycles(samples: Array, band: float) -> NDArray[np.intp]:
    """First sample of each half-cycle: where the other side of the band is reached."""
    centred = samples - np.median(samples)
    side = np.where(centred > band, 1, np.where(centred < -band, -1, 0))
    rows = np.flatnonzero(side)
    if rows.size == 0:
        return rows
    turns = np.flatnonzero(np.diff(side[rows]) != 0) + 1
    return rows[turns]


def _passage_times(time: Array, samples: Array, edges: NDArray[np.intp]) -> Array:
    """Passage through the median by a straight line between the two samples around it, last one before the
    edge."""
    centred = samples - np.median(samples)
    sign = np.sign(centred)
    turn = np.flatnonzero(sign[1:] * sign[:-1] <= 0)
    last = turn[np.maximum(np.searchsorted(turn, edges) - 1, 0)]
    rise = centred[last + 1] - centred[last]
    part = np.where(rise != 0, -centred[last] / np.where(rise != 0, rise, 1.0), 0.5)
    return np.asarray(time[last] + np.clip(part, 0.0, 1.0) * (time[last + 1] - time[last]))


def _shape(samples: Array, edges: NDArray[np.intp], sigma: float) -> tuple[Array, Array]:
    """Amplitude √(2 m₂) of each half-cycle, and m₄/m₂²; the moments less those that noise adds.

    For a sum of signal and normal noise E x² = m₂ + σ² and E x⁴ = m₄ + 6 σ² m₂ + 3 σ⁴.
    """
    centred = samples - np.median(samples)
    lengths = np.diff(edges)

    def means(values: Array) -> Array:
        total = np.concatenate([[0.0], np.cumsum(values)])
        return np.asarray((total[edges[1:]] - total[edges[:-1]]) / lengths)

    second = np.maximum(means(centred**2) - sigma**2, 1e-300)
    fourth = means(centred**4) - 6.0 * sigma**2 * second - 3.0 * sigma**4
    return np.sqrt(2.0 * second), fourth / second**2


def _decays(peaks: Array) -> bool:
    """Whether the half-cycles ring down: ln peak falls on a straight line by more than 1.2."""
    rows = np.arange(peaks.size)
    logs = np.log(np.maximum(peaks, 1e-300))
    slope, _ = np.polyfit(rows, logs, 1)
    fitted = np.corrcoef(rows, logs)[0, 1] if np.ptp(logs) > 0 else 0.0
    return bool(slope * peaks.size < -1.2 and fitted < -0.9)


def _runs(edges: NDArray[np.intp], frequency: Array, count: int, same: float) -> tuple[Swing, ...]:
    """Neighbouring cycles of one frequency are a dwell; frequencies that keep moving one way are a sweep."""
    logs = np.log(frequency)
    starts = [0]
    reference = logs[0]
    for k in range(1, logs.size):
        if abs(logs[k] - reference) > same and abs(logs[k] - logs[starts[-1] : k].mean()) > same:
            starts.append(k)
            reference = logs[k]
        else:
            reference += (logs[k] - reference) / min(k - starts[-1] + 1, 8)
    ends = [*starts[1:], logs.size]
    runs = [(a, b) for a, b in zip(starts, ends, strict=True) if b - a >= 2 * FEWEST_CYCLES - 1]
    steady = [(a, b) for a, b in runs if _steady(logs[a:b], same)]
    covered = sum(b - a for a, b in steady) / logs.size
    if steady and covered > 0.5:
        return tuple(_swing("dwell", a, b, edges, frequency, count) for a, b in _joined(steady, logs, same))
    smooth = np.convolve(logs, np.full(5, 0.2), mode="valid") if logs.size >= 5 else logs
    moves = np.diff(smooth)
    one_way = abs(float(moves.sum())) > 0.7 * float(np.abs(moves).sum())
    kind = "sweep" if one_way and abs(float(smooth[-1] - smooth[0])) > 0.2 else "broadband"
    return (_swing(kind, 0, logs.size, edges, frequency, count),)


def _steady(logs: Array, same: float) -> bool:
    """Whether a run's frequency stands still: its two halves differ by less than a third of the tolerance."""
    half = logs.size // 2
    return bool(abs(np.median(logs[:half]) - np.median(logs[half:])) < same / 3.0)


def _joined(runs: list[tuple[int, int]], logs: Array, same: float) -> list[tuple[int, int]]:
    """Runs of one frequency that only a disturbed cycle or two parts."""
    out = [runs[0]]
    for begin, end in runs[1:]:
        first, last = out[-1]
        alike = abs(np.median(logs[begin:end]) - np.median(logs[first:last])) < same / 3.0
        if alike and begin - last <= 2:
            out[-1] = (first, end)
        else:
            out.append((begin, end))
    return out


def _swing(kind: str, begin: int, end: int, edges: NDArray[np.intp], frequency: Array, count: int) -> Swing:
    first, last = frequency[begin : begin + 3], frequency[max(end - 3, begin) : end]
    rows = int(edges[begin]), min(int(edges[min(end + 1, edges.size - 1)]), count)
    if kind == "dwell":
        whole = float(np.median(frequency[begin:end]))
        return Swing(kind, *rows, whole, whole)
    return Swing(kind, *rows, float(np.median(first)), float(np.median(last)))
