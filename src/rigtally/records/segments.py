"""Where a channel stands still and where it moves."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.records.sample_noise import noise_sigma

Array = NDArray[np.float64]

MOST_BLOCKS = 20_000
# noise of a block mean is brought down to this share of the channel's range, where the length allows
BLOCK_NOISE = 0.0025
FEWEST_BLOCKS = 500
# rise over a level, as a share of the range, that passes as drift
DRIFT = 0.03
# noise of rounding, as a share of the range, up to which it is believed
COARSEST = 0.03


@dataclass(frozen=True)
class Stretches:
    """Levels of a channel, as half-open ranges of samples in order; what lies between them moves.

    Attributes
    ----------
    levels : tuple of (begin, end)
    tolerance : float
        Movement that cannot be told from noise, in the channel's unit.
    sigma : float
        Noise of one sample.
    count : int
        Samples of the channel.
    """

    levels: tuple[tuple[int, int], ...]
    tolerance: float
    sigma: float
    count: int

    def gaps(self) -> list[tuple[int, int]]:
        """Ranges between, before and after the levels; empty ones only between two levels."""
        edges = [0, *(k for level in self.levels for k in level), self.count]
        pairs = list(zip(edges[::2], edges[1::2], strict=True))
        inner = pairs[1:-1] if self.levels else []
        outer_first = [pairs[0]] if pairs[0][1] > pairs[0][0] else []
        outer_last = [pairs[-1]] if self.levels and pairs[-1][1] > pairs[-1][0] else []
        return outer_first + inner + outer_last


def extent(samples: Array, sigma: float) -> float:
    """Range of the signal: of the samples, less what noise adds to it."""
    if samples.size == 0:
        return 0.0
    reach = sigma * math.sqrt(2.0 * math.log(max(samples.size, 2)))
    return max(float(samples.max() - samples.min()) - 2.0 * reach, 0.0)


def stretches(samples: Array, resolution: float = float("nan")) -> Stretches:
    """Levels of a channel without missing samples.

    Block means tame the noise; a polyline within the tolerance follows them; its flat pieces, where they are
    at least as long as their moving neighbours, are levels.
    """
    count = samples.size
    sigma = noise_sigma(samples)
    sigma = sigma if math.isfinite(sigma) else 0.0
    size = extent(samples, sigma)
    if math.isfinite(resolution):
        # two values of a command look like a resolution as large as their distance
        sigma = max(sigma, min(resolution / math.sqrt(12.0), COARSEST * size))
    if count < 8 or size <= 0.0:
        return Stretches(((0, count),), math.inf, sigma, count)
    wanted = math.ceil((sigma / (BLOCK_NOISE * size)) ** 2)
    block = max(1, min(wanted, count // FEWEST_BLOCKS), math.ceil(count / MOST_BLOCKS))
    blocks = count // block
    means = samples[: blocks * block].reshape(blocks, block).mean(axis=1)
    scatter = noise_sigma(means)
    scatter = max(sigma / math.sqrt(block), scatter if math.isfinite(scatter) else 0.0)
    # the polyline's own corners are noisy, too: 4.5 σ √(1 + ¾)
    tolerance = max(6.0 * scatter, 0.01 * size)
    if tolerance > 0.3 * size:
        return Stretches(((0, count),), tolerance, sigma, count)
    corners = polyline(means, tolerance)
    flat = _flat(means, corners, scatter, DRIFT * size, max(3, math.ceil(8 / block)))
    ranges = [(begin * block, count if end == blocks else end * block) for begin, end in flat]
    sharp = _sharpened(samples, ranges, block, sigma, tolerance)
    levels = _without_tops(sharp, np.asarray(corners) * block, count)
    return Stretches(tuple(levels), tolerance, sigma, count)


def _without_tops(
    levels: list[tuple[int, int]], corners: NDArray[np.int64], count: int
) -> list[tuple[int, int]]:
    """Levels without tops of a swing and bends of a rise.

    Those are shorter than the movement next to them. The record's first and last level may be, as a short
    rest before a long ring is; but not shorter than three times the straight pieces that touch it.
    """
    kept = list(levels)
    pieces = np.diff(corners)

    def least(begin: int, end: int, *, first: bool = False, last: bool = False) -> float:
        """What a level before (the first) or after (the last) the movement [begin, end) has to be long."""
        inside = pieces[(corners[1:] > begin) & (corners[:-1] < end)]
        if end <= begin or inside.size == 0:
            return 1.0
        if not (first or last):
            return float(end - begin)
        touching = int((inside[:2] if first else inside[-2:]).max())
        return float(min(end - begin, 3 * touching))

    while len(kept) > 1:
        edges = [0, *(k for level in kept for k in level), count]
        gaps = list(zip(edges[::2], edges[1::2], strict=True))
        share = [
            (end - begin) / max(least(*gaps[k], last=k == len(kept) - 1), least(*gaps[k + 1], first=k == 0))
            for k, (begin, end) in enumerate(kept)
        ]
        worst = int(np.argmin(share))
        if share[worst] >= 1.0:
            break
        del kept[worst]
    return kept


def polyline(values: Array, tolerance: float) -> list[int]:
    """Corners of a polyline that stays within the tolerance of the values.

    Ramer, Computer Graphics and Image Processing 1 (1972) 244; Douglas and Peucker, Cartographica 10 (1973)
    112.
    """
    corners = {0, values.size - 1}
    pending = [(0, values.size - 1)]
    while pending:
        first, last = pending.pop()
        if last - first < 2:
            continue
        rows = np.arange(first + 1, last)
        slope = (values[last] - values[first]) / (last - first)
        off = np.abs(values[rows] - values[first] - slope * (rows - first))
        worst = int(np.argmax(off))
        if off[worst] > tolerance:
            corner = int(rows[worst])
            corners.add(corner)
            pending += [(first, corner), (corner, last)]
    return sorted(corners)


def _flat(
    means: Array, corners: list[int], scatter: float, drift: float, shortest: int
) -> list[tuple[int, int]]:
    """Ranges of blocks of the polyline's flat pieces, joined where they touch at one level."""
    pieces = list(itertools.pairwise(corners))
    lengths = [last - first for first, last in pieces]
    flat = [_stands(means[first:last], scatter, drift) for first, last in pieces]
    levels: list[tuple[int, int]] = []
    for k, (first, last) in enumerate(pieces):
        if not flat[k]:
            continue
        neighbours = [lengths[j] for j in (k - 1, k + 1) if 0 <= j < len(pieces) and not flat[j]]
        if levels and levels[-1][1] >= first and _stands(means[levels[-1][0] : last], scatter, drift):
            levels[-1] = (levels[-1][0], last)
        elif last - first >= shortest and last - first >= max(neighbours, default=0):
            levels.append((first, last))
    # the corner block itself belongs to the level only at the record's end
    return [(first, means.size if last == means.size - 1 else last) for first, last in levels]


