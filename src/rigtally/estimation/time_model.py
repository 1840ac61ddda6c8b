"""The time road's model of one segment: outputs, their exact derivatives, and the nuisance columns.

y = Σ b_k (s^k/A) u + free response + offset + drift. With X_k = (s^k/A) u and S_k = (s^k/A²) u,

    ∂y/∂b_k = X_k,    ∂y/∂a_m = -Σ_k b_k S_{k+m},    ∂y/∂(dead time) = -Σ_k b_k X_{k+1}.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.time_stamped import irregular_states, unlogged_states
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.hold import chains, drives, free_responses, recursion
from rigtally.forms.named import Form

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Responses:
    """Powers of s over A and A² applied to the inputs of one segment.

    Attributes
    ----------
    over_a : (r, n + 1, N), s^k/A u
    over_a2 : (r, 2n + 1, N), s^k/A² u
    free : (n, N), free responses of unit starts
    """

    over_a: Array
    over_a2: Array
    free: Array


def denominator_of(form: Form, theta: Array) -> Array:
    """(n + 1,) monic ascending coefficients with the integrators."""
    _, shared, _ = form.split(theta)
    return np.concatenate([np.zeros(form.integrators), form.denominator(shared)[0]])


def responses(form: Form, theta: Array, segment: Segment, trial: Trial) -> Responses:
    """Run the two chains over the segment's inputs, exactly between its samples."""
    den = denominator_of(form, theta)
    _, _, dead = form.split(theta)
    n = den.size - 1
    a, b = chains(den)
    if segment.excitation != "logged":
        states, now, free = unlogged_states(a, b, segment, dead)
    elif segment.stamps is not None:
        states, now, free = irregular_states(a, b, segment, trial.between, dead)
    else:
        drive, now, phi = drives(a, b, segment.inputs, segment.interval, trial.between, dead)
        states = np.array([recursion(phi, each, np.zeros(2 * n)) for each in drive])
        free = free_responses(phi[:n, :n], segment.count)
        if trial.output_first and trial.between == "held":
            now = np.concatenate([now[:, :1], now[:, :-1]], axis=1)
    r, count = states.shape[0], segment.count
    over_a = np.empty((r, n + 1, count))
    over_a2 = np.empty((r, 2 * n + 1, count))
    over_a[:, :n] = states[:, :n]
    over_a[:, n] = now - np.tensordot(den[:n], states[:, :n], axes=(0, 1))
    over_a2[:, :n] = states[:, n:]
    for k in range(n + 1):
        over_a2[:, n + k] = over_a[:, k] - np.tensordot(den[:n], over_a2[:, k : k + n], axes=(0, 1))
    return Responses(over_a, over_a2, free)


def outputs_and_derivatives(form: Form, theta: Array, found: Responses, count: int) -> tuple[Array, Array]:
    """(q, N) outputs from a zero state and (p, q, N) exact derivatives by the parameters."""
    b, by = form.numerator_coefficients(theta)
    _, shared, _ = form.split(theta)
    _, dden = form.denominator(shared)
    n = form.degree
    q, p = len(form.outputs), theta.size
    first = form.numerator_count
    last = first + shared.size
    y = np.zeros((q, count))
    dy = np.zeros((p, q, count))
    da = np.zeros((shared.size, n))
    da[:, form.integrators :] = dden[:, :-1]
    for value, grad, (i, j, power) in zip(b, by.T, form.numerator_slots, strict=True):
        y[i] += value * found.over_a[j, power]
        dy[:, i] += np.outer(grad, found.over_a[j, power])
        dy[first:last, i] -= value * (da @ found.over_a2[j, power : power + n])
        if form.dead_time and power < n:
            dy[last, i] -= value * found.over_a[j, power + 1]
    return y, dy


def nuisance(trial: Trial, segment: Segment, free: Array) -> Array:
    """(c, N) columns that are solved in closed form: initial state, offset, drift."""
    columns = []
    if not trial.rest or segment.excitation == "release":
        size = np.linalg.norm(free, axis=1, keepdims=True)
        columns.append(free / np.where(size > 0, size, 1.0))
    if trial.offset == "free":
        columns.append(np.ones((1, segment.count)))
    if trial.drift:
        time = segment.time
        middle, half = 0.5 * (time[0] + time[-1]), max(0.5 * (time[-1] - time[0]), 1e-300)
        columns.append(((time - middle) / half)[None])
    return np.concatenate(columns) if columns else np.zeros((0, segment.count))


def stated_offset(trial: Trial) -> float:
    """The output's constant where it is not fitted."""
    return 0.0 if isinstance(trial.offset, str) else float(trial.offset)
