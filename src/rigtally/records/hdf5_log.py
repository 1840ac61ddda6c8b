"""An HDF5 log: the one obvious set of channels in it, or a refusal that lists what is there."""

from __future__ import annotations

import hashlib
import os
from collections import defaultdict
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.column import Column
from rigtally.records.columns import to_record
from rigtally.records.hdf5_tree import Leaf, attributes, names_of, rate_of, safe, unit_of, walk
from rigtally.records.record import Fault, Provenance, Record, Response
from rigtally.records.response_table import is_response, to_response
from rigtally.records.time_column import time_like

Array = NDArray[np.float64]

_VALUE_NAMES = ("data", "values", "value", "samples", "signal", "y")
SCALES = ("scale_factor", "scale", "factor", "slope")
OFFSETS = ("add_offset", "offset", "intercept")
FILLS = ("_fillvalue", "missing_value", "fill_value")


def read_hdf5(
    file: str,
    name: str,
    group: str,
    *,
    time: str | int | None,
    rate: float | None,
    units: Mapping[str, str],
    channels: Sequence[str] | None,
) -> Record | Response:
    """Read an HDF5 file, or the group (or dataset) of it that is named.

    Parameters
    ----------
    file : str
        As the caller wrote it, for provenance; `name` is the file on the disk.
    group : str
        "/group", "/group/dataset" or "".

    Raises
    ------
    LogError
        codes "unreadable", "no-such-group", "which-group", "outside-file", "too-large", "no-numbers",
        "scale", and those of the clock.
    """
    import h5py

    try:
        with h5py.File(name, "r") as stream:
            leaves = leaves_of(stream, file, group)
            chosen = choose(leaves, file)
            columns = [column for leaf in chosen for column in _columns(leaf, chosen, file)]
            metadata = metadata_near(stream, chosen)
            stated = rate_near(stream, chosen, file)
            kinds = sorted({_shape(leaf) for leaf in chosen})
    except (OSError, RuntimeError, KeyError, ValueError, TypeError, OverflowError, MemoryError) as fault:
        raise LogError(
            f"the HDF5 file cannot be read: {str(fault)[:160]}",
            where=file,
            do="copy it again from the logger, or name a group, as FILE.h5:/group",
            code="unreadable",
        ) from None
    paths = ", ".join(leaf.path for leaf in chosen[:6]) + (", …" if len(chosen) > 6 else "")
    provenance = Provenance(file, digest(name), None, (f"HDF5, {' and '.join(kinds)}: {paths}",), metadata)
    if is_response(columns):
        return to_response(columns, units, provenance)
    return to_record(
        columns,
        time=time,
        rate=rate,
        stated_rate=stated,
        units=units,
        channels=channels,
        provenance=provenance,
    )


def leaves_of(stream: Any, file: str, group: str) -> list[Leaf]:
    import h5py

    root = stream
    if group.strip("/"):
        at = stream
        for part in group.strip("/").split("/"):
            link = at.get(part, getlink=True) if isinstance(at, h5py.Group) else None
            if not isinstance(link, h5py.HardLink):
                raise LogError(
                    f"there is no group {group!r} in the file",
                    where=file,
                    do=_listing(list(walk(stream, file))),
                    code="no-such-group",
                )
            at = at.get(part)
        if isinstance(at, h5py.Dataset):
            return [Leaf(at.name, at, attributes(at))]
        root = at
    return list(walk(root, file))