def _stands(values: Array, scatter: float, drift: float) -> bool:
    """Whether a piece's last third is where its first third is, and nothing in it leaves the line between
    them.

    Both within the drift that passes, or within the noise.
    """
    third = max(values.size // 3, 1)
    rise = float(values[-third:].mean() - values[:third].mean())
    line = rise * np.linspace(-0.75, 0.75, values.size)
    off = np.abs(values - np.median(values) - line)
    return abs(rise) <= max(drift, 4.0 * scatter * math.sqrt(2.0 / third)) and float(off.max()) <= max(
        drift, 6.0 * scatter
    )


def _sharpened(
    samples: Array, ranges: list[tuple[int, int]], block: int, sigma: float, tolerance: float
) -> list[tuple[int, int]]:
    """Ends of the levels to the sample: while samples stay within the noise, or the tolerance, of the
    level."""
    out = []
    for begin, end in ranges:
        middle = float(np.median(samples[begin:end]))
        band = max(4.0 * sigma, tolerance)
        head = samples[begin : min(begin + 2 * block + 2, end)]
        outside = np.flatnonzero(np.abs(head - middle) > band)
        first = begin + (int(outside[-1]) + 1 if outside.size and begin > 0 else 0)
        begin_tail = max(end - 2 * block - 2, first)
        tail = samples[begin_tail : min(end + 2 * block + 2, samples.size)]
        outside = np.flatnonzero(np.abs(tail - middle) > band)
        last = begin_tail + (int(outside[0]) if outside.size else tail.size)
        if end == samples.size:
            last = end
        if last - first >= 2:
            out.append((first, last))
    return [(a, min(b, out[k + 1][0]) if k + 1 < len(out) else b) for k, (a, b) in enumerate(out)]
