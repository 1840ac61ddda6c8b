"""From printed stamps to a uniform grid: which row stands at which multiple of the interval.

Model: t_i = a + b·k_i + r_i with whole numbers k_i that do not fall and b the interval. The rest r_i is the
rounding of the printed stamp (at most half its last digit), the jitter of the clock (changes from row to row)
and its wander (changes over many rows). Lost rows make k jump, rows written twice leave it standing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Whole = NDArray[np.int64]

# last printed digit, as a share of the interval, up to which single differences show lost rows
FINE = 0.25
# scatter of single differences, as a share of the interval, up to which they show lost rows (5 sigma)
STEADY = 0.1
BLOCK = 100


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
        Relative standard uncertainty of b: the scatter of r, and the wander of the clock.
    jitter : float
        Standard deviation of r from row to row in seconds, the rounding of the print taken out.
    wander : float
        Relative standard deviation of the interval over stretches of 100 rows.
    """

    start: float
    interval: float
    index: Whole
    rest: Array
    quantum: float
    u_interval: float
    jitter: float = 0.0
    wander: float = 0.0

    @property
    def irregular(self) -> bool:
        """Whether there is no grid: most places empty, and what is there does not stand on it exactly."""
        jumps = float(np.mean(np.diff(self.index) > 1))
        vague = self.quantum > FINE * self.interval or self.jitter > 0.05 * self.interval
        return (jumps > 0.2 and vague) or self.jitter > 0.5 * self.interval

    @property
    def coarse(self) -> bool:
        """Whether the print hides single lost rows."""
        return self.quantum >= self.interval and float(np.abs(self.rest).max()) > 0.1 * self.quantum


