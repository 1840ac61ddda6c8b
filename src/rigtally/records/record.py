"""Record, Channel, Response: what a log is, once read. Frozen; SI-coherent inside."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Fault:
    """Something found wrong with a channel or the clock.

    `kind` is a short stable name ("clipped", "stuck", "spikes", "gap", "jitter" …),
    `text` a sentence for a person, `count` how many samples are concerned, `rows`
    the first few sample numbers, `size` one number that measures it (its meaning stands in `text`).
    """

    kind: str
    text: str
    count: int = 0
    rows: tuple[int, ...] = ()
    size: float = float("nan")

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        size = self.size if np.isfinite(self.size) else None
        return {
            "kind": self.kind,
            "text": self.text,
            "count": self.count,
            "rows": list(self.rows),
            "size": size,
        }


@dataclass(frozen=True)
class Channel:
    """One column of a log.

    Attributes
    ----------
    name : str
        As the log has it, without its unit.
    samples : (n,) array
        SI-coherent; NaN where the log has no value.
    unit : str
        SI-coherent unit of `samples` ("" where the log says none).
    written_unit : str
        The unit as the log (or the user) wrote it.
    factor, offset : float
        samples = written * factor + offset.
    unit_known : bool
        Whether log or user stated a unit.
    full_scale : (low, high) or None
        Beyond which the instrument clips, SI-coherent.
    resolution : float
        Smallest step found or stated, SI-coherent; NaN where unknown.
    skew, u_skew : float
        Seconds by which this channel is read later than the row's stamp, and its u.
    """

    name: str
    samples: Array
    unit: str = ""
    written_unit: str = ""
    factor: float = 1.0
    offset: float = 0.0
    unit_known: bool = False
    full_scale: tuple[float, float] | None = None
    resolution: float = float("nan")
    skew: float = 0.0
    u_skew: float = 0.0
    faults: tuple[Fault, ...] = ()

    @property
    def in_written_unit(self) -> Array:
        """The samples in the unit that the log wrote."""
        return (self.samples - self.offset) / self.factor


@dataclass(frozen=True)
class Provenance:
    """Where a record came from and how it was read."""

    file: str = ""
    sha256: str = ""
    lines: tuple[int, int] | None = None
    how_read: tuple[str, ...] = ()
    metadata: Mapping[str, str] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "file": self.file,
            "sha256": self.sha256,
            "lines": list(self.lines) if self.lines else None,
            "how_read": list(self.how_read),
            "metadata": dict(self.metadata),
        }


@dataclass(frozen=True)
class Record:
    """A log: channels over one clock.

    Attributes
    ----------
    channels : tuple of Channel
    start : float
        Time of the first sample in seconds, on the log's own scale.
    interval : float
        Seconds between samples; NaN where the stamps are not uniform.
    stamps : (n,) array or None
        The true stamps in seconds where they are not uniform enough, else None.
    clock_faults : tuple of Fault
    u_interval : float
        Relative standard uncertainty of the interval (the clock's rate).
    jitter : float
        Standard deviation of the stamps about the uniform grid, seconds.
    """

    channels: tuple[Channel, ...]
    start: float = 0.0
    interval: float = float("nan")
    stamps: Array | None = None
    clock_faults: tuple[Fault, ...] = ()
    u_interval: float = 0.0
    jitter: float = 0.0
    provenance: Provenance = field(default_factory=Provenance)

    @property
    def count(self) -> int:
        """Number of samples."""
        return int(self.channels[0].samples.size) if self.channels else 0

    @property
    def uniform(self) -> bool:
        """Whether the clock is uniform enough to be used as such."""
        return self.stamps is None

    @property
    def time(self) -> Array:
        """(n,) sample times in seconds."""
        if self.stamps is not None:
            return self.stamps
        return self.start + self.interval * np.arange(self.count, dtype=np.float64)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the channels."""
        return tuple(channel.name for channel in self.channels)

    def channel(self, name: str) -> Channel:
        """The channel of that name.

        Raises
        ------
        LogError
            code "no-such-channel", with the names there are.
        """
        for channel in self.channels:
            if channel.name == name:
                return channel
        raise LogError(
            f"there is no channel {name!r}",
            where=self.provenance.file,
            do="the log has: " + ", ".join(self.names),
            code="no-such-channel",
        )

    def window(self, begin: float | None = None, end: float | None = None) -> Record:
        """The part with begin <= time <= end (seconds on the log's own scale)."""
        time = self.time
        keep = np.ones(time.size, dtype=bool)
        if begin is not None:
            keep &= time >= begin
        if end is not None:
            keep &= time <= end
        where = np.flatnonzero(keep)
        if where.size == 0:
            raise LogError(
                f"no sample lies between {begin} s and {end} s",
                where=self.provenance.file,
                do=f"the record runs from {time[0]:g} s to {time[-1]:g} s",
                code="empty-window",
            )
        part = slice(int(where[0]), int(where[-1]) + 1)
        return replace(
            self,
            channels=tuple(replace(c, samples=c.samples[part]) for c in self.channels),
            start=float(time[part][0]),
            stamps=None if self.stamps is None else self.stamps[part],
        )


@dataclass(frozen=True)
class Response:
    """A measured frequency response.

    Attributes
    ----------
    frequency : (m,) array
        rad/s, rising.
    gain : (m, outputs, inputs) complex array
        SI-coherent.
    covariance : (m, outputs, inputs, 2, 2) array or None
        Of real and imaginary part; None where nothing is stated.
    coherence : (m,) array or None
    magnitude_only : bool
        Phase was not measured (gain then holds |G| as a real number).
    """

    frequency: Array
    gain: NDArray[np.complex128]
    covariance: Array | None = None
    coherence: Array | None = None
    outputs: tuple[str, ...] = ("output",)
    inputs: tuple[str, ...] = ("input",)
    output_units: tuple[str, ...] = ("",)
    input_units: tuple[str, ...] = ("",)
    magnitude_only: bool = False
    provenance: Provenance = field(default_factory=Provenance)
