"""The sample clock: from stamps or a stated rate to a record whose clock is known for what it is."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.record import Channel, Fault, Provenance, Record
from rigtally.records.stamp_grid import StampGrid, fit_grid

Array = NDArray[np.float64]

# Jitter (standard deviation, share of the interval) up to which the clock is used as uniform. The error of
# one sample is slope × jitter: for a sine at a tenth of the sampling rate at most 1.3 % of its amplitude.
UNIFORM_JITTER = 0.02
# Wander (relative standard deviation of the interval) up to which it is; it goes into u of the interval.
UNIFORM_WANDER = 1e-3
# stated rate and stamps may differ by so much
RATE_TOLERANCE = 0.01
# the grid may grow by lost rows to this many times the rows that are there
GRID_GROWTH = 2
FIRST_ROWS = 8
# rows lost in a row from which they are a gap
GAP_ROWS = 10


def make_record(
    channels: Sequence[Channel],
    stamps: Array | None,
    rate: float | None,
    provenance: Provenance,
) -> Record:
    """Join channels and clock.

    Lost rows of a uniform clock become rows of NaN, so that the grid stays uniform and nothing is
    interpolated. Where the clock is not uniform enough the true stamps are kept.

    Parameters
    ----------
    channels : sequence of Channel
        All with n samples.
    stamps : (n,) array or None
        Seconds; NaN where a row has none.
    rate : float or None
        Samples per second as stated. Together with stamps it fixes the interval, and the stamps tell
        only which rows are lost.
    provenance : Provenance

    Raises
    ------
    LogError
        codes "too-short", "no-clock", "bad-rate", "ragged-channels", "clock-backwards", "clock-stands",
        "rate-contradicts-stamps".
    """
    where = provenance.file
    channels = tuple(channels)
    count = _common_count(channels, stamps, where)
    if rate is not None and not (np.isfinite(rate) and rate > 0):
        raise LogError(
            f"the rate {rate} Hz is not above 0", where=where, do="state it as 1 kHz", code="bad-rate"
        )
    if count < 2:
        raise LogError(
            f"the log has {count} row{'' if count == 1 else 's'}",
            where=where,
            do="a record needs two samples or more",
            code="too-short",
        )
    if stamps is None:
        if rate is None:
            raise LogError(
                "the log has no time column and no sampling rate",
                where=where,
                do='state it with --rate, as --rate "1 kHz", or name the time column with --time',
                code="no-clock",
            )
        return Record(channels, 0.0, 1.0 / rate, provenance=provenance)
    return _stamped(channels, np.asarray(stamps, dtype=float), rate, provenance)


def _common_count(channels: tuple[Channel, ...], stamps: Array | None, where: str) -> int:
    counts = {channel.name: int(channel.samples.size) for channel in channels}
    if stamps is not None:
        counts["time"] = int(np.size(stamps))
    if len(set(counts.values())) > 1:
        listing = ", ".join(f"{name} {n}" for name, n in counts.items())
        raise LogError(
            f"the channels have different numbers of samples ({listing})",
            where=where,
            do="choose channels of one clock",
            code="ragged-channels",
        )
    return next(iter(counts.values()), 0)


def _stamped(
    channels: tuple[Channel, ...], stamps: Array, rate: float | None, provenance: Provenance
) -> Record:
    faults: list[Fault] = []
    channels, stamps = _without_missing_stamps(channels, stamps, faults, provenance)
    _refuse_backwards(stamps, provenance)
    grid = fit_grid(stamps, None if rate is None else 1.0 / rate)
    if rate is not None:
        _refuse_contradiction(stamps, grid, rate, provenance.file)
    channels, stamps, grid = _without_doubled(channels, stamps, grid, faults)
    places = int(grid.index[-1]) + 1
    steady = grid.jitter <= UNIFORM_JITTER * grid.interval and grid.wander <= UNIFORM_WANDER
    distinct = bool(np.all(np.diff(grid.index) >= 1)) and not grid.irregular
    uniform = (steady or rate is not None) and distinct and places <= GRID_GROWTH * stamps.size + 1000
    if grid.irregular:
        _say_irregular(stamps, faults)
    else:
        _say_lost(grid, faults, filled=uniform)
        _say_rounding(grid, faults)
        _say_scatter(grid, faults, uniform=uniform, stated=rate is not None)
    if uniform and places > stamps.size:
        channels = tuple(replace(c, samples=_spread(c.samples, grid)) for c in channels)
    return Record(
        channels,
        start=grid.start if uniform else float(stamps[0]),
        interval=grid.interval if uniform else float("nan"),
        stamps=None if uniform else stamps,
        clock_faults=tuple(faults),
        u_interval=grid.u_interval,
        jitter=grid.jitter,
        provenance=provenance,
    )


def _spread(samples: Array, grid: StampGrid) -> Array:
    """The samples at their places on the grid, NaN where the log has no row."""
    out = np.full(int(grid.index[-1]) + 1, np.nan)
    out[grid.index] = samples
    return out


def _lines(rows: NDArray[np.int64], provenance: Provenance) -> str:
    """Row numbers as a person counts them: lines of the file where they are known."""
    first = provenance.lines[0] if provenance.lines else 1
    word = "line" if provenance.lines else "row"
    shown = [str(int(row) + first) for row in rows[:FIRST_ROWS]]
    more = ", …" if len(rows) > FIRST_ROWS else ""
    return f"{word}{'s' if len(rows) > 1 else ''} {', '.join(shown)}{more}"


def _without_missing_stamps(
    channels: tuple[Channel, ...], stamps: Array, faults: list[Fault], provenance: Provenance
) -> tuple[tuple[Channel, ...], Array]:
    known = np.isfinite(stamps)
    missing = np.flatnonzero(~known)
    if missing.size == 0:
        return channels, stamps
    if known.sum() < 2:
        raise LogError(
            f"only {int(known.sum())} rows have a time stamp",
            where=provenance.file,
            do='state the rate with --rate, as --rate "1 kHz"',
            code="no-clock",
        )
    faults.append(
        Fault(
            "stamp-missing",
            f"{_rows(missing.size)} without a time stamp left out ({_lines(missing, provenance)})",
            int(missing.size),
            _first(missing),
        )
    )
    return tuple(replace(c, samples=c.samples[known]) for c in channels), stamps[known]


def _refuse_backwards(stamps: Array, provenance: Provenance) -> None:
    steps = np.diff(stamps)
    back = np.flatnonzero(steps < 0) + 1
    if back.size:
        plural = "s" if back.size > 1 else ""
        raise LogError(
            f"the clock steps backwards {back.size} time{plural} ({_lines(back, provenance)}; the first by "
            f"{-steps[back[0] - 1]:g} s)",
            where=provenance.file,
            do="cut the file there, or sort its rows by time if they are out of order",
            code="clock-backwards",
        )
    if stamps[-1] == stamps[0]:
        raise LogError(
            f"every row has the time {stamps[0]:g} s",
            where=provenance.file,
            do='name another column with --time, or state the rate with --rate, as --rate "1 kHz"',
            code="clock-stands",
        )


def _refuse_contradiction(stamps: Array, grid: StampGrid, rate: float, where: str) -> None:
    """A stated rate that the stamps deny is a wrong natural frequency in the making."""
    steps = np.diff(stamps)
    own = float(np.median(steps[steps > 0]))
    mean = (stamps[-1] - stamps[0]) / max(int(grid.index[-1]), 1)
    coarse = grid.quantum / own
    agrees = abs(own * rate - 1.0) <= RATE_TOLERANCE + coarse or abs(mean * rate - 1.0) <= RATE_TOLERANCE
    far = abs(mean * rate - 1.0) > RATE_TOLERANCE + grid.quantum * rate / stamps.size
    if far or not agrees:
        raise LogError(
            f"the stated rate is {rate:g} Hz, but the time stamps say {1.0 / (mean if far else own):.6g} Hz",
            where=where,
            do="leave --rate out, or leave the time column out if its stamps are wrong",
            code="rate-contradicts-stamps",
        )


def _without_doubled(
    channels: tuple[Channel, ...], stamps: Array, grid: StampGrid, faults: list[Fault]
) -> tuple[tuple[Channel, ...], Array, StampGrid]:
    """One row for each stamp: equal rows once, contradicting ones as NaN."""
    again = np.concatenate([[False], (np.diff(grid.index) == 0) & (np.diff(stamps) == 0.0)])
    doubled = np.flatnonzero(again)
    if doubled.size == 0:
        return channels, stamps, grid
    keep = ~again
    place = np.cumsum(keep) - 1
    cleaned = []
    contradicting = np.zeros(stamps.size, dtype=bool)
    for channel in channels:
        first = channel.samples[keep].copy()
        other = channel.samples[doubled]
        kept = first[place[doubled]]
        differ = (other != kept) & ~(np.isnan(other) & np.isnan(kept))
        contradicting[doubled] |= differ
        first[place[doubled[differ]]] = np.nan
        cleaned.append(replace(channel, samples=first))
    unequal = int(contradicting.sum())
    text = f"{_rows(doubled.size)} with the stamp of the row before left out"
    if unequal:
        text += f"; where the two contradict each other ({unequal}) the first is left out as well"
    faults.append(Fault("doubled", text, int(doubled.size), _first(doubled)))
    kept_grid = replace(grid, index=grid.index[keep], rest=grid.rest[keep])
    return tuple(cleaned), stamps[keep], kept_grid


def _rows(count: int) -> str:
    return f"{count} row{'' if count == 1 else 's'}"


def _first(rows: NDArray[np.int64]) -> tuple[int, ...]:
    return tuple(int(row) for row in rows[:FIRST_ROWS])


def _say_lost(grid: StampGrid, faults: list[Fault], *, filled: bool) -> None:
    jumps = np.diff(grid.index)
    at = np.flatnonzero(jumps > 1)
    if at.size == 0:
        return
    missing = int(np.sum(jumps[at] - 1))
    longest = int(jumps[at].max() - 1)
    share = missing / (int(grid.index[-1]) + 1)
    how = "they are left out (empty rows), not interpolated" if filled else "the true stamps are used"
    where = f"in {at.size} places, at most {longest} in a row" if at.size > 1 else "in one place"
    faults.append(
        Fault(
            "gap" if longest >= GAP_ROWS else "lost-rows",
            f"{_rows(missing)} missing ({share:.2g} of the record) {where} "
            f"({longest * grid.interval:.4g} s); {how}",
            missing,
            _first(at + 1),
            float(longest * grid.interval),
        )
    )


def _say_rounding(grid: StampGrid, faults: list[Fault]) -> None:
    if grid.coarse:
        faults.append(
            Fault(
                "coarse-stamps",
                f"the stamps are printed in steps of {grid.quantum:g} s, no finer than the interval of "
                f"{grid.interval:.6g} s: a single lost row could not be seen",
                size=grid.quantum,
            )
        )


def _say_irregular(stamps: Array, faults: list[Fault]) -> None:
    low, high = np.quantile(np.diff(stamps), [0.05, 0.95])
    faults.append(
        Fault(
            "irregular",
            f"the rows come at no steady rate (nine in ten steps are {low:.4g} to {high:.4g} s); the true "
            "stamps are used (state --rate if the converter has a clock of its own)",
            size=float(high / low) if low > 0 else float("inf"),
        )
    )


def _say_scatter(grid: StampGrid, faults: list[Fault], *, uniform: bool, stated: bool) -> None:
    """Jitter acts as noise of slope × jitter: for a sine of frequency f by 2π f σ of its size."""
    if uniform:
        how = "the stated rate is used all the same" if stated else "the clock is used as uniform"
    else:
        how = "the true stamps are used (state --rate if the converter has a clock of its own)"
    share = grid.jitter / grid.interval
    if share > 1e-3 and not grid.coarse:
        faults.append(
            Fault(
                "jitter",
                f"the stamps scatter by {share:.2g} of the interval of {grid.interval:.6g} s about a uniform "
                f"clock; read as uniform this adds noise of {2.0 * np.pi * 0.1 * share:.2g} of a signal at a "
                f"tenth of the sampling rate; {how}",
                size=share,
            )
        )
    if grid.wander > 1e-6:
        faults.append(
            Fault(
                "wander",
                f"the clock's interval wanders by {grid.wander:.2g} of itself over the record; "
                + ("this is carried in u of the interval" if uniform else how),
                size=grid.wander,
            )
        )
