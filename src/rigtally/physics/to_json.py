"""The prediction as the JSON contract states it ("rigtally/prediction/1")."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.prediction_result import Prediction
from rigtally.quantities import units
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]


def prediction_to_dict(prediction: Prediction) -> dict[str, Any]:
    """schema, form, parameters, derived, transfer and denominator, budget, limits, warnings, provenance."""
    form = prediction.form
    out: dict[str, Any] = {
        "schema": "rigtally/prediction/1",
        "title": prediction.title,
        "form": form.name,
        "parameters": {name: u.to_dict() for name, u in prediction.parameters.items()},
        "correlation": {"names": list(prediction.names), "matrix": _correlation(prediction.covariance)},
        "derived": {name: u.to_dict() for name, u in prediction.derived.items()},
    }
    out["derived"]["poles"] = [_pair(p) for p in prediction.provenance.get("poles", ())]
    out.update(_transfer(prediction))
    out["budget"] = {
        name: [{"element": owner, "value": key, "share": share} for owner, key, share in shares]
        for name, shares in prediction.budget.items()
    }
    out["inputs"] = {
        name: u.to_dict() for name, u in zip(prediction.input_names, prediction.inputs, strict=True)
    }
    out["limits"] = [finding.to_dict() for finding in prediction.limits]
    out["warnings"] = [finding.to_dict() for finding in prediction.warnings]
    out["removed_poles"] = [_pair(p) for p in prediction.removed_poles]
    out["provenance"] = {
        key: value for key, value in prediction.provenance.items() if isinstance(value, str | int | float)
    }
    return out


def _transfer(prediction: Prediction) -> dict[str, Any]:
    """Polynomials with units and u, one denominator; above order 10 poles, zeros and gain."""
    form = prediction.form
    large = prediction.provenance.get("large")
    if large:
        return {
            "poles": [_pair(p) for p in prediction.provenance.get("poles", ())],
            "transfer": [
                {
                    "output": entry["output"],
                    "input": entry["input"],
                    "zeros": None if entry["zeros"] is None else [_pair(z) for z in entry["zeros"]],
                    "gain": _gain(prediction, entry["output"], entry["input"]),
                    "numerator_from": entry["power"],
                    "explained": entry["share"],
                }
                for entry in large
            ],
        }
    u_den = prediction.provenance.get("u_denominator")
    u_num = prediction.provenance.get("u_numerators")
    transfer = []
    matrix = prediction.transfer_function
    for i, j in form.entries:
        free = form.powers[i][j]
        name = "gain" if form.single else f"gain({form.outputs[i]}, {form.inputs[j]})"
        gain = prediction.parameters.get(name)
        if gain is None and "gain" in prediction.derived:
            gain = prediction.derived["gain"]
        transfer.append(
            {
                "output": form.outputs[i],
                "input": form.inputs[j],
                "numerator": [
                    Uncertain(
                        float(matrix.numerators[i, j, k]),
                        float(u_num[i, j, k]) if u_num is not None else float("nan"),
                        _coefficient_unit(prediction, i, j, k),
                    ).to_dict()
                    for k in range(free[-1] + 1)
                ],
                "gain": gain.to_dict() if gain is not None else None,
                "numerator_from": free[0],
                "integrators": form.integrators,
            }
        )
    degree = form.degree
    denominator = [
        Uncertain(
            float(c),
            float(u_den[k]) if u_den is not None else float("nan"),
            units.ratio("", "", k - degree) if k < degree else "",
        ).to_dict()
        for k, c in enumerate(matrix.denominator)
    ]
    return {"transfer": transfer, "denominator": denominator}


def _gain(prediction: Prediction, output: str, drive: str) -> dict[str, Any] | None:
    name = "gain" if prediction.form.single else f"gain({output}, {drive})"
    found = prediction.parameters.get(name)
    return found.to_dict() if found is not None else None


def _coefficient_unit(prediction: Prediction, i: int, j: int, power: int) -> str:
    """Unit of a numerator coefficient over a denominator whose highest power has the coefficient 1."""
    return units.ratio(prediction.output_units[i], prediction.input_units[j], power - prediction.form.degree)


def _correlation(covariance: Array) -> list[list[float | None]]:
    spread = np.sqrt(np.diag(covariance))
    with np.errstate(divide="ignore", invalid="ignore"):
        matrix = covariance / np.outer(spread, spread)
    return [[float(x) if np.isfinite(x) else None for x in row] for row in matrix]


def _pair(number: complex) -> list[float]:
    return [float(np.real(number)), float(np.imag(number))]
