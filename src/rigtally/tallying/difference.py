"""What is compared: the parameters that a fit and a prediction share, and all that their difference may hold."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import UsageError
from rigtally.estimation.result import Fit
from rigtally.forms.named import Form
from rigtally.physics.prediction_result import Prediction
from rigtally.quantities import units
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
TINY = 1e-10  # relative: differences below it are those of arithmetic


@dataclass(frozen=True)
class Difference:
    """The difference fitted − predicted of the parameters that can be compared.

    Attributes
    ----------
    names : tuple of str
        Compared parameters; `undetermined` and `held` name those that could not be.
    fitted, predicted, value : (q,) arrays, SI
        `fitted` is corrected by the best values of the systematic parts.
    noise : (q, q) array
        Covariance of the fit.
    dof : float
        Degrees of freedom of the fit's noise.
    by_value : (q, v) array
        Exact derivative of the predicted parameters by the rig's values.
    by_systematic : (q, s) array
        Effect of each stated systematic part on the fitted parameters.
    systematic : tuple of Uncertain
    scale : (q,) array
        A size for each parameter, so that units do not matter.
    bend : (q, q) array
        Second moment of what the tolerances do beyond first order; 0 where that is small.
    """

    names: tuple[str, ...]
    undetermined: tuple[str, ...]
    held: tuple[str, ...]
    fitted: Array
    predicted: Array
    value: Array
    noise: Array
    dof: float
    by_value: Array
    by_systematic: Array
    systematic: tuple[Uncertain, ...]
    rows: tuple[int, ...]
    values: tuple[Uncertain, ...]
    scale: Array
    bend: Array

    @property
    def tolerance(self) -> Array:
        """(q, q) first-order covariance of the prediction."""
        return spread_of(self.by_value, self.values)

    @property
    def covariance(self) -> Array:
        """(q, q) covariance of the difference: fit, systematic parts and tolerances."""
        return self.noise + spread_of(self.by_systematic, self.systematic) + self.tolerance + self.bend


def spread_of(columns: Array, quantities: Sequence[Uncertain]) -> Array:
    """Covariance Σ c_j c_jᵀ u_j² of independent quantities; an exact one adds nothing."""
    u = np.array([x.u for x in quantities], dtype=float)
    moving = u > 0
    parts = columns[:, moving] * u[moving]
    out: Array = parts @ parts.T
    return out


def difference(fit: Fit, prediction: Prediction, systematic: Sequence[Mapping[str, Any]]) -> Difference:
    """Set the parameters of a fit against those of a prediction.

    Raises
    ------
    UsageError
        "nothing-to-compare" or "other-unit".
    """
    shared = [name for name in prediction.names if name in fit.names]
    if not shared:
        raise UsageError(
            f"the fit has {', '.join(fit.names)}; the prediction has {', '.join(prediction.names)}",
            where="tally",
            do=f"fit the form that the rig implies ({prediction.form.name!r})",
            code="nothing-to-compare",
        )
    for name in shared:
        ours, theirs = fit.parameters[name].unit, prediction.parameters[name].unit
        if ours != theirs and not units.same_dimension(ours, theirs):
            raise UsageError(
                f"{name} is fitted in {ours or 'plain numbers'}, and predicted in {theirs or 'plain numbers'}",
                where="tally",
                do="state the channels' units, in the log or in [log] units",
                code="other-unit",
            )
    held = tuple(name for name in shared if name in fit.held)
    spread = np.diag(fit.covariance)
    undetermined = []
    for name in shared:
        k = fit.names.index(name)
        row = prediction.sensitivity[prediction.names.index(name)]
        moving = np.array([x.u > 0 for x in prediction.inputs], dtype=bool)
        known = (
            np.isfinite(spread[k])
            and np.isfinite(fit.parameters[name].value)
            and np.isfinite(prediction.parameters[name].value)
            and bool(np.all(np.isfinite(row[moving])))
        )
        if name not in held and not known:
            undetermined.append(name)
    names = tuple(name for name in shared if name not in held and name not in undetermined)
    here = [fit.names.index(name) for name in names]
    there = [prediction.names.index(name) for name in names]
    effects = systematic_effects(fit.form, systematic)[here]
    known_errors = np.array([entry["value"].value for entry in systematic], dtype=float)
    fitted = np.array([fit.parameters[name].value for name in names])
    fitted = fitted / (1.0 + effects @ known_errors)
    predicted = np.array([prediction.parameters[name].value for name in names])
    noise = np.asarray(fit.covariance, dtype=float)[np.ix_(here, here)]
    dof = min((fit.parameters[name].dof for name in names), default=np.inf)
    columns = np.where(np.isfinite(prediction.sensitivity), prediction.sensitivity, 0.0)[there]
    quantities = tuple(entry["value"] for entry in systematic)
    size = np.maximum(np.abs(fitted), np.abs(predicted))
    total = noise + spread_of(columns, prediction.inputs)
    size = np.where(size > 0, size, np.sqrt(np.clip(np.diag(total), 0.0, None)))
    return Difference(
        names=names,
        undetermined=tuple(undetermined),
        held=held,
        fitted=fitted,
        predicted=predicted,
        value=fitted - predicted,
        noise=noise,
        dof=dof,
        by_value=columns,
        by_systematic=effects * fitted[:, None],
        systematic=quantities,
        rows=tuple(there),
        values=tuple(prediction.drawn or prediction.inputs),
        scale=np.where(size > 0, size, 1.0),
        bend=np.zeros((len(names), len(names))),
    )


def systematic_effects(form: Form, systematic: Sequence[Mapping[str, Any]]) -> Array:
    """(p, s) relative effect of each systematic part on each parameter.

    A relative error e of an output's gain multiplies each gain of that output by 1 + e, of an
    input's gain divides it; an error of the time base acts by each parameter's power of time.

    Raises
    ------
    UsageError
        "unknown-channel": no output or input of the fit has that name.
    """
    out = np.zeros((len(form.names), len(systematic)))
    for s, entry in enumerate(systematic):
        if entry["of"] == "time":
            out[:, s] = form.time_powers
            continue
        channel = entry["channel"]
        if channel not in form.outputs and channel not in form.inputs:
            raise UsageError(
                f"the systematic part names {channel!r}, which is neither an output nor an input",
                where="[[systematic]]",
                do="choose one of: " + ", ".join([*form.outputs, *form.inputs]),
                code="unknown-channel",
            )
        for k, (i, j, power) in enumerate(form.numerator_slots):
            first = power == form.powers[i][j][0] or re.fullmatch(r"b\d", form.names[k])
            if first:
                out[k, s] += float(form.outputs[i] == channel) - float(form.inputs[j] == channel)
    return out
