"""Fit: what a fit leaves behind. Frozen; the next rooms only read it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.forms.named import Form
from rigtally.forms.transfer_matrix import TransferMatrix
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Warning_:
    """One finding that a reader of the result has to know."""

    code: str
    text: str

    def to_dict(self) -> dict[str, str]:
        """For JSON."""
        return {"code": self.code, "text": self.text}


@dataclass(frozen=True)
class Residual:
    """What one output's fit left over.

    `explained` is the share of the output's variance (about its offset and drift)
    that the fit explains; `noise` is "white", "coloured" or "stated";
    `effective_samples` the number of independent samples that the residual is worth.
    """

    output: str
    rms: float
    unit: str
    explained: float
    noise: str
    effective_samples: float
    lag_one: float = float("nan")

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "output": self.output,
            "rms": self.rms,
            "unit": self.unit,
            "explained": self.explained,
            "noise": self.noise,
            "effective_samples": self.effective_samples,
        }


@dataclass(frozen=True)
class Trace:
    """One fitted record, for plots: time (n,), inputs (r, n), outputs, fitted, residual (q, n)."""

    label: str
    time: Array
    inputs: Array
    outputs: Array
    fitted: Array
    residual: Array


@dataclass(frozen=True)
class MeasuredResponse:
    """The record's own response: frequency (m,) rad/s, gain and u (m, q, r), coherence (m,)."""

    frequency: Array
    gain: NDArray[np.complex128]
    u: Array
    coherence: Array


@dataclass(frozen=True)
class RoadResult:
    """What one road (time or frequency) found: the same for both.

    Attributes
    ----------
    theta : (p,) array
        Parameters in the order of `form.names`, SI.
    covariance : (p, p) array
        NaN rows for parameters that are not determined; 0 rows for held ones.
    dof : float
        Effective degrees of freedom of the noise estimate.
    fitted : tuple of (q, n) arrays
        The model's output with offset, drift and initial state, one per record.
    cost : float
        Weighted sum of squares at the optimum.
    noise : tuple of str
        "white", "coloured" or "stated", one per output.
    """

    road: str
    theta: Array
    covariance: Array
    dof: float
    fitted: tuple[Array, ...]
    cost: float
    noise: tuple[str, ...]
    effective_samples: tuple[float, ...]
    nuisance: Mapping[str, float] = field(default_factory=dict)
    limits95: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    evaluations: int = 0
    converged: bool = True
    warnings: tuple[Warning_, ...] = ()


@dataclass(frozen=True)
class Fit:
    """A fitted transfer function or matrix.

    Attributes
    ----------
    form : Form
    road : str
        "time" or "frequency": the road whose numbers stand in `parameters`.
    names : tuple of str
        All parameters, in the order of `covariance` (form.names).
    parameters : mapping of name to Uncertain
    covariance : (p, p) array
    transfer_function : TransferMatrix
    derived : mapping of name to Uncertain
        natural_frequency_hz, damped_frequency, overshoot, time constants of real poles …
    """

    form: Form
    road: str
    names: tuple[str, ...]
    parameters: Mapping[str, Uncertain]
    covariance: Array
    transfer_function: TransferMatrix
    derived: Mapping[str, Uncertain]
    output_units: tuple[str, ...]
    input_units: tuple[str, ...]
    interval: float
    samples: int
    between: str
    held: tuple[str, ...] = ()
    other_road: RoadResult | None = None
    roads_agree: bool | None = None
    response: MeasuredResponse | None = None
    residual: tuple[Residual, ...] = ()
    traces: tuple[Trace, ...] = ()
    warnings: tuple[Warning_, ...] = ()
    log: Mapping[str, Any] = field(default_factory=dict)
    nuisance: Mapping[str, float] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """The fit as the JSON contract states it."""
        from rigtally.estimation.to_json import fit_to_dict

        return fit_to_dict(self)
