"""Which column is the time, in which unit, and the stamps in seconds that it gives."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.quantities.units import dimension
from rigtally.records.column import Column
from rigtally.records.time_stamps import seconds
from rigtally.records.written_units import NO_UNIT, known, stated

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
class Clocked:
    """Stamps in seconds (None where only a rate is known) and how they were read."""

    stamps: Array | None
    used: tuple[str, ...]
    words: str
    metadata: Mapping[str, str]


def time_like(name: str) -> bool:
    """Whether a column's name says that it is the time. (T is a temperature or a torque.)"""
    bare = _SUFFIX.sub("", name.strip())
    if bare == "T":
        return False
    bare = bare.lower()
    words = [word for word in re.split(r"[^a-zµäöü]+", bare) if word]
    return bool(words) and (words[-1] in _TIME_WORDS or words[0] in _TIME_WORDS - {"t"}) and len(words) <= 3


def find_clock(
    columns: Sequence[Column],
    time: str | int | None,
    rate: float | None,
    stated_rate: float | None,
    units: Mapping[str, str],
    file: str,
) -> Clocked:
    """The clock that the columns hold, or that is stated.

    In this order: the named column; numbers called time with a unit of time; stamps; a date and a time of
    day; numbers called time; evenly rising first numbers without names; the rate.

    Raises
    ------
    LogError
        codes "no-such-channel", "time-unit", "bad-stamp", "ambiguous".
    """
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
        try:
            found, start = seconds(column.texts, file, column.first_line)
        except LogError as fault:
            if rate is None or fault.code != "ambiguous":
                raise
            return Clocked(None, (column.name,), f"{rate:g} samples per second; the stamps are not clear", {})
        words = f"time from column {column.name!r}, stamps, seconds from the first"
        return Clocked(found, (column.name,), words, {"first stamp": start})
    values = np.asarray(column.values, dtype=float)
    written = _time_unit(column, units)
    if written is not None:
        factor = time_factor(written, column.name, file)
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


def time_factor(written: str, name: str, file: str) -> float:
    """Seconds in a written unit of time.

    Raises
    ------
    LogError
        code "time-unit": it is no time.
    """
    found = stated(written, name, file)
    if found.si != "s":
        raise LogError(
            f"the time column is in {written!r}, {dimension(found.si)}",
            where=f"{file}, column {name!r}",
            do=f'name the time column with --time, or state --unit "{name}=s"',
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