def choose(leaves: list[Leaf], file: str) -> list[Leaf]:
    """The datasets of the one record there is.

    Raises
    ------
    LogError
        codes "no-numbers", "which-group".
    """
    numeric = [leaf for leaf in leaves if leaf.dataset.dtype.kind in "iufbV"]
    if not numeric:
        raise LogError(
            "the file holds no datasets of numbers", where=file, do="name a log", code="no-numbers"
        )
    tables = [leaf for leaf in numeric if _shape(leaf) != "a dataset for each channel"]
    flat = [leaf for leaf in leaves if leaf not in tables]
    groups: dict[str, list[Leaf]] = defaultdict(list)
    for leaf in flat:
        # channel/data and channel/time belong to the group above
        groups[leaf.parent].append(leaf)
    sets: list[list[Leaf]] = []
    for table in tables:
        beside = [leaf for leaf in groups.pop(table.parent, []) if leaf.rows == table.rows]
        sets.append([table, *beside])
    for members in groups.values():
        for length in sorted({leaf.rows for leaf in members}):
            alike = [leaf for leaf in members if leaf.rows == length]
            if any(leaf.dataset.dtype.kind in "iufb" for leaf in alike):
                sets.append(alike)
    if len(sets) > 1 and not tables:
        joined = _one_channel_each(sets)
        if joined is not None:
            sets = [joined]
    if len(sets) != 1:
        raise LogError(
            "the file holds more than one record",
            where=file,
            do=f"name one, as FILE.h5:/group; {_listing(leaves)}",
            code="which-group",
        )
    return sorted(sets[0], key=lambda leaf: not time_like(leaf.name))


def _one_channel_each(sets: list[list[Leaf]]) -> list[Leaf] | None:
    """Nested channels: all of one length and with at most one time between them."""
    every = [leaf for members in sets for leaf in members]
    if len({leaf.rows for leaf in every}) != 1:
        return None
    if sum(time_like(leaf.name) for leaf in every) > 1:
        return None
    names = [channel_name(leaf, every) for leaf in every]
    return every if len(set(names)) == len(names) else None


def _listing(leaves: list[Leaf]) -> str:
    shown = ", ".join(f"{leaf.path} {tuple(leaf.dataset.shape)}" for leaf in leaves[:12])
    return f"the file has: {shown or 'nothing of use'}" + (", …" if len(leaves) > 12 else "")


def _shape(leaf: Leaf) -> str:
    if leaf.dataset.dtype.kind == "V":
        return "a compound table"
    return "a matrix of channels" if leaf.dataset.ndim == 2 else "a dataset for each channel"


def channel_name(leaf: Leaf, chosen: Sequence[Leaf]) -> str:
    label = leaf.attributes.get("name", leaf.attributes.get("channel_name"))
    if isinstance(label, str) and label.strip() and not time_like(leaf.name):
        return label.strip()
    if leaf.name.lower() in _VALUE_NAMES and leaf.parent != "/" and len(chosen) > 1:
        above = leaf.parent.rsplit("/", 1)[-1]
        siblings = [other for other in chosen if other.parent == leaf.parent and not time_like(other.name)]
        return above if len(siblings) == 1 else leaf.name
    same = [other for other in chosen if other.name == leaf.name]
    return leaf.name if len(same) == 1 else leaf.path.strip("/")


def _columns(leaf: Leaf, chosen: Sequence[Leaf], file: str) -> list[Column]:
    safe(leaf, file)
    unit = unit_of(leaf.attributes)
    data = leaf.dataset[()]
    if leaf.dataset.dtype.kind == "V":
        return _fields(data, leaf, unit, file)
    if leaf.dataset.ndim == 2:
        return _matrix(data, leaf, unit, chosen, file)
    name = channel_name(leaf, chosen)
    written = unit if isinstance(unit, str) else unit[0] if unit else None
    return [_column(name, written, data, leaf.attributes, leaf.path, file)]


def _fields(data: Any, leaf: Leaf, unit: str | list[str] | None, file: str) -> list[Column]:
    from rigtally.records.written_units import split_name

    out = []
    for place, field in enumerate(data.dtype.names):
        if data[field].ndim != 1:
            continue
        name, written = split_name(field)
        own = leaf.attributes.get(f"{field}_units".lower(), leaf.attributes.get(f"{field}_unit".lower()))
        if isinstance(own, str):
            written = own
        elif isinstance(unit, list) and len(unit) == len(data.dtype.names):
            written = unit[place]
        out.append(_column(name, written, data[field], {}, f"{leaf.path}.{field}", file))
    return out


