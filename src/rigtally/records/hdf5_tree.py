"""What an HDF5 file holds, walked with care: no link leaves the file, no shape is believed unread."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from rigtally.errors import LogError

# datasets beyond this many bytes (as float64) are not read at once
READ_LIMIT = 1_000_000_000
OBJECT_LIMIT = 5000
_NAME_KEYS = ("channels", "channel_names", "names", "columns", "column_names", "labels", "fields")
_UNIT_KEYS = ("units", "unit", "unit_string", "eu")
_RATE_KEYS = (
    "sample_rate", "sampling_rate", "samplerate", "sampling_frequency", "sample_frequency", "fs", "rate",
)  # fmt: skip
_STEP_KEYS = ("dt", "delta_t", "interval", "sample_interval", "sampling_interval", "sampling_period", "step")


@dataclass(frozen=True)
class Leaf:
    """A dataset that may hold channels: its path, the dataset, and its attributes in lower case."""

    path: str
    dataset: Any
    attributes: dict[str, Any]

    @property
    def name(self) -> str:
        """The last part of the path."""
        return self.path.rsplit("/", 1)[-1]

    @property
    def parent(self) -> str:
        """The path without its last part."""
        return self.path.rsplit("/", 1)[0] or "/"

    @property
    def rows(self) -> int:
        """Samples along time: of a matrix, its longer side."""
        return int(max(self.dataset.shape))


def walk(group: Any, where: str) -> Iterator[Leaf]:
    """Datasets of numbers, compounds or texts below a group, by hard links of this file alone.

    Raises
    ------
    LogError
        code "too-large": more objects than OBJECT_LIMIT.
    """
    import h5py

    stack = [group]
    seen: set[Any] = set()
    while stack:
        here = stack.pop()
        info = h5py.h5o.get_info(here.id)
        if info.addr in seen:
            continue
        seen.add(info.addr)
        below: list[Any] = []
        for name in sorted(here):
            if not isinstance(here.get(name, getlink=True), h5py.HardLink):
                continue
            found = here.get(name)
            if len(seen) + len(stack) + len(below) > OBJECT_LIMIT:
                raise LogError(
                    f"the file holds more than {OBJECT_LIMIT} objects",
                    where=where,
                    do="name a group, as FILE.h5:/group",
                    code="too-large",
                )
            if isinstance(found, h5py.Group):
                below.append(found)
            elif isinstance(found, h5py.Dataset) and _may_hold(found):
                yield Leaf(found.name or name, found, attributes(found))
        stack.extend(reversed(below))


def _may_hold(dataset: Any) -> bool:
    shape = dataset.shape
    if shape is None or len(shape) not in (1, 2) or min(shape, default=0) == 0 or max(shape) < 2:
        return False
    kind = dataset.dtype.kind
    if kind == "V":
        return dataset.dtype.names is not None and len(shape) == 1
    return kind in "iufb" or (kind in "SO" and len(shape) == 1)


def safe(leaf: Leaf, where: str) -> None:
    """Refuse what lies in other files, and what is larger than can be read at once.

    Raises
    ------
    LogError
        codes "outside-file", "too-large".
    """
    dataset = leaf.dataset
    if dataset.external or dataset.is_virtual:
        raise LogError(
            f"dataset {leaf.path!r} lies in another file, which is not read",
            where=where,
            do="copy the data into one file",
            code="outside-file",
        )
    cells = int(np.prod([int(side) for side in dataset.shape], dtype=object))
    size = cells * max(8, dataset.dtype.itemsize)
    if size > READ_LIMIT:
        raise LogError(
            f"dataset {leaf.path!r} has the shape {tuple(dataset.shape)}, more than is read at once",
            where=where,
            do="cut the record",
            code="too-large",
        )


def attributes(thing: Any) -> dict[str, Any]:
    """Attributes by lower-case name, texts decoded; what cannot be read is left out."""
    out: dict[str, Any] = {}
    for key in list(thing.attrs)[:200]:
        try:
            value = thing.attrs[key]
        except (OSError, TypeError, ValueError, KeyError):
            continue
        out[key.lower()] = _plain(value)
    return out


def _plain(value: Any) -> Any:
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    if isinstance(value, np.ndarray):
        if value.size == 1:
            return _plain(value.reshape(-1)[0])
        if value.dtype.kind in "SO":
            return [_plain(item) for item in value.reshape(-1)]
    return value


def unit_of(attributes: dict[str, Any]) -> str | list[str] | None:
    """The unit (or the units of a matrix's channels) that the attributes state."""
    for key in _UNIT_KEYS:
        if key in attributes and isinstance(attributes[key], str | list):
            found = attributes[key]
            return found if isinstance(found, str) else [str(each) for each in found]
    return None


def names_of(attributes: dict[str, Any], count: int) -> list[str] | None:
    """Names of a matrix's channels."""
    for key in _NAME_KEYS:
        found = attributes.get(key)
        if isinstance(found, str) and count > 1:
            found = [part.strip() for part in found.split("," if "," in found else ";")]
        if isinstance(found, str):
            found = [found]
        if isinstance(found, list) and len(found) == count:
            return [str(each) for each in found]
    return None


def rate_of(attributes: dict[str, Any], where: str) -> float | None:
    """Samples per second that the attributes state: a number is Hz or s, a text has its unit."""
    from rigtally.records.columns import parse_rate
    from rigtally.records.written_units import known

    for key, value in attributes.items():
        base, _, suffix = key.rpartition("_")
        in_hertz = key in _RATE_KEYS or (base in _RATE_KEYS and suffix in ("hz", "khz"))
        in_seconds = key in _STEP_KEYS or (base in _STEP_KEYS and suffix in ("s", "ms", "us"))
        if not (in_hertz or in_seconds):
            continue
        unit = attributes.get(f"{key}_unit", attributes.get(f"{key}_units"))
        if unit is None and suffix in ("hz", "khz", "s", "ms", "us") and base:
            unit = {"hz": "Hz", "khz": "kHz"}.get(suffix, suffix)
        try:
            if in_hertz:
                text = f"{value} {unit}" if unit and not isinstance(value, str) else value
                return parse_rate(text if isinstance(text, str) else float(text))
            amount, _, written = str(value).strip().partition(" ")
            found = known(written or str(unit or "s"))
            if found is not None and found.si == "s" and float(amount) > 0:
                return 1.0 / (float(amount) * found.factor)
        except (TypeError, ValueError):
            continue
    return None
