"""From columns of any file to channels over one clock."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError, UsageError
from rigtally.quantities.units import dimension, unit
from rigtally.records.clock import make_record
from rigtally.records.column import Column, to_channel
from rigtally.records.record import Provenance, Record
from rigtally.records.time_column import find_clock

Array = NDArray[np.float64]


def parse_rate(rate: float | str | None) -> float | None:
    """Samples per second from a number (Hz) or "1 kHz".

    Raises
    ------
    UsageError
        code "bad-rate".
    """
    if rate is None or isinstance(rate, int | float):
        return None if rate is None else float(rate)
    found = re.fullmatch(r"\s*([+-]?[\d.]+(?:[eE][+-]?\d+)?)\s*(.*?)\s*", rate)
    try:
        amount = float(found.group(1)) if found else float("nan")
    except ValueError:
        amount = float("nan")
    written = found.group(2) if found else ""
    if found and written:
        in_hertz = unit({"S/s": "Hz", "Sa/s": "Hz", "1/s": "Hz"}.get(written, written))
        if in_hertz.si not in ("Hz", "1/s") or re.search("rad", written):
            raise UsageError(
                f"the rate {rate!r} is {dimension(written)}", do="state it as 1 kHz", code="bad-rate"
            )
        amount *= in_hertz.factor
    if not amount > 0:
        raise UsageError(f"the rate {rate!r} is none", do="state it as 1 kHz", code="bad-rate")
    return amount


def to_record(
    columns: Sequence[Column],
    *,
    time: str | int | None,
    rate: float | None,
    stated_rate: float | None,
    units: Mapping[str, str],
    channels: Sequence[str] | None,
    provenance: Provenance,
) -> Record:
    """Channels in SI units over the clock that the columns hold.

    Parameters
    ----------
    columns : sequence of Column
    time : str, int or None
        Name (or number, from 1) of the time column; None is "find out".
    rate, stated_rate : float or None
        Samples per second as the caller states; as the file states (used where there is no time column).
    units : mapping
        Unit by channel, as the caller states.
    channels : sequence of str or None
        Only these.

    Raises
    ------
    LogError, UsageError
    """
    file = provenance.file
    _check_names(columns, units, channels, file)
    clock = find_clock(columns, time, rate, stated_rate, units, file)
    numbers = [c for c in columns if c.kind == "number" and c.name not in clock.used]
    if channels is not None:
        numbers = [column for name in channels for column in numbers if column.name == name]
    empty = [c.name for c in numbers if c.values is not None and not np.isfinite(c.values).any()]
    numbers = [c for c in numbers if c.name not in empty]
    if not numbers:
        raise LogError(
            "there is no column of numbers besides the time",
            where=file,
            do="the log has: " + ", ".join(c.name for c in columns),
            code="no-numbers",
        )
    made = [to_channel(column, units, file) for column in numbers]
    words = (
        clock.words
        + "; channels "
        + ", ".join(
            f"{c.name} [{c.written_unit or '1'}]" if c.unit_known else f"{c.name} (no unit)" for c in made
        )
    )
    aside = [c.name for c in columns if c.kind != "number" and c.name not in clock.used] + empty
    if aside:
        words += "; left out: " + ", ".join(aside)
    if clock.stamps is None and rate is None:
        rate = stated_rate
    return make_record(
        made,
        clock.stamps,
        rate,
        replace(
            provenance,
            how_read=(*provenance.how_read, words),
            metadata={**provenance.metadata, **clock.metadata},
        ),
    )


def _check_names(
    columns: Sequence[Column], units: Mapping[str, str], channels: Sequence[str] | None, file: str
) -> None:
    names = [column.name for column in columns]
    for name in (*units, *(channels or ())):
        if name not in names:
            raise LogError(
                f"there is no channel {name!r}",
                where=file,
                do="the log has: " + ", ".join(names),
                code="no-such-channel",
            )
    for column in columns:
        if channels is not None and column.name in channels and column.kind != "number":
            raise LogError(
                f"channel {column.name!r} holds no numbers",
                where=file,
                do="name a channel of numbers",
                code="not-numeric",
            )