def _matrix(
    data: Any, leaf: Leaf, unit: str | list[str] | None, chosen: Sequence[Leaf], file: str
) -> list[Column]:
    """Time runs along the side that has not as many as there are names, else along the longer one."""
    from rigtally.records.written_units import split_name

    rows, width = data.shape
    named_rows, named_width = names_of(leaf.attributes, rows), names_of(leaf.attributes, width)
    if named_rows and named_width and rows == width:
        raise LogError(
            f"dataset {leaf.path!r} is square: which side is the time is not known",
            where=file,
            do="store one dataset for each channel",
            code="ambiguous",
        )
    if named_rows or (not named_width and rows < width):
        data, rows, width = data.T, width, rows
    named = named_rows or named_width
    heads = named or [f"{leaf.name} {place + 1}" for place in range(width)]
    out = []
    for place, head in enumerate(heads):
        name, written = split_name(head)
        if isinstance(unit, list):
            written = unit[place] if len(unit) == width else written
        elif isinstance(unit, str):
            parts = [part.strip() for part in unit.split(",")]
            written = parts[place] if len(parts) == width and width > 1 else written or unit
        attributes = dict(leaf.attributes)
        for key in (*SCALES, *OFFSETS):
            each = attributes.get(key)
            if isinstance(each, np.ndarray) and each.size == width:
                attributes[key] = each.reshape(-1)[place]
        out.append(_column(name, written, data[:, place], attributes, f"{leaf.path}[{place}]", file))
    return out


def _column(
    name: str, written: str | None, data: Any, attributes: dict[str, Any], path: str, file: str
) -> Column:
    if data.dtype.kind in "SO":
        texts = np.array(
            [each.decode("utf-8", "replace") if isinstance(each, bytes) else each for each in data]
        )
        return Column(name, written, None, texts.astype(object), "stamp" if time_like(name) else "words")
    values = np.array(data, dtype=np.float64)
    faults: tuple[Fault, ...] = ()
    for key in FILLS:
        if isinstance(attributes.get(key), int | float | np.number):
            gone = np.asarray(data == attributes[key])
            if gone.any():
                values[gone] = np.nan
                faults += (Fault("missing", f"{gone.sum()} cells hold no value", int(gone.sum())),)
    scale, offset = single(attributes, SCALES, path, file), single(attributes, OFFSETS, path, file)
    if scale is not None:
        values *= scale
    if offset is not None:
        values += offset
    return Column(name, written, values, faults=faults)


def single(attributes: dict[str, Any], keys: Sequence[str], path: str, file: str) -> float | None:
    """The one scale (or offset) that is stated; two that differ, or none that is a number, are refused."""
    found = {key: attributes[key] for key in keys if key in attributes}
    if not found:
        return None
    try:
        values = {float(value) for value in found.values()}
    except (TypeError, ValueError):
        values = set()
    if len(values) != 1:
        raise LogError(
            f"the attributes {', '.join(found)} of {path!r} do not state one number",
            where=file,
            do="store one scale_factor and one add_offset",
            code="scale",
        )
    return values.pop()


def rate_near(stream: Any, chosen: Sequence[Leaf], file: str) -> float | None:
    for leaf in chosen:
        found = rate_of(leaf.attributes, file)
        if found is not None:
            return found
    places = {leaf.parent for leaf in chosen} | {"/"}
    for path in sorted(places, key=len, reverse=True):
        found = rate_of(attributes(stream[path]), file)
        if found is not None:
            return found
    return None


def metadata_near(stream: Any, chosen: Sequence[Leaf]) -> dict[str, str]:
    out: dict[str, str] = {}
    for path in sorted({leaf.parent for leaf in chosen} | {"/"}):
        for key, value in attributes(stream[path]).items():
            if isinstance(value, str | int | float | np.number):
                out[key if path == "/" else f"{path}: {key}"] = str(value)[:200]
    return out


def digest(name: str) -> str:
    digest = hashlib.sha256()
    with open(name, "rb") as stream:
        while block := stream.read(1 << 22):
            digest.update(block)
    return digest.hexdigest() if os.path.getsize(name) else ""
