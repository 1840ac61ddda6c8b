"""From a road's result to a `Fit`: names, units, derived quantities, traces, what is not determined."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import FitError
from rigtally.estimation.arrange import Arranged
from rigtally.estimation.derived import derived_quantities
from rigtally.estimation.findings import lag_one
from rigtally.estimation.measured_response import measured_response
from rigtally.estimation.result import Fit, Residual, RoadResult, Trace, Warning_
from rigtally.estimation.trial import Trial
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
# relative u beyond which a positive parameter's interval is taken from the likelihood's profile
DOUBTFUL = 0.3


def assemble(
    trial: Trial,
    arranged: Arranged,
    road: str,
    result: RoadResult,
    other: RoadResult | None,
    notes: Sequence[Warning_],
) -> Fit:
    """The fit that is handed out.

    Raises
    ------
    FitError
        code "nothing-determined": no parameter that was asked for is determined.
    """
    form = trial.form
    units = form.units(arranged.output_units, arranged.input_units)
    theta, covariance = result.theta, result.covariance
    warnings = [*notes, *result.warnings]
    parameters: dict[str, Uncertain] = {}
    for k, name in enumerate(form.names):
        held = name in trial.held
        variance = float(covariance[k, k])
        u = 0.0 if held else math.sqrt(variance) if variance >= 0 else math.nan
        dof = math.inf if held else result.dof
        parameters[name] = Uncertain(
            float(theta[k]), u, units[k], dof, "exact" if held else "normal", result.limits95.get(name)
        )
    parameters, said = _profiled(trial, result, parameters)
    warnings += said
    free = [q for name, q in parameters.items() if name not in trial.held]
    if free and not any(q.determined for q in free):
        raise FitError(
            "the log determines none of the parameters",
            where=str(arranged.log.get("file") or ""),
            do="use a longer or stronger test, a simpler form, or hold a parameter with --set",
            code="nothing-determined",
        )
    agree, said = _compare(trial, result, other)
    warnings += said
    finite = np.where(np.isfinite(theta), theta, 0.0)
    matrix = form.transfer_matrix(np.where(np.isfinite(theta), theta, 1.0))
    return Fit(
        form=form,
        road=road,
        names=form.names,
        parameters=parameters,
        covariance=_covariance(covariance, parameters),
        transfer_function=matrix,
        derived=derived_quantities(form.names, finite, covariance, result.dof),
        output_units=tuple(arranged.output_units),
        input_units=tuple(arranged.input_units),
        interval=trial.segments[0].interval,
        samples=int(sum(s.count for s in trial.segments)),
        between=trial.between,
        held=tuple(trial.held),
        other_road=other,
        roads_agree=agree,
        response=measured_response(trial.segments, result.fitted, matrix)
        if np.all(np.isfinite(theta))
        else None,
        residual=_residuals(trial, arranged, result),
        traces=_traces(trial, result),
        warnings=_once(warnings),
        log={**arranged.log, "between": trial.between, "drift": trial.drift, "seed": trial.seed},
        nuisance=result.nuisance,
    )


def _covariance(covariance: Array, parameters: dict[str, Uncertain]) -> Array:
    """NaN rows and columns for what is not determined."""
    out = covariance.copy()
    for k, quantity in enumerate(parameters.values()):
        if not quantity.determined:
            out[k, :] = np.nan
            out[:, k] = np.nan
    return out


def _profiled(
    trial: Trial, result: RoadResult, parameters: dict[str, Uncertain]
) -> tuple[dict[str, Uncertain], list[Warning_]]:
    """Intervals from the profile of the likelihood where a positive parameter's u is a large part of it."""
    from rigtally.estimation.identifiability import doubtful, profiled

    names = doubtful(trial, parameters, DOUBTFUL)
    return profiled(trial, result, parameters, names) if names else (parameters, [])


def _compare(
    trial: Trial, result: RoadResult, other: RoadResult | None
) -> tuple[bool | None, list[Warning_]]:
    """Whether the roads agree within their joint uncertainty (both use the same data: half a u is plenty)."""
    if other is None:
        return None, []
    u = np.sqrt(np.diag(result.covariance))
    apart = []
    for k, name in enumerate(trial.form.names):
        if u[k] > 0 and np.isfinite(u[k]) and abs(other.theta[k] - result.theta[k]) > 0.5 * u[k]:
            apart.append(f"{name} by {(other.theta[k] - result.theta[k]) / u[k]:+.1f} u")
    if not apart:
        return True, []
    return False, [
        Warning_(
            "roads-disagree",
            f"time and frequency road disagree: {', '.join(apart)}; look for gaps, a drift or non-linearity",
        )
    ]


def _residuals(trial: Trial, arranged: Arranged, result: RoadResult) -> tuple[Residual, ...]:
    out = []
    for i, name in enumerate(trial.form.outputs):
        rests = [s.outputs[i] - f[i] for s, f in zip(trial.segments, result.fitted, strict=True)]
        rest = np.concatenate([r[np.isfinite(r)] for r in rests])
        total = sum(float(np.nanvar(s.outputs[i])) * s.count for s in trial.segments)
        power = float(rest @ rest)
        out.append(
            Residual(
                output=name,
                rms=math.sqrt(power / max(rest.size, 1)),
                unit=arranged.output_units[i],
                explained=1.0 - power / total if total > 0 else math.nan,
                noise=result.noise[i],
                effective_samples=float(result.effective_samples[i]),
                lag_one=lag_one(rests[0]),
            )
        )
    return tuple(out)


def _traces(trial: Trial, result: RoadResult) -> tuple[Trace, ...]:
    return tuple(
        Trace(s.label, s.time, s.inputs, s.outputs, f, s.outputs - f)
        for s, f in zip(trial.segments, result.fitted, strict=True)
    )


def _once(warnings: Sequence[Warning_]) -> tuple[Warning_, ...]:
    seen: dict[Any, Warning_] = {}
    for warning in warnings:
        seen.setdefault((warning.code, warning.text), warning)
    return tuple(seen.values())
