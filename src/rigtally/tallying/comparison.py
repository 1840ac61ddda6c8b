"""Fit and prediction as frequency responses, and the prediction against the logged time response."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from rigtally.errors import RigtallyError
from rigtally.estimation.result import Fit
from rigtally.forms.response import gain_with_derivative
from rigtally.forms.simulate import simulate
from rigtally.physics.prediction_result import Prediction

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
POINTS = 240


@dataclass(frozen=True)
class ResponseComparison:
    """Frequency responses side by side.

    Attributes
    ----------
    frequency : (m,) rad/s
    fitted, predicted : (m, outputs, inputs) complex gain
    fitted_u, predicted_u : (m, outputs, inputs) standard uncertainty of |G| along the gain
    fitted_phase_u, predicted_phase_u : (m, outputs, inputs) rad, of the phase
    tallies : (m, outputs, inputs) bool
        The complex difference lies within its 95 % ellipse (χ² with the rank of its covariance).
    whole : (m,) bool
        All entries at once do.
    ranges : per (output, input) entry, the (from, to) in rad/s in which it tallies
    """

    frequency: Array
    fitted: ComplexArray
    predicted: ComplexArray
    fitted_u: Array
    predicted_u: Array
    fitted_phase_u: Array
    predicted_phase_u: Array
    tallies: NDArray[np.bool_]
    whole: NDArray[np.bool_]
    ranges: dict[tuple[str, str], tuple[tuple[float, float], ...]]
    outputs: tuple[str, ...]
    inputs: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """For JSON: the ranges in which each entry tallies (rad/s)."""
        return {
            "unit": "rad/s",
            "ranges": [
                {"output": o, "input": i, "from_to": [list(r) for r in found]}
                for (o, i), found in self.ranges.items()
            ],
        }


@dataclass(frozen=True)
class TimeComparison:
    """The prediction's own response to a logged input.

    time (n,), predicted (outputs, n), difference (outputs, n) = logged − predicted; `rms` of it per output.
    The prediction starts in balance, and takes the fit's offset and drift.
    """

    label: str
    time: Array
    predicted: Array
    difference: Array
    rms: tuple[float, ...]


def compare_responses(
    fit: Fit, prediction: Prediction, covariance_fit: Array, coverage: float = 0.95
) -> ResponseComparison | None:
    """Fitted and predicted gain with bands; None where they do not stand between the same channels.

    `covariance_fit` (p, p) is the fit's with its systematic parts. First order in the parameters.
    """
    ours, theirs = fit.form, prediction.form
    if not same_entries(fit, prediction):
        return None
    omega = frequencies(fit)
    theta = np.array([fit.parameters[name].value for name in fit.names])
    known = np.where(np.isfinite(covariance_fit), covariance_fit, 0.0)
    fitted, by_fit = gain_with_derivative(ours, theta, omega)
    theta_p = np.array([prediction.parameters[name].value for name in prediction.names])
    own = np.where(np.isfinite(prediction.covariance), prediction.covariance, 0.0)
    predicted, by_own = gain_with_derivative(theirs, theta_p, omega)
    c_fit, c_own = _real_covariance(by_fit, known), _real_covariance(by_own, own)
    gap = _stacked(fitted - predicted)
    q, r = len(ours.outputs), len(ours.inputs)
    tallies = np.ones((omega.size, q, r), dtype=bool)
    for e in range(q * r):
        pair = [e, e + q * r]
        block = np.ix_(range(omega.size), pair, pair)
        tallies[:, e // r, e % r] = _inside((c_fit + c_own)[block], gap[:, pair], coverage)
    whole = _inside(c_fit + c_own, gap, coverage)
    u_f, p_f = _gain_and_phase_u(fitted, c_fit)
    u_p, p_p = _gain_and_phase_u(predicted, c_own)
    ranges = {
        (o, i): _ranges(omega, tallies[:, a, b])
        for a, o in enumerate(ours.outputs)
        for b, i in enumerate(ours.inputs)
    }
    return ResponseComparison(
        omega, fitted, predicted, u_f, u_p, p_f, p_p, tallies, whole, ranges, ours.outputs, ours.inputs
    )


def same_entries(fit: Fit, prediction: Prediction) -> bool:
    """Whether both stand between the same places; one output over one input always does."""
    ours, theirs = fit.form, prediction.form
    if ours.single and theirs.single:
        return True
    return ours.outputs == theirs.outputs and ours.inputs == theirs.inputs


def frequencies(fit: Fit) -> Array:
    """(m,) rad/s: two decades about the poles, within what the log's sampling can show."""
    sizes = np.abs(fit.transfer_function.poles)
    sizes = sizes[sizes > 0]
    low = 0.01 * (sizes.min() if sizes.size else 1.0)
    high = 30.0 * (sizes.max() if sizes.size else 1.0)
    if fit.interval > 0:
        high = min(high, max(np.pi / fit.interval, 10.0 * low))
    near = [w * np.linspace(0.8, 1.25, 25) for w in sizes]
    every = np.concatenate([np.geomspace(low, high, POINTS), *near])
    return np.unique(every[(every >= low) & (every <= high)])


