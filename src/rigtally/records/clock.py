"""The sample clock: from stamps or a stated rate to a record with a clock that can be trusted, or said not to."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.record import Channel, Fault, Provenance, Record
from rigtally.records.stamp_grid import StampGrid, fit_grid

Array = NDArray[np.float64]

# Jitter (standard deviation, share of the interval) up to which the clock is used as uniform. The error of one
# sample is slope × jitter; a sine at a tenth of the sampling rate then errs by at most 1.3 % of its amplitude.
UNIFORM_JITTER = 0.02
# stated rate and stamps may differ by so much
RATE_TOLERANCE = 0.01
# the grid may grow by lost rows to this many times the rows that are there
GRID_GROWTH = 2
FIRST_ROWS = 8


def make_record(
    channels: Sequence[Channel],
    stamps: Array | None,
    rate: float | None,
    provenance: Provenance,
) -> Record:
    """Join channels and clock.

    Lost rows of a uniform clock become rows of NaN, so that the grid stays uniform and nothing is interpolated.
    Where the clock is not uniform enough the true stamps are kept and `interval` is the typical one only in the
    faults' texts.

    Parameters
    ----------
    channels : sequence of Channel
        All with n samples.
    stamps : (n,) array or None
        Seconds; NaN where a row has none.
    rate : float or None
        Samples per second as stated. Together with stamps it fixes the interval, and the stamps tell only which
        rows are lost.
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
        raise LogError(f"the rate {rate} Hz is not above 0", where=where, do="state it as 1 kHz", code="bad-rate")
    if count < 2:
        raise LogError(
            f"the log has {count} rows", where=where, do="a record needs two samples or more", code="too-short"
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
    interval, jitter = grid.interval, grid.jitter
    lost = int(grid.index[-1]) + 1 - stamps.size
    on_grid = rate is not None or jitter <= UNIFORM_JITTER * interval
    _say_lost(grid, faults, filled=on_grid and int(grid.index[-1]) + 1 <= GRID_GROWTH * stamps.size + 1000)
    _say_rounding(grid, faults)
    _say_jitter(grid, on_grid, rate is not None, faults)
    if not on_grid or lost > (GRID_GROWTH - 1) * stamps.size + 1000:
        return Record(
            channels,
            start=float(stamps[0]),
            stamps=stamps,
            clock_faults=tuple(faults),
            u_interval=grid.u_interval,
            jitter=jitter,
            provenance=provenance,
        )
    if lost > 0:
        channels = tuple(replace(c, samples=_spread(c.samples, grid)) for c in channels)
    return Record(
        channels,
        start=grid.start,
        interval=interval,
        clock_faults=tuple(faults),
        u_interval=grid.u_interval,
        jitter=jitter,
        provenance=provenance,
    )


def _spread(samples: Array, grid: StampGrid) -> Array:
    """The samples at their places on the grid, NaN where the log has no row."""
    out = np.full(int(grid.index[-1]) + 1, np.nan)
    out[grid.index] = samples
    return out


def _lines(rows: Sequence[int] | Array, provenance: Provenance) -> str:
    """Row numbers as a person counts them: lines of the file where they are known."""
    first = provenance.lines[0] if provenance.lines else 1
    word = "line" if provenance.lines else "row"
    shown = [str(int(row) + first) for row in list(rows)[:FIRST_ROWS]]
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
            f"{missing.size} rows have no time stamp ({_lines(missing, provenance)}) and are left out",
            int(missing.size),
            tuple(int(row) for row in missing[:FIRST_ROWS]),
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
    """One row for each place on the grid: equal rows once, contradicting ones as NaN."""
    again = np.concatenate([[False], np.diff(grid.index) == 0])
    doubled = np.flatnonzero(again)
    if doubled.size == 0:
        return channels, stamps, grid
    # only true doubles stand at one stamp; near ones are jitter, and both rows are kept with their own stamps
    if np.any(stamps[doubled] != stamps[doubled - 1]):
        again = np.concatenate([[False], np.diff(stamps) == 0])
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
    text = f"{doubled.size} rows repeat the stamp of the row before"
    text += f"; {unequal} of them contradict it, and both are left out there" if unequal else " and are left out"
    rows = tuple(int(row) for row in doubled[:FIRST_ROWS])
    faults.append(Fault("doubled", text, int(doubled.size), rows))
    kept_grid = replace(grid, index=grid.index[keep], rest=grid.rest[keep])
    return tuple(cleaned), stamps[keep], kept_grid


def _say_lost(grid: StampGrid, faults: list[Fault], *, filled: bool) -> None:
    jumps = np.diff(grid.index)
    at = np.flatnonzero(jumps > 1)
    if at.size == 0:
        return
    missing = int(np.sum(jumps[at] - 1))
    longest = int(jumps[at].max() - 1)
    share = missing / (int(grid.index[-1]) + 1)
    how = "they are left out (empty rows), not interpolated" if filled else "the true stamps are used"
    faults.append(
        Fault(
            "gap" if longest > 1 else "lost-rows",
            f"{missing} rows are missing ({share:.2g} of the record) in {at.size} places, at most {longest} in a row "
            f"({longest * grid.interval:.4g} s); {how}",
            missing,
            tuple(int(row) + 1 for row in at[:FIRST_ROWS]),
            float(longest * grid.interval),
        )
    )


def _say_rounding(grid: StampGrid, faults: list[Fault]) -> None:
    if grid.quantum >= grid.interval:
        faults.append(
            Fault(
                "coarse-stamps",
                f"the stamps are printed in steps of {grid.quantum:g} s, no finer than the interval of "
                f"{grid.interval:.6g} s: the grid is taken as uniform, and a single lost row could not be seen",
                size=grid.quantum,
            )
        )


def _say_jitter(grid: StampGrid, on_grid: bool, stated: bool, faults: list[Fault]) -> None:
    """Jitter acts as noise of slope × jitter: for a sine of f, 2π f σ of its amplitude (rms: the same share)."""
    share = grid.jitter / grid.interval
    if share <= 1e-3:
        return
    effect = 2.0 * np.pi * 0.1 * share
    text = (
        f"the stamps scatter by {share:.2g} of the interval of {grid.interval:.6g} s about a uniform clock; taken as "
        f"uniform this adds noise of {effect:.2g} of a signal at a tenth of the sampling rate"
    )
    if on_grid:
        text += "; the stated rate is used all the same" if stated else "; the clock is used as uniform"
    else:
        text += "; the true stamps are used (state --rate if the converter has a clock of its own)"
    faults.append(Fault("jitter", text, size=share))
