"""The instant at which a channel begins to move, with its uncertainty."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]

# powers of (t − t₀)₊ by which a movement may take off: a jump, a ramp, a first-order rise, a second-order
# rise
TAKE_OFFS = ((0,), (1,), (1, 2), (1, 2, 3), (2,), (2, 3), (2, 3, 4))
# height up to which the take-off is followed: the less noise, the lower, so that the powers left out do not
# show
LOWEST, HIGHEST = 0.04, 0.25
FEWEST = 8
GRID = 240


def onset(time: Array, samples: Array, level: Uncertain, amplitude: float, sigma: float) -> Uncertain:
    """Start of a movement away from a level.

    A jump within one or two samples started anywhere between the last sample before and the first after it:
    rectangular, u = width/√12. A slower one is fitted up to a quarter of its amplitude by
    level + Σ c_p (t − t₀)₊^p for each of TAKE_OFFS; t₀ runs over a grid, the c_p are linear, and the
    posterior of t₀ over grid and models (weights exp(−χ²/2) N^(−k/2), flat prior) gives mean and standard
    deviation.

    Parameters
    ----------
    time, samples : (n,) arrays
        From well before the start to the end of the movement.
    level : Uncertain
        Before the movement.
    amplitude : float
        Of the movement, signed.
    sigma : float
        Noise of one sample.

    Returns
    -------
    Uncertain
        In seconds.
    """
    height = (samples - level.value) / amplitude
    noise = max(sigma / abs(amplitude), 1e-9)
    length = int(np.clip(math.ceil((noise / 0.02) ** 2), 1, max(height.size // 10, 1)))
    smooth = np.convolve(height, np.full(length, 1.0 / length), mode="same") if length > 1 else height
    first = _leaves(smooth, noise / math.sqrt(length))
    if first is None or first == 0:
        return Uncertain(float(time[0]), math.nan, "s")
    high = np.flatnonzero(smooth[first:] >= HIGHEST)
    quarter = first + int(high[0]) if high.size else height.size - 1
    near = np.flatnonzero(smooth[first:] >= float(np.clip(1.5 * math.sqrt(noise), LOWEST, HIGHEST)))
    top = min(max(first + int(near[0]), first + FEWEST), quarter) if near.size else quarter
    if length == 1 and top - first < 3:
        return _between(time, first)
    # the moving mean rises half its length early
    return _fitted(time, height, first, min(top + length // 2 + 2 * (length > 1), height.size - 1), noise)


def _leaves(height: Array, noise: float) -> int | None:
    """First sample of the rise: the last one within the noise before the passage of 25 %, plus one."""
    passed = np.flatnonzero(height >= HIGHEST)
    if passed.size == 0:
        return None
    inside = np.flatnonzero(height[: passed[0]] <= min(3.0 * noise, 0.5 * HIGHEST))
    return int(inside[-1]) + 1 if inside.size else 0


def _between(time: Array, first: int) -> Uncertain:
    begin, end = float(time[first - 1]), float(time[first])
    return Uncertain(0.5 * (begin + end), (end - begin) / math.sqrt(12.0), "s", distribution="rectangular")


def _fitted(time: Array, height: Array, first: int, top: int, noise: float) -> Uncertain:
    back = max(2 * (top - first), 20)
    begin = max(first - back, 0)
    # means over groups, where there are thousands of samples
    group = max((top + 1 - begin) // 800, 1)
    stop = begin + (top + 1 - begin) // group * group
    t = time[begin:stop].reshape(-1, group).mean(axis=1)
    y = height[begin:stop].reshape(-1, group).mean(axis=1)
    noise /= math.sqrt(group)
    origin, scale = float(t[-1]), float(t[-1] - t[0])
    x = (t - origin) / scale
    step = 1.0 / max(t.size - 1, 1)
    starts = np.linspace(x[0], -step, GRID)
    for _ in range(3):
        logs = np.stack([_log_evidence(x, y, noise, starts, powers) for powers in TAKE_OFFS])
        weights = np.exp(logs - logs.max())
        total = weights.sum(axis=0)
        likely = np.flatnonzero(total > 1e-6 * total.max())
        low = starts[max(int(likely[0]) - 1, 0)]
        high = starts[min(int(likely[-1]) + 1, starts.size - 1)]
        mean = float(total @ starts / total.sum())
        deviation = math.sqrt(max(float(total @ (starts - mean) ** 2 / total.sum()), 0.0))
        starts = np.linspace(low, high, GRID)
    return Uncertain(origin + mean * scale, deviation * scale, "s")


def _log_evidence(x: Array, y: Array, noise: float, starts: Array, powers: tuple[int, ...]) -> Array:
    """−χ²/2 − k/2 ln N for each start, the coefficients solved; a take-off backwards is excluded."""
    after = np.maximum(x[None, :] - starts[:, None], 0.0)
    basis = np.stack([after**p if p else (after > 0.0).astype(float) for p in powers], axis=1)
    gram = np.einsum("gpn,gqn->gpq", basis, basis) + 1e-14 * np.eye(len(powers))
    right = basis @ y
    solved = np.linalg.solve(gram, right[..., None])[..., 0]
    cost = np.maximum(float(y @ y) - np.sum(solved * right, axis=1), 0.0)
    # noise beyond the stated one widens the posterior
    variance = max(noise * noise, float(cost.min()) / max(y.size - len(powers) - 1, 1))
    log = -0.5 * cost / variance - 0.5 * len(powers) * math.log(y.size) - 0.5 * y.size * math.log(variance)
    return np.where(solved[:, 0] > 0.0, log, -np.inf)
