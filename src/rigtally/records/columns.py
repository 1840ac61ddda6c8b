"""From columns of any file to channels over one clock: which column is the time, in which unit."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError, UsageError
from rigtally.quantities.units import dimension, unit
from rigtally.records.clock import make_record
from rigtally.records.record import Channel, Fault, Provenance, Record
from rigtally.records.time_stamps import seconds
from rigtally.records.written_units import AMBIGUOUS, NO_UNIT, known, stated

Array = NDArray[np.float64]

_TIME_WORDS = frozenset(
    [
        "time",
        "t",
        "zeit",
        "uhrzeit",
        "zeitstempel",
        "temps",
        "tiempo",
        "tempo",
        "timestamp",
        "timestamps",
        "datetime",
        "elapsed",
        "seconds",
        "second",
        "sec",
        "secs",
        "millis",
        "millisec",
        "milliseconds",
        "date",
        "datum",
        "stamp",
        "clock",
    ]
)
_SUFFIX = re.compile(r"[_ .](s|sec|ms|msec|us|µs|usec|ns|min|h)$", re.IGNORECASE)
# Seconds since 1970 of the years 2001 to 2100, and the same in ms, µs, ns.
_EPOCH = (1.0e9, 4.1e9)


@dataclass(frozen=True)
class Column:
    """A column as the file has it: numbers in `values` (written unit), or stamps in `texts`."""

    name: str
    written: str | None = None
    values: Array | None = None
    texts: Any = None
    kind: str = "number"
    faults: tuple[Fault, ...] = ()
    first_line: int = 1


@dataclass(frozen=True)
class Clocked:
    """Stamps in seconds (None where only a rate is known) and how they were read."""

    stamps: Array | None
    used: tuple[str, ...]
    words: str
    metadata: Mapping[str, str]


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
    clock = _clock(columns, time, rate, stated_rate, units, file)
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


def to_channel(column: Column, units: Mapping[str, str], where: str) -> Channel:
    """One channel in SI units; without a unit, or with one that is not known, as written."""
    values = np.asarray(column.values, dtype=float)
    endless = np.isinf(values)
    faults = column.faults
    if endless.any():
        values = np.where(endless, np.nan, values)
        faults += (Fault("overload", f"{endless.sum()} infinite samples are left out", int(endless.sum())),)
    if column.name in units:
        found = stated(units[column.name], column.name, where)
    else:
        written = (column.written or "").strip()
        plain = column.written is not None and written in NO_UNIT
        by_file = unit("") if plain else known(written) if written else None
        if by_file is None:
            if written:
                why = f"may be {AMBIGUOUS[written]}" if written in AMBIGUOUS else "is not known"
                text = f"unit {written!r} {why}: state it, as --unit {column.name}=…"
                faults += (Fault("unit-unknown", text),)
            return Channel(column.name, values, written_unit=written, faults=faults)
        if plain and written == "":
            return Channel(column.name, values, faults=faults)
        found = by_file
    samples = values if found.factor == 1.0 and found.offset == 0.0 else values * found.factor + found.offset
    return Channel(
        column.name, samples, found.si, found.written, found.factor, found.offset, True, faults=faults
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


def time_like(name: str) -> bool:
    """Whether a column's name says that it is the time. (T is a temperature or a torque.)"""
    bare = _SUFFIX.sub("", name.strip())
    if bare == "T":
        return False
    bare = bare.lower()
    words = [word for word in re.split(r"[^a-zµäöü]+", bare) if word]
    return bool(words) and (words[-1] in _TIME_WORDS or words[0] in _TIME_WORDS - {"t"}) and len(words) <= 3


def _clock(
    columns: Sequence[Column],
    time: str | int | None,
    rate: float | None,
    stated_rate: float | None,
    units: Mapping[str, str],
    file: str,
) -> Clocked:
    if time is not None:
        return _read(_named(columns, time, file), columns, rate or stated_rate, units, file)
    numbers = [c for c in columns if c.kind == "number" and time_like(c.name) and _may_be_time(c, units)]
    dates = [c for c in columns if c.kind == "date"]
    clocks = [c for c in columns if c.kind == "clock"]
    stamps = [c for c in columns if c.kind == "stamp"]
    with_unit = [c for c in numbers if _time_unit(c, units) is not None]
    choice = [*with_unit, *stamps, *clocks, *numbers]
    if choice:
        if choice[0] in clocks and len(dates) == 1:
            return _dated(dates[0], clocks[0], file)
        return _read(choice[0], columns, rate or stated_rate, units, file)
    first = columns[0]
    unnamed = all(re.fullmatch(r"column \d+", c.name) for c in columns)
    if rate is None and stated_rate is None and unnamed and len(columns) > 1 and _grid(first.values):
        return _read(first, columns, None, units, file)
    if rate is None and stated_rate is not None:
        return Clocked(None, (), f"{stated_rate:g} samples per second, as the file states", {})
    return Clocked(None, (), "no time column" if rate is None else f"{rate:g} samples per second", {})


