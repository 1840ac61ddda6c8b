"""A fit as the JSON contract states it."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from rigtally.estimation.result import Fit, RoadResult
from rigtally.forms.named import Form
from rigtally.quantities import units
from rigtally.quantities.uncertain import Uncertain


def fit_to_dict(fit: Fit) -> dict[str, Any]:
    """The document "rigtally/fit/1"."""
    shared = {name: q for name, q in fit.parameters.items() if fit.form.single or "(" not in name}
    names = list(fit.names)
    scale = np.sqrt(np.diag(fit.covariance))
    with np.errstate(all="ignore"):
        correlation = fit.covariance / np.outer(scale, scale)
    out: dict[str, Any] = {
        "schema": "rigtally/fit/1",
        "log": dict(fit.log),
        "form": fit.form.name,
        "road": fit.road,
        "parameters": {name: q.to_dict() for name, q in shared.items()},
        "held": list(fit.held),
        "correlation": {"names": names, "matrix": _plain(correlation)},
        "derived": {
            **{name: q.to_dict() for name, q in fit.derived.items()},
            "poles": [[float(p.real), float(p.imag)] for p in fit.transfer_function.poles],
        },
        "other_road": _road(fit.form, fit.other_road, fit),
        "response": _response(fit),
        "residual": [r.to_dict() for r in fit.residual],
        "warnings": [w.to_dict() for w in fit.warnings],
    }
    if not fit.form.single:
        out.update(_transfer(fit))
    return out


def _road(form: Form, road: RoadResult | None, fit: Fit) -> dict[str, Any] | None:
    if road is None:
        return None
    u = np.sqrt(np.diag(road.covariance))
    parameters = {
        name: Uncertain(float(road.theta[k]), float(u[k]), fit.parameters[name].unit, road.dof).to_dict()
        for k, name in enumerate(form.names)
    }
    return {"road": road.road, "parameters": parameters, "agree": fit.roads_agree}


def _response(fit: Fit) -> dict[str, Any] | None:
    found = fit.response
    if found is None:
        return None
    q, r = found.gain.shape[1:]
    single = q == r == 1

    def pick(rows: Any) -> Any:
        return rows[:, 0, 0] if single else rows

    return {
        "frequency": found.frequency.tolist(),
        "gain": np.stack([pick(found.gain).real, pick(found.gain).imag], axis=-1).tolist(),
        "u": pick(found.u).tolist(),
        "coherence": found.coherence.tolist(),
    }


def _transfer(fit: Fit) -> dict[str, Any]:
    """Entries of a transfer matrix with their coefficients' uncertainties (exact first-order derivatives)."""
    form = fit.form
    theta = np.array([fit.parameters[name].value for name in form.names])
    b, by = form.numerator_coefficients(theta)
    covariance = np.nan_to_num(fit.covariance, nan=np.inf)
    dof = next((q.dof for q in fit.parameters.values() if math.isfinite(q.dof)), math.inf)
    entries = []
    with np.errstate(all="ignore"):
        u_b = np.sqrt(np.einsum("pk,pq,qk->k", by, covariance, by))
    for i, j in form.entries:
        power_units = {
            p: units.ratio(fit.output_units[i], fit.input_units[j], p - form.degree)
            for p in range(form.degree + 1)
        }
        numerator = [Uncertain(0.0, 0.0, power_units[p]).to_dict() for p in range(max(form.powers[i][j]) + 1)]
        for k, (oi, ij, p) in enumerate(form.numerator_slots):
            if (oi, ij) == (i, j):
                u = float(u_b[k]) if np.isfinite(u_b[k]) else math.nan
                numerator[p] = Uncertain(float(b[k]), u, power_units[p], dof).to_dict()
        gain = fit.parameters["gain" if form.single else f"gain({form.outputs[i]}, {form.inputs[j]})"]
        entries.append(
            {
                "output": form.outputs[i],
                "input": form.inputs[j],
                "numerator": numerator,
                "numerator_from": min(form.powers[i][j]),
                "integrators": form.integrators,
                "gain": gain.to_dict(),
            }
        )
    _, shared, _ = form.split(theta)
    den, dden = form.denominator(shared)
    first = form.numerator_count
    part = covariance[first : first + shared.size, first : first + shared.size]
    with np.errstate(all="ignore"):
        u_a = np.sqrt(np.einsum("pk,pq,qk->k", dden, part, dden))
    denominator = [Uncertain(0.0, 0.0, "").to_dict() for _ in range(form.integrators)]
    for k, value in enumerate(den):
        unit = units.ratio("", "", k - form.order) if k < form.order else ""
        u = float(u_a[k]) if np.isfinite(u_a[k]) else math.nan
        denominator.append(Uncertain(float(value), u, unit, dof).to_dict())
    return {"transfer": entries, "denominator": denominator}


def _plain(matrix: Any) -> list[list[float | None]]:
    return [[float(x) if math.isfinite(x) else None for x in row] for row in matrix]
