"""A column as a file of any kind has it, and the channel that it becomes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.units import unit
from rigtally.records.record import Channel, Fault
from rigtally.records.written_units import AMBIGUOUS, NO_UNIT, known, stated

Array = NDArray[np.float64]


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