def _named(columns: Sequence[Column], time: str | int, file: str) -> Column:
    for place, column in enumerate(columns, start=1):
        if column.name == time or time == place:
            if column.kind not in ("number", "stamp", "clock", "date"):
                break
            return column
    raise LogError(
        f"there is no time column {time!r}",
        where=file,
        do="the log has: " + ", ".join(c.name for c in columns),
        code="no-such-channel",
    )


def _grid(values: Array | None) -> bool:
    """Evenly rising, and not a mere count of rows."""
    if values is None or values.size < 3 or not np.isfinite(values).all():
        return False
    steps = np.diff(values)
    middle = float(np.median(steps))
    even = middle > 0 and bool(np.all(np.abs(steps - middle) <= 0.1 * middle))
    return even and not bool(np.all(values == np.rint(values)))


def _dated(date: Column, clock: Column, file: str) -> Clocked:
    """A date in one column and the time of day in another."""
    joined = np.array(
        [
            np.nan if a != a or b != b else f"{str(a).strip()} {str(b).strip()}"
            for a, b in zip(date.texts, clock.texts, strict=True)
        ],
        dtype=object,
    )
    found, start = seconds(joined, file, date.first_line)
    words = f"time from columns {date.name!r} and {clock.name!r}, seconds from the first"
    return Clocked(found, (date.name, clock.name), words, {"first stamp": start})


def _read(
    column: Column, columns: Sequence[Column], rate: float | None, units: Mapping[str, str], file: str
) -> Clocked:
    if column.kind == "clock":
        dates = [c for c in columns if c.kind == "date"]
        if len(dates) == 1:
            return _dated(dates[0], column, file)
    if column.kind != "number":
        found, start = seconds(column.texts, file, column.first_line)
        words = f"time from column {column.name!r}, stamps, seconds from the first"
        return Clocked(found, (column.name,), words, {"first stamp": start})
    values = np.asarray(column.values, dtype=float)
    written = _time_unit(column, units)
    if written is not None:
        factor = _time_factor(written, column, file)
        words = f"time from column {column.name!r} in {written}"
    elif column.written and column.written.strip() not in NO_UNIT:
        raise LogError(
            f"the time's unit {column.written!r} is not known",
            where=f"{file}, column {column.name!r}",
            do=f'state it, as --unit "{column.name}=ms"',
            code="time-unit",
        )
    else:
        factor, words = _guessed(values, column, rate, file)
    return Clocked(values if factor == 1.0 else values * factor, (column.name,), words, {})


def _may_be_time(column: Column, units: Mapping[str, str]) -> bool:
    """Not where a unit of something else is written."""
    written = _time_unit(column, units)
    found = known(written) if written is not None else None
    return found is None or found.si == "s"


def _time_unit(column: Column, units: Mapping[str, str]) -> str | None:
    if column.name in units:
        return units[column.name]
    if column.written and column.written.strip() not in NO_UNIT:
        return column.written if known(column.written) is not None else None
    suffix = _SUFFIX.search(column.name)
    return suffix.group(1).lower() if suffix and time_like(column.name) else None


def _time_factor(written: str, column: Column, file: str) -> float:
    found = stated(written, column.name, file)
    if found.si != "s":
        raise LogError(
            f"the time column is in {written!r}, {dimension(found.si)}",
            where=f"{file}, column {column.name!r}",
            do=f'name the time column with --time, or state --unit "{column.name}=s"',
            code="time-unit",
        )
    return found.factor


def _guessed(values: Array, column: Column, rate: float | None, file: str) -> tuple[float, str]:
    """A time without a unit: by its size since 1970, by the stated rate, or seconds with decimals."""
    finite = values[np.isfinite(values)]
    name = f"time from column {column.name!r}"
    if finite.size == 0:
        return 1.0, name
    for scale, word in ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns")):
        if _EPOCH[0] <= finite.min() * scale and finite.max() * scale <= _EPOCH[1]:
            return scale, f"{name}, {word} since 1970 by its size"
    whole = bool(np.all(finite == np.rint(finite)))
    step = float(np.median(np.diff(finite))) if finite.size > 1 else 0.0
    if rate is not None and step > 0:
        for scale, word in ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"), (60.0, "min")):
            if abs(step * scale * rate - 1.0) < 0.02:
                return scale, f"{name} in {word}, by the stated rate"
    if not whole:
        return 1.0, f"{name}, taken as seconds (no unit is written)"
    raise LogError(
        "the time has no unit and is written in whole numbers: seconds, milliseconds or a count of rows",
        where=f"{file}, column {column.name!r}",
        do=f'state it, as --unit "{column.name}=s" or "{column.name}=ms", or the --rate',
        code="time-unit",
    )