def stamp_quantum(stamps: Array) -> float:
    """Last digit of the printed stamps (seconds), or 0 where they are not multiples of one.

    Decimal places are tried from whole seconds to 1e-9 s, then the spacing of 32-bit numbers.
    """
    probe = stamps[:: max(stamps.size // 2048, 1)]
    fuzz = float(np.spacing(np.abs(stamps).max()))

    def multiples(values: Array, quantum: float) -> bool:
        off = np.abs(values - quantum * np.rint(values / quantum))
        return bool(off.max() <= 4 * fuzz + 1e-7 * quantum)

    for places in range(10):
        quantum = 10.0**-places
        if quantum < 8 * fuzz:
            break
        if multiples(probe, quantum) and multiples(stamps, quantum):
            return quantum
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
    index = _index(stamps, quantum, stated_interval)
    return _with_scatter(_solve(stamps, index, quantum, stated_interval))


def _index(stamps: Array, quantum: float, interval: float | None) -> Whole:
    """k: from single differences where they are steady, else from the whole grid."""
    steps = np.diff(stamps)
    rows = np.arange(stamps.size, dtype=np.int64)
    typical = interval or float(np.median(steps[steps > 0]))
    relative = steps / typical
    scatter = 1.4826 * float(np.median(np.abs(relative - 1.0)))
    if quantum > FINE * typical:
        # coarse print: no row lost is the plain reading, taken where it leaves nothing but rounding
        plain = _solve(stamps, rows, quantum, interval)
        if float(np.abs(plain.rest).max()) <= 0.75 * quantum:
            return rows
        if interval is None and not _all_multiples(relative):
            typical = _period(stamps - stamps[0], typical, quantum)
    elif scatter > STEADY:
        plain = _solve(stamps, _counted(relative, 1.5 + 5.0 * scatter), quantum, interval)
    else:
        return _counted(relative, 1.5)
    index = _by_doubling(stamps - stamps[0], typical)
    whole = _solve(stamps, index, quantum, interval)
    # rounding to the nearest place makes any rest smaller: it must be much smaller to be believed
    better = float(np.mean(whole.rest**2)) < 0.25 * float(np.mean(plain.rest**2))
    return index if better else plain.index


def _all_multiples(relative: Array) -> bool:
    return bool(np.abs(relative - np.rint(relative)).max() < 1e-3 and relative.min() > 0.5)


def _counted(relative: Array, threshold: float) -> Whole:
    """k from differences in intervals: 0 where the stamp is repeated, counted out above the threshold."""
    counts = np.where(relative > threshold, np.rint(relative), np.where(relative == 0.0, 0.0, 1.0))
    return np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)


def _period(elapsed: Array, typical: float, quantum: float) -> float:
    """Interval of coarsely printed stamps with rows lost: the longest period that they fit.

    |mean exp(2πi t/b)| is sin(πq/b)/(πq/b) for a grid of interval b whose stamps are rounded to q.
    """
    head = elapsed[:256]
    span = float(head[-1])
    # half a turn over the span for each candidate keeps the peak from being missed
    rates = np.arange(0.6 / typical, 2.2 / typical, 0.25 / span) if span > 0 else np.array([1.0 / typical])
    concentration = np.abs(np.exp(2j * np.pi * np.outer(rates, head)).mean(axis=1))
    fits = concentration > 0.8 * np.maximum(np.sinc(quantum * rates), 0.3)
    shared = np.flatnonzero(fits)
    if shared.size == 0:
        return typical
    near = np.flatnonzero(np.abs(rates - rates[shared[0]]) <= 1.0 / span)
    return float(1.0 / rates[near[np.argmax(concentration[near])]])


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
            return np.asarray(whole - whole[0], dtype=np.int64)
        length = min(2 * length, elapsed.size)


def _solve(stamps: Array, index: Whole, quantum: float, interval: float | None) -> StampGrid:
    """a and b by least squares for given k."""
    elapsed = stamps - stamps[0]
    centred = index - index.mean()
    spread = float(centred @ centred)
    stated = interval is not None
    if interval is None:
        interval = float(centred @ elapsed) / spread
    start = float(elapsed.mean() - interval * index.mean())
    rest = elapsed - start - interval * index
    deviation = float(np.sqrt(np.sum(rest**2) / max(stamps.size - 2, 1)))
    u_interval = 0.0 if stated else float(deviation / np.sqrt(spread) / interval)
    if not stated:
        # rounding follows the clock in a slow saw-tooth, which many rows do not average out: half a digit at
        # the two ends of the record tilts it by up to q over its length
        span = interval * max(int(index[-1]), 1)
        u_interval = float(
            np.hypot(u_interval, min(quantum, deviation * np.sqrt(12.0)) / np.sqrt(12.0) / span)
        )
    # round-off of the stamps alone is no scatter
    fuzz = 4 * float(np.spacing(np.abs(stamps).max()))
    if deviation <= fuzz:
        start, rest, u_interval = 0.0, np.zeros_like(rest), 0.0
    if not stated and u_interval < 1e-5:
        interval = _tidy(interval, interval * (u_interval + 4e-15) + fuzz / max(int(index[-1]), 1))
    return StampGrid(float(stamps[0]) + start, interval, index, rest, quantum, u_interval)


def _with_scatter(grid: StampGrid) -> StampGrid:
    """Part r into wander (means of 100 rows) and jitter (what is left, less the rounding)."""
    rest, rounding = grid.rest, grid.quantum**2 / 12.0
    wander = 0.0
    local = rest
    blocks = rest.size // BLOCK
    if blocks >= 4 and float(np.abs(rest).max()) > 0.75 * grid.quantum:
        table = rest[: blocks * BLOCK].reshape(blocks, BLOCK)
        means = table.mean(axis=1)
        centres = grid.index[: blocks * BLOCK].reshape(blocks, BLOCK).mean(axis=1)
        rates = np.diff(means) / np.diff(centres) / grid.interval
        smooth = np.interp(grid.index, centres, means)
        local = rest - smooth
        # means of 100 rows scatter by jitter alone, too
        by_jitter = 2.0 * float(np.var(local)) / BLOCK / (BLOCK * grid.interval) ** 2
        wander = float(np.sqrt(max(float(np.mean(rates**2)) - 3.0 * by_jitter, 0.0)))
        if wander == 0.0:
            local = rest
    jitter = float(np.sqrt(max(float(np.mean(local**2)) - rounding, 0.0)))
    return StampGrid(
        grid.start,
        grid.interval,
        grid.index,
        rest,
        grid.quantum,
        float(np.hypot(grid.u_interval, wander)),
        jitter,
        wander,
    )


def _tidy(interval: float, slack: float) -> float:
    """The shortest decimal interval or rate within the round-off."""
    for digits in range(1, 13):
        for near in (float(f"{interval:.{digits}g}"), 1.0 / float(f"{1.0 / interval:.{digits}g}")):
            if abs(near - interval) <= slack:
                return near
    return interval
