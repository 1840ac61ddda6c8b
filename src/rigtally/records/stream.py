"""A log too large to hold: its channels described, its samples given block by block.

Only HDF5 with a uniform clock is streamed; every block is SI-coherent, as the samples of a Record are.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.column import Column, to_channel
from rigtally.records.columns import parse_rate
from rigtally.records.hdf5_log import (
    FILLS,
    OFFSETS,
    SCALES,
    channel_name,
    choose,
    digest,
    leaves_of,
    metadata_near,
    rate_near,
    single,
)
from rigtally.records.hdf5_tree import Leaf, names_of, unit_of
from rigtally.records.record import Channel, Provenance
from rigtally.records.time_column import time_factor, time_like

Array = NDArray[np.float64]

BLOCK = 1 << 20
# share of the interval by which a stamp may lie off the uniform grid
UNEVEN = 0.02


@dataclass(frozen=True)
class Lane:
    """One channel as it lies in the file: a dataset, or one column (or row) of a matrix."""

    name: str
    written: str | None
    path: str
    column: int | None
    across: bool
    scale: float
    offset: float
    fill: float | None

    def read(self, file: Any, begin: int, end: int) -> Array:
        """(end - begin,) samples in the written unit."""
        dataset = file[self.path]
        if self.column is None:
            raw = dataset[begin:end]
        elif self.across:
            raw = dataset[self.column, begin:end]
        else:
            raw = dataset[begin:end, self.column]
        values = np.asarray(raw, dtype=np.float64)
        gone = np.isinf(values)
        if self.fill is not None:
            gone |= np.asarray(raw == self.fill)
        if gone.any():
            values[gone] = np.nan
        return values * self.scale + self.offset if (self.scale, self.offset) != (1.0, 0.0) else values


@dataclass(frozen=True)
class RecordStream:
    """A uniform record that stays in its file.

    Attributes
    ----------
    channels : tuple of Channel
        As in a Record, with empty samples.
    count : int
        Samples of each channel.
    start, interval : float
        Seconds.
    provenance : Provenance
    """

    channels: tuple[Channel, ...]
    count: int
    start: float
    interval: float
    provenance: Provenance
    file: str
    lanes: tuple[Lane, ...]

    def blocks(
        self, size: int = BLOCK, progress: Callable[[int, int], None] | None = None
    ) -> Iterator[Array]:
        """(channels, n) blocks of at most `size` samples, in order; SI-coherent, NaN where there is no value.

        `progress` is called with (samples done, samples in all).

        Raises
        ------
        LogError
            code "unreadable": the file is damaged further down.
        """
        import h5py

        try:
            with h5py.File(self.file, "r") as stream:
                for begin in range(0, self.count, size):
                    end = min(begin + size, self.count)
                    block = np.empty((len(self.lanes), end - begin))
                    for row, (lane, channel) in enumerate(zip(self.lanes, self.channels, strict=True)):
                        block[row] = lane.read(stream, begin, end)
                        block[row] *= channel.factor
                        block[row] += channel.offset
                    yield block
                    if progress is not None:
                        progress(end, self.count)
        except (OSError, RuntimeError, KeyError, ValueError) as fault:
            raise LogError(
                f"the HDF5 file cannot be read: {str(fault)[:160]}",
                where=self.file,
                do="copy it again from the logger",
                code="unreadable",
            ) from None


def open_stream(
    path: str | os.PathLike[str],
    *,
    group: str = "",
    rate: float | str | None = None,
    units: Mapping[str, str] | None = None,
    channels: Sequence[str] | None = None,
) -> RecordStream:
    """Describe a large HDF5 log without reading its channels.

    The clock is the stated rate; or a time dataset, which is read once, block by block, and must be uniform
    within UNEVEN of the interval; or the file's rate. With a rate the first sample's time is 0.

    Raises
    ------
    LogError
        codes of the HDF5 reader, "no-clock", "not-uniform", "no-such-channel".
    """
    import h5py

    name = os.fspath(path)
    stated = dict(units or {})
    try:
        with h5py.File(name, "r") as file:
            chosen = choose(leaves_of(file, name, group), name)
            every = [lane for leaf in chosen for lane in _lanes(leaf, chosen, name)]
            count = chosen[0].rows
            times = [lane for lane in every if time_like(lane.name)]
            lanes = [lane for lane in every if lane not in times]
            if channels is not None:
                lanes = [_named(lanes, wanted, name) for wanted in channels]
            hertz = parse_rate(rate)
            if hertz is None and not times:
                hertz = rate_near(file, chosen, name)
            start, interval = _clock(file, times, count, hertz, stated, name)
            metadata = metadata_near(file, chosen)
    except (OSError, RuntimeError, KeyError, ValueError, TypeError) as fault:
        raise LogError(
            f"the HDF5 file cannot be read: {str(fault)[:160]}",
            where=name,
            do="copy it again from the logger",
            code="unreadable",
        ) from None
    empty = np.empty(0)
    described = tuple(to_channel(Column(lane.name, lane.written, empty), stated, name) for lane in lanes)
    how = f"HDF5, {count} samples streamed: {', '.join(lane.path for lane in lanes)}"
    provenance = Provenance(name, digest(name), None, (how,), metadata)
    return RecordStream(described, count, start, interval, provenance, name, tuple(lanes))


def _lanes(leaf: Leaf, chosen: Sequence[Leaf], where: str) -> list[Lane]:
    dataset = leaf.dataset
    if dataset.external or dataset.is_virtual or dataset.dtype.kind not in "iufb":
        raise LogError(
            f"dataset {leaf.path!r} cannot be streamed",
            where=where,
            do="store one dataset of numbers for each channel in one file",
            code="unreadable",
        )
    unit = unit_of(leaf.attributes)
    scale = single(leaf.attributes, SCALES, leaf.path, where)
    offset = single(leaf.attributes, OFFSETS, leaf.path, where)
    fills = [
        leaf.attributes[key] for key in FILLS if isinstance(leaf.attributes.get(key), int | float | np.number)
    ]
    more = (
        1.0 if scale is None else scale,
        0.0 if offset is None else offset,
        float(fills[0]) if fills else None,
    )
    if dataset.ndim == 1:
        written = unit if isinstance(unit, str) else unit[0] if unit else None
        return [Lane(channel_name(leaf, chosen), written, leaf.path, None, False, *more)]
    across = dataset.shape[0] < dataset.shape[1]
    width = min(dataset.shape)
    names = names_of(leaf.attributes, width) or [f"{leaf.name} {k + 1}" for k in range(width)]
    parts = [part.strip() for part in unit.split(",")] if isinstance(unit, str) else unit or []
    written_units = parts if len(parts) == width else [unit if isinstance(unit, str) else None] * width
    return [
        Lane(name, written, leaf.path, column, across, *more)
        for column, (name, written) in enumerate(zip(names, written_units, strict=True))
    ]


def _named(lanes: Sequence[Lane], wanted: str, where: str) -> Lane:
    for lane in lanes:
        if lane.name == wanted:
            return lane
    raise LogError(
        f"there is no channel {wanted!r}",
        where=where,
        do="the log has: " + ", ".join(lane.name for lane in lanes),
        code="no-such-channel",
    )


def _clock(
    file: Any, times: Sequence[Lane], count: int, rate: float | None, units: Mapping[str, str], where: str
) -> tuple[float, float]:
    """Start and interval in seconds; every stamp is compared with the grid between the first and the last."""
    if rate is not None:
        return 0.0, 1.0 / rate
    if not times:
        raise LogError(
            "the log has no time and no sampling rate",
            where=where,
            do='state it with --rate, as --rate "1 kHz"',
            code="no-clock",
        )
    lane = times[0]
    written = units.get(lane.name, lane.written)
    head = lane.read(file, 0, min(count, 1000))
    if written is None and bool(np.all(head == np.rint(head))):
        raise LogError(
            "the time has no unit and is written in whole numbers",
            where=f"{where}, dataset {lane.path!r}",
            do=f'state it, as --unit "{lane.name}=ms"',
            code="time-unit",
        )
    factor = time_factor(written or "s", lane.name, where)
    first = float(lane.read(file, 0, 1)[0]) * factor
    last = float(lane.read(file, count - 1, count)[0]) * factor
    interval = (last - first) / (count - 1)
    for begin in range(0, count, BLOCK):
        end = min(begin + BLOCK, count)
        off = lane.read(file, begin, end) * factor - (first + interval * np.arange(begin, end))
        if not (interval > 0 and float(np.abs(off).max()) <= UNEVEN * interval + 4 * np.spacing(abs(last))):
            raise LogError(
                "the clock is not uniform",
                where=f"{where}, samples {begin} to {end}",
                do="state --rate if the converter has a clock of its own",
                code="not-uniform",
            )
    return first, interval