def _stacked(gain: ComplexArray) -> Array:
    flat = gain.reshape(gain.shape[0], -1)
    return np.concatenate([flat.real, flat.imag], axis=1)


def _real_covariance(slope: ComplexArray, covariance: Array) -> Array:
    """(m, 2e, 2e) covariance of real and imaginary parts of e entries."""
    m, _, _, p = slope.shape
    flat = slope.reshape(m, -1, p)
    both = np.concatenate([flat.real, flat.imag], axis=1)
    out: Array = both @ covariance @ np.swapaxes(both, 1, 2)
    return out


def _inside(covariance: Array, gap: Array, coverage: float) -> NDArray[np.bool_]:
    """Whether each gap lies within its coverage region, rank-deficient covariances included."""
    size = np.sqrt(np.clip(np.einsum("mii->mi", covariance), 0.0, None))
    unit = np.where(size > 0, size, 1.0)
    values, vectors = np.linalg.eigh(covariance / (unit[:, :, None] * unit[:, None, :]))
    turned = np.einsum("mij,mi->mj", vectors, gap / unit)
    keep = values > 1e-9
    rank = keep.sum(axis=1)
    chi2 = np.sum(np.where(keep, turned**2 / np.where(keep, values, 1.0), 0.0), axis=1)
    bound = np.array([stats.chi2.ppf(coverage, n) if n else 0.0 for n in range(gap.shape[1] + 1)])
    return np.asarray(chi2 <= bound[rank] + 1e-9, dtype=bool)


def _gain_and_phase_u(gain: ComplexArray, covariance: Array) -> tuple[Array, Array]:
    flat = gain.reshape(gain.shape[0], -1)
    e = flat.shape[1]
    size = np.abs(flat)
    with np.errstate(divide="ignore", invalid="ignore"):
        c, s = flat.real / size, flat.imag / size
        k = np.arange(e)
        rr, ii, ri = covariance[:, k, k], covariance[:, k + e, k + e], covariance[:, k, k + e]
        along = np.sqrt(np.clip(c * c * rr + 2 * c * s * ri + s * s * ii, 0.0, None))
        across = np.sqrt(np.clip(s * s * rr - 2 * c * s * ri + c * c * ii, 0.0, None)) / size
    return along.reshape(gain.shape), across.reshape(gain.shape)


def _ranges(omega: Array, inside: NDArray[np.bool_]) -> tuple[tuple[float, float], ...]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], inside.astype(int), [0]])))
    return tuple((float(omega[a]), float(omega[b - 1])) for a, b in zip(edges[::2], edges[1::2], strict=True))


def compare_time(fit: Fit, prediction: Prediction) -> tuple[TimeComparison, ...]:
    """The predicted response to each logged input, beside what was logged.

    The prediction differs from the fitted curve (which holds offset, drift and the start) by the
    response of the difference of the two models to the input's movement since the record's start.
    """
    if not same_entries(fit, prediction):
        return ()
    between = "held" if fit.between == "held" else "ramped"
    out = []
    for trace in fit.traces:
        time = np.asarray(trace.time, dtype=float)
        if time.size < 3 or trace.inputs.size == 0 or not np.all(np.isfinite(trace.inputs)):
            continue
        steps = np.diff(time)
        if np.ptp(steps) > 1e-3 * abs(steps.mean()):
            continue
        inputs = np.atleast_2d(trace.inputs)
        motion = inputs - inputs[:, :1]
        interval = float(steps.mean())
        try:
            ours = np.atleast_2d(simulate(fit.transfer_function, motion, interval, between=between))
            theirs = np.atleast_2d(simulate(prediction.transfer_function, motion, interval, between=between))
        except RigtallyError:
            continue
        predicted = np.atleast_2d(trace.fitted) - ours + theirs
        gap = np.atleast_2d(trace.outputs) - predicted
        rms = tuple(float(x) for x in np.sqrt(np.mean(gap**2, axis=1)))
        out.append(TimeComparison(trace.label, time, predicted, gap, rms))
    return tuple(out)
