"""The most probable element values, given both their tolerances and the log."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.prediction_result import Prediction
from rigtally.quantities.uncertain import Uncertain
from rigtally.tallying.difference import Difference, spread_of

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Reconciled:
    """One value before and after the log.

    `pull` is (after − before)/√(u_before² − u_after²), of a standard normal if all tallies; NaN where the
    log taught nothing. `learned` is 1 − u_after/u_before.
    """

    prior: Uncertain
    posterior: Uncertain
    pull: float
    learned: float

    def to_dict(self) -> dict[str, Any]:
        """The value after the log, with what it was before."""
        return {
            **self.posterior.to_dict(),
            "prior": self.prior.to_dict(),
            "pull": self.pull if math.isfinite(self.pull) else None,
            "learned": self.learned,
        }


@dataclass(frozen=True)
class Reconciliation:
    """All uncertain values after the log: `names`, values, their covariance (v, v)."""

    names: tuple[str, ...]
    values: dict[str, Reconciled]
    covariance: Array
    predicted: Array
    converged: bool


def reconcile(d: Difference, prediction: Prediction, rounds: int = 20) -> Reconciliation:
    """Iterated least squares with the tolerances as prior.

    With P the covariance of the values, S the derivative of the parameters and N that of the fit with its
    systematic parts: x = x₀ + P Sᵀ (S P Sᵀ + N)⁻¹ (fitted − g(x) + S (x − x₀)), repeated with the rig
    re-solved at x; covariance P − P Sᵀ (S P Sᵀ + N)⁻¹ S P (general least squares; a rectangular
    tolerance enters with its u).
    """
    moving = [k for k, x in enumerate(prediction.inputs) if x.u > 0]
    names = tuple(prediction.input_names[k] for k in moving)
    nominal = np.array([x.value for x in prediction.inputs], dtype=float)
    u = np.array([prediction.inputs[k].u for k in moving])
    noise = d.noise + spread_of(d.by_systematic, d.systematic) + np.diag((1e-9 * d.scale) ** 2)
    x = nominal.copy()
    slopes = d.by_value[:, moving] * u  # in units of u: the prior is the unit matrix
    t = np.zeros(len(moving))
    there = d.predicted
    converged = not d.names or not moving
    for _ in range(rounds):
        if converged:
            break
        gain = _gain(slopes, noise, d.scale)
        aim = gain @ (d.fitted - there + slopes @ t)
        step = aim - t
        share = 1.0
        found = None
        while found is None and share > 1e-3:
            trial = nominal.copy()
            trial[moving] += (t + share * step) * u
            out = np.asarray(prediction.evaluate(trial), dtype=float)[list(d.rows)]
            found = out if np.all(np.isfinite(out)) else None
            share *= 0.5 if found is None else 1.0
        if found is None:
            break
        t, x, there = t + share * step, trial, found
        if prediction.differentiate is not None:
            new = np.asarray(prediction.differentiate(x), dtype=float)[np.ix_(list(d.rows), moving)] * u
            slopes = np.where(np.isfinite(new), new, slopes)
        converged = bool(np.max(np.abs(step)) < 1e-6)
    covariance = np.eye(len(moving))
    if d.names and moving:
        covariance = covariance - _gain(slopes, noise, d.scale) @ slopes
    after = u * np.sqrt(np.clip(np.diag(covariance), 0.0, None))
    values = {}
    for n, k in enumerate(moving):
        prior = prediction.inputs[k]
        taught = math.sqrt(max(0.0, prior.u**2 - after[n] ** 2))
        values[names[n]] = Reconciled(
            prior,
            replace(prior, value=float(x[k]), u=float(after[n]), distribution="normal", limits95=None),
            float((x[k] - prior.value) / taught) if taught > 1e-6 * prior.u else math.nan,
            float(1.0 - after[n] / prior.u),
        )
    return Reconciliation(names, values, covariance * np.outer(u, u), there, converged)


def _gain(slopes: Array, noise: Array, scale: Array) -> Array:
    """Sᵀ (S Sᵀ + N)⁻¹, solved with the parameters scaled to one size."""
    s = slopes / scale[:, None]
    total = s @ s.T + noise / np.outer(scale, scale)
    out: Array = np.linalg.lstsq(total, s, rcond=1e-14)[0].T / scale
    return out
