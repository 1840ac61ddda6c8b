"""The door of the physics room: from a checked rig to a prediction with uncertainty."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.forms.transfer_matrix import TransferMatrix
from rigtally.physics.derived import derived_quantities
from rigtally.physics.expansion import TooLarge
from rigtally.physics.large_model import POLYNOMIAL_ORDER, LargeModel
from rigtally.physics.limits import line_limits
from rigtally.physics.line_model import LineModel, Solved
from rigtally.physics.model import FROM_RIG, Model
from rigtally.physics.network import assemble
from rigtally.physics.pencil import System
from rigtally.physics.prediction_result import Finding, Prediction
from rigtally.physics.rig import Rig
from rigtally.physics.tolerance_draws import drawn_inputs, monte_carlo_parameters
from rigtally.quantities.coverage import effective_dof
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
Progress = Callable[[int, int], None]
ROUNDING = 1e-13


def predict(rig: Rig, *, monte_carlo: int = 0, seed: int = 0, progress: Progress | None = None) -> Prediction:
    """Transfer matrix, named parameters and their uncertainty from a rig's elements.

    Parameters
    ----------
    monte_carlo : int
        At most so many draws of the tolerances (JCGM 101:2008, adaptive stop); 0: first order only.
    seed : int
        Of the draws.
    progress : callable (draws done, draws at most), optional

    Raises
    ------
    RigError
        The network has no unique or no proper answer; the elements are named.
    """
    model = open_model(rig)
    solved = _without_rounding(model.solve(), model.values.nominal)
    form = model.form
    inputs = model.values.inputs
    u = np.array([x.u for x in inputs])
    covariance = (solved.sensitivity * u**2) @ solved.sensitivity.T
    units = form.units(model.network.output_units, model.network.input_units)
    parameters = {
        name: Uncertain(float(x), float(s), unit, dof)
        for name, x, s, unit, dof in zip(
            form.names,
            solved.theta,
            _spread(solved.sensitivity, u),
            units,
            _dof(solved.sensitivity, inputs),
            strict=True,
        )
    }
    warnings = _warnings(model, solved)
    if monte_carlo:
        found, more = monte_carlo_parameters(model, parameters, solved, monte_carlo, seed, progress)
        parameters, warnings = found, [*warnings, *more]
    dead = np.zeros((len(form.outputs), len(form.inputs)))
    provenance: dict[str, Any] = {
        "file": rig.file,
        "sha256": rig.sha256,
        "seed": seed,
        "poles": tuple(complex(p) for p in solved.poles),
        "u_denominator": _spread(solved.by_denominator.T, u),
        "u_numerators": _spread(np.moveaxis(solved.by_numerators, 0, -1), u),
        **({"line_frequency": solved.omega} if math.isfinite(solved.omega) else {}),
    }
    limits = line_limits(model)
    if isinstance(model, LargeModel) and model.dominant is not None:
        provenance["large"] = model.entries_report()
        limits = (*limits, *_dominant_findings(provenance["large"], solved))
    return Prediction(
        title=rig.title,
        form=form,
        names=form.names,
        parameters=parameters,
        covariance=covariance,
        transfer_function=TransferMatrix(
            solved.numerators, solved.denominator, dead, form.outputs, form.inputs
        ),
        derived=derived_quantities(model, solved, u),
        output_units=model.network.output_units,
        input_units=model.network.input_units,
        input_names=model.values.input_names,
        inputs=inputs,
        sensitivity=solved.sensitivity,
        evaluate=model.evaluate,
        evaluate_many=model.evaluate_many,
        differentiate=model.differentiate,
        drawn=drawn_inputs(model)[0],
        budget=_budget(model, solved.sensitivity, u),
        limits=limits,
        warnings=tuple(warnings),
        removed_poles=model.reduction.removed,
        provenance=provenance,
    )


def open_model(rig: Rig) -> LineModel:
    """Expanded determinants where they are few and the order is at most 10, else the pencil."""
    network = assemble(rig)
    if len(rig.elements) > POLYNOMIAL_ORDER and System(network).order > POLYNOMIAL_ORDER:
        return LargeModel(rig, network)
    try:
        model = Model(rig, network)
    except TooLarge:
        return LargeModel(rig, network)
    return model if model.form.degree <= POLYNOMIAL_ORDER else LargeModel(rig, network)


def _without_rounding(solved: Solved, nominal: Array) -> Solved:
    """Relative sensitivities below 1e-13 are rounding of an exact zero (a gain that is 1 by structure)."""
    relative = np.abs(solved.sensitivity * nominal)
    zero = (relative < ROUNDING * np.abs(solved.theta)[:, None]) & (nominal != 0.0)
    return replace(solved, sensitivity=np.where(zero, 0.0, solved.sensitivity))


def _dof(sensitivity: Array, inputs: tuple[Uncertain, ...]) -> list[float]:
    """Effective degrees of freedom of each parameter (Welch-Satterthwaite)."""
    return [
        effective_dof((c * x.u, x.dof) for c, x in zip(row, inputs, strict=True) if x.u > 0)
        for row in sensitivity.tolist()
    ]


def _spread(sensitivity: Array, u: Array) -> Array:
    """Standard uncertainty of independent inputs: √Σ (c u)² over the last axis.

    A value taken as exact adds nothing, whatever its derivative.
    """
    moving = u > 0
    out: Array = np.sqrt(np.sum((sensitivity[..., moving] * u[moving]) ** 2, axis=-1))
    return out


def _budget(model: LineModel, sensitivity: Array, u: Array) -> dict[str, list[tuple[str, str, float]]]:
    """Share of each value in the variance of each parameter, largest first; they sum to 1."""
    out: dict[str, list[tuple[str, str, float]]] = {}
    for name, row in zip(model.form.names, sensitivity, strict=True):
        parts = np.where(u > 0, row * u, 0.0) ** 2
        total = parts.sum()
        if not total > 0 or not math.isfinite(total):
            out[name] = []
            continue
        shares = [
            (*model.values.label(value), float(part / total))
            for value, part in zip(model.values.input_names, parts, strict=True)
            if part > 1e-12 * total
        ]
        out[name] = sorted(shares, key=lambda item: -item[2])
    return out


def _warnings(model: LineModel, solved: Solved) -> list[Finding]:
    out: list[Finding] = []
    stated = str(model.rig.fit.get("form") or FROM_RIG)
    if stated not in (FROM_RIG, "any", model.form.name):
        out.append(
            Finding(
                "form-differs",
                f"the rig file asks for the form {stated}, the elements imply {model.form.name} with "
                f"{', '.join(model.form.names)}: the prediction is in the latter",
            )
        )
    exact = [n for n, x in zip(model.values.input_names, model.values.inputs, strict=True) if x.u == 0.0]
    stated = str(model.rig.fit.get("form") or FROM_RIG)
    if stated not in (FROM_RIG, "any", model.form.name):
        out.append(
            Finding(
                "form-differs",
                f"the rig file asks for the form {stated}, the elements imply {model.form.name} with "
                f"{', '.join(model.form.names)}: the prediction is in the latter",
            )
        )
    exact = [n for n in exact if n != "rig.gravity"]
    if exact:
        out.append(
            Finding(
                "taken-as-exact", "no tolerance is stated, taken as exact: " + ", ".join(exact), len(exact)
            )
        )
    for pole in model.reduction.removed:
        text = f"a pole at {_written(pole)} is in no entry and was removed"
        if pole.real > 0:
            out.append(Finding("removed-unstable-pole", text + "; it is unstable", pole.real))
        else:
            out.append(Finding("removed-pole", text, pole.real))
    if model.reduction.by_chance:
        out.append(
            Finding(
                "cancelled-by-chance",
                f"{model.reduction.by_chance} pole(s) cancel at the nominal values only, not by structure: "
                "with the tolerances they are weakly there",
                model.reduction.by_chance,
            )
        )
    idle = [d.name for j, d in enumerate(model.rig.drives) if not any(row[j] for row in model.form.powers)]
    if idle:
        out.append(
            Finding("idle-drive", "no reading is moved by drive " + ", ".join(map(repr, idle)), len(idle))
        )
    unstable = [p for p in solved.poles if p.real > 1e-12 * abs(p)]
    if unstable:
        out.append(
            Finding(
                "unstable", f"the rig is unstable: a pole at {_written(unstable[0])}", float(unstable[0].real)
            )
        )
    undamped = [p for p in solved.poles if p.imag > 0 and abs(p.real) <= 1e-12 * abs(p)]
    if undamped:
        out.append(
            Finding(
                "undamped",
                f"no element damps the pole pair at {abs(undamped[0]):.4g} rad/s: a real rig has losses that the "
                "file does not state, and its damping ratio is not 0",
                float(abs(undamped[0])),
            )
        )
    if model.form.integrators:
        out.append(
            Finding(
                "integrates",
                f"the rig integrates ({model.form.integrators} pole(s) at zero): constant in, ramp out",
                model.form.integrators,
            )
        )
    if not np.all(np.isfinite(solved.sensitivity)):
        out.append(
            Finding(
                "coincident-poles",
                "poles coincide, where the parameters have no derivative: their first-order uncertainty is "
                "not determined",
            )
        )
    return out


def _dominant_findings(entries: list[dict[str, Any]], solved: Solved) -> list[Finding]:
    """How much of each entry's step response the dominant pair explains."""
    out = []
    for entry in entries:
        share = entry["share"]
        text = (
            f"order {solved.poles.size}: the dominant pair explains {100 * share:.1f} % of the transient's "
            f"energy in {entry['output']!r} over {entry['input']!r}"
        )
        out.append(Finding("dominant-pair" if share > 0.95 else "dominant-pair-weak", text, share))
    return out


def _written(pole: complex) -> str:
    if pole.imag == 0:
        return f"{pole.real:.4g} 1/s"
    return f"{pole.real:.4g} ± {abs(pole.imag):.4g}j 1/s"
