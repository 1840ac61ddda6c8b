"""Trial: what is fitted to what, before either road is taken."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from rigtally.forms.named import Form

Array = NDArray[np.float64]
Between = Literal["held", "ramped", "band-limited"]


@dataclass(frozen=True)
class Segment:
    """One continuous stretch of one log.

    Attributes
    ----------
    label : str
        File and event, for messages.
    inputs : (r, n) array
        SI-coherent. For an unlogged test it is made by `excitation`.
    outputs : (q, n) array
        SI-coherent; NaN where the log has no value.
    interval : float
        Seconds; NaN where only `stamps` hold.
    start : float
        Time of the first sample, seconds, on the log's own scale.
    stamps : (n,) array or None
        True stamps in seconds where the clock is not uniform, else None.
    excitation : "logged", "step", "release" or "pulse"
        What drives the output. Not "logged": the test happens at `at` seconds (any real
        number, not only a sample), with size `size` (a step's height, a pulse's area; 1.0 where none is
        stated), and `inputs` is (1, n) of what an ideal sampler would have seen.
    """

    label: str
    inputs: Array
    outputs: Array
    interval: float
    start: float = 0.0
    stamps: Array | None = None
    excitation: Literal["logged", "step", "release", "pulse"] = "logged"
    at: float = 0.0
    size: float = 1.0

    @property
    def count(self) -> int:
        """Number of samples."""
        return int(self.outputs.shape[1])

    @property
    def time(self) -> Array:
        """(n,) sample times in seconds."""
        if self.stamps is not None:
            return self.stamps
        return self.start + self.interval * np.arange(self.count, dtype=np.float64)


@dataclass(frozen=True)
class Trial:
    """A form, the segments it is to describe, and what is assumed.

    Attributes
    ----------
    between : what the inputs do between samples
        "held": u[k] acts on [t_k, t_k+1) and y[k] is taken just after it acts;
        "ramped": straight lines between samples; "band-limited": nothing above half the sampling rate.
    output_first : bool
        Held inputs only: the logger reads the output before the input acts.
    offset : "free" or a number in SI
        The output's constant.
    drift : bool
        Whether a straight drift of the output is fitted.
    rest : bool
        True: the rig starts at rest (initial state zero); False: initial state free.
    noise : "estimated", "white" or a number
        A number is the stated standard uncertainty of one output sample, SI.
    held, ranges, ties
        Parameter name -> value; -> (low, high); -> expression in other names (lmfit's syntax).
    """

    form: Form
    segments: tuple[Segment, ...]
    between: Between = "held"
    output_first: bool = False
    offset: float | Literal["free"] = "free"
    drift: bool = False
    rest: bool = False
    noise: float | Literal["estimated", "white"] = "estimated"
    held: Mapping[str, float] = field(default_factory=dict)
    ranges: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    ties: Mapping[str, str] = field(default_factory=dict)
    input_noise: tuple[float, ...] = ()
    seed: int = 0
