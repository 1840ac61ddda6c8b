"""Prediction: what the rig file says the bench should show. Frozen."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.forms.named import Form
from rigtally.forms.transfer_matrix import TransferMatrix
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Finding:
    """A warning or a validity limit: code, text, and the number behind it."""

    code: str
    text: str
    value: float = float("nan")

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "code": self.code,
            "text": self.text,
            "value": self.value if np.isfinite(self.value) else None,
        }


@dataclass(frozen=True)
class Prediction:
    """The rig's transfer matrix and parameters with uncertainty.

    Attributes
    ----------
    form : Form
        Powers of s that the network implies; outputs are the readings' names, inputs the drives'.
    names : tuple of str
        The parameters (form.names) that a fit of the same form will have.
    parameters : mapping of name to Uncertain
    covariance : (p, p) array
        First-order, from the tolerances.
    input_names : tuple of str
        Each uncertain or exact value of the rig, "gauge chamber.compliance", "oil.density".
    inputs : tuple of Uncertain
        Those values.
    sensitivity : (p, v) array
        d parameter / d value, exact.
    evaluate : callable
        (v,) values -> (p,) parameters, the network re-solved without linearising
        (NaN where the values make no such rig).
    budget : mapping of parameter to a list of (element, value, share)
    evaluate_many : callable or None
        (m, v) values -> (m, p) parameters, for draws.
    differentiate : callable or None
        (v,) values -> (p, v) exact derivative there.
    drawn : tuple of Uncertain
        The values as they are drawn (log-normal where u is large); empty: as in `inputs`.
    """

    title: str
    form: Form
    names: tuple[str, ...]
    parameters: Mapping[str, Uncertain]
    covariance: Array
    transfer_function: TransferMatrix
    derived: Mapping[str, Uncertain]
    output_units: tuple[str, ...]
    input_units: tuple[str, ...]
    input_names: tuple[str, ...]
    inputs: tuple[Uncertain, ...]
    sensitivity: Array
    evaluate: Callable[[Array], Array]
    budget: Mapping[str, list[tuple[str, str, float]]]
    limits: tuple[Finding, ...] = ()
    warnings: tuple[Finding, ...] = ()
    removed_poles: tuple[complex, ...] = ()
    provenance: Mapping[str, Any] = field(default_factory=dict)
    evaluate_many: Callable[[Array], Array] | None = None
    differentiate: Callable[[Array], Array] | None = None
    drawn: tuple[Uncertain, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """The prediction as the JSON contract states it."""
        from rigtally.physics.to_json import prediction_to_dict

        return prediction_to_dict(self)
