"""From printed stamps to a uniform grid: which row stands at which multiple of the interval.

Model: t_i = a + b·k_i + r_i, k_i whole numbers that do not fall, b the interval, r_i the rest: the rounding of
the printed stamp (at most half its last digit) and the jitter of the clock. Rows that are lost make k jump by
more than one, rows written twice leave it standing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Whole = NDArray[np.int64]

# share of the interval up to which the last printed digit lets every single difference be read as a whole number
FINE = 0.25


@dataclass(frozen=True)
class StampGrid:
    """The uniform grid nearest to the stamps.

    Attributes
    ----------
    start, interval : float
        a and b in seconds.
    index : (n,) whole numbers
        k, from 0.
    rest : (n,) array
        r in seconds.
    quantum : float
        Last digit of the printed stamps in seconds (0 where none was found).
    u_interval : float
        Relative standard uncertainty of b from the scatter of r.
    """

    start: float
    interval: float
    index: Whole
    rest: Array
    quantum: float
    u_interval: float

    @property
    def jitter(self) -> float:
        """Standard deviation of r in seconds, the rounding of the print taken out."""
        variance = float(np.mean(self.rest**2)) - self.quantum**2 / 12.0
        return float(np.sqrt(max(variance, 0.0)))


def stamp_quantum(stamps: Array) -> float:
    """Last digit of the printed stamps (seconds), or 0 where they are not multiples of one.

    Decimal places are tried from whole seconds to 1e-9 s, then the spacing of 32-bit numbers.
    """
    probe = stamps if stamps.size <= 4096 else stamps[:: stamps.size // 4096]
    fuzz = float(np.spacing(np.abs(stamps).max()))
    for places in range(10):
        quantum = 10.0**-places
        if quantum < 8 * fuzz:
            break
        if all(bool(np.all(np.abs(part - quantum * np.rint(part / quantum)) <= 4 * fuzz + 1e-7 * quantum))
               for part in (probe, stamps)):  # fmt: skip
            return quantum
    with np.errstate(over="ignore"):
        single = probe.astype(np.float32)
    if np.array_equal(single.astype(float), probe):
        return float(np.spacing(np.abs(single).max()))
    return 0.0


def fit_grid(stamps: Array, stated_interval: float | None = None) -> StampGrid:
    """The uniform grid that explains most of the stamps.

    Parameters
    ----------
    stamps : (n,) array
        Seconds, not falling, n >= 2, not all equal.
    stated_interval : float or None
        Interval that the user states; then only a is estimated.
    """
    quantum = stamp_quantum(stamps)
    steps = np.diff(stamps)
    origin = float(stamps[0])
    rows = np.arange(stamps.size, dtype=np.int64)
    if stated_interval is not None:
        index = _whole(steps, stated_interval)
        return _solve(stamps, index, quantum, stated_interval)
    typical = float(np.median(steps[steps > 0]))
    if quantum <= FINE * typical:
        index = _whole(steps, typical)
        first = _solve(stamps, index, quantum)
        return _solve(stamps, _whole(steps, first.interval), quantum)
    # coarse print: no row lost is the plain reading, taken where it leaves nothing but rounding
    plain = _solve(stamps, rows, quantum)
    if float(np.abs(plain.rest).max()) <= 0.75 * quantum:
        return plain
    index = _by_doubling(stamps - origin, typical)
    counted = _solve(stamps, index, quantum)
    better = float(np.mean(counted.rest**2)) < float(np.mean(plain.rest**2))
    return counted if better and np.all(np.diff(index) >= 1) else plain


def _whole(steps: Array, interval: float) -> Whole:
    """k from single differences: right wherever each deviates by less than half an interval."""
    counts = np.rint(steps / interval).astype(np.int64)
    return np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)


def _by_doubling(elapsed: Array, interval: float) -> Whole:
    """k from the whole grid, its length doubled at each turn so that no extrapolation passes b/2."""
    length = min(8, elapsed.size)
    start = 0.0
    while True:
        index = np.rint((elapsed[:length] - start) / interval)
        centred = index - index.mean()
        spread = float(centred @ centred)
        if spread > 0:
            interval = float(centred @ elapsed[:length]) / spread
            start = float(elapsed[:length].mean() - interval * index.mean())
        if length == elapsed.size:
            whole = np.rint((elapsed - start) / interval).astype(np.int64)
            return whole - whole[0]
        length = min(2 * length, elapsed.size)


def _solve(stamps: Array, index: Whole, quantum: float, interval: float | None = None) -> StampGrid:
    """a and b by least squares for given k."""
    elapsed = stamps - stamps[0]
    centred = index - index.mean()
    spread = float(centred @ centred)
    known = interval is not None
    if interval is None:
        interval = float(centred @ elapsed) / spread if spread > 0 else float("nan")
    start = float(elapsed.mean() - interval * index.mean())
    rest = elapsed - start - interval * index
    deviation = float(np.sqrt(np.sum(rest**2) / max(stamps.size - 2, 1)))
    u_interval = 0.0 if known or spread <= 0 else deviation / np.sqrt(spread) / interval
    # round-off of the stamps alone is no scatter
    fuzz = 4 * float(np.spacing(np.abs(stamps).max()))
    if deviation <= fuzz:
        start, rest, u_interval = 0.0, np.zeros_like(rest), 0.0
        if not known:
            interval = _tidy(interval, fuzz / max(int(index[-1]), 1))
    return StampGrid(float(stamps[0]) + start, interval, index, rest, quantum, float(u_interval))


def _tidy(interval: float, slack: float) -> float:
    """The shortest decimal interval or rate within the round-off."""
    for digits in range(1, 13):
        for near in (float(f"{interval:.{digits}g}"), 1.0 / float(f"{1.0 / interval:.{digits}g}")):
            if abs(near - interval) <= slack + 4e-16 * interval:
                return near
    return interval
