"""The time road's model of one segment: outputs, their exact derivatives, and the nuisance columns.

y = Σ b_k (s^k/A) u + free response + offset + drift. With X_k = (s^k/A) u and S_k = (s^k/A²) u,

    ∂y/∂b_k = X_k,    ∂y/∂a_m = -Σ_k b_k S_{k+m},    ∂y/∂(dead time) = -Σ_k b_k X_{k+1}

(the last without the jump at the record's begin).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.time_stamped import irregular_states, unlogged_states
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.hold import chains, companion, drives, flow, recursion
from rigtally.forms.named import Form

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Responses:
    """Powers of s over A and A² applied to the inputs of one segment.

    Attributes
    ----------
    over_a : (r, n + 1, N), s^k/A u
    over_a2 : (r, 2n + 1, N), s^k/A² u; (r, 0, N) where no derivative is asked for
    by_dead : (r, n + 1, N), derivatives of s^k/A u by the dead time; (r, 0, N) where there is none
    free : (n, N), free responses, each of unit norm
    free_slopes : (n, n, N), their derivatives by the coefficients a_m (second axis), outside their own span
    """

    over_a: Array
    over_a2: Array
    by_dead: Array
    free: Array
    free_slopes: Array


def denominator_of(form: Form, theta: Array) -> Array:
    """(n + 1,) monic ascending coefficients with the integrators."""
    _, shared, _ = form.split(theta)
    return np.concatenate([np.zeros(form.integrators), form.denominator(shared)[0]])


def natural_time(den: Array, integrators: int) -> float:
    """Seconds of one unit of scaled time: the poles (but integrators) then multiply to one."""
    own = abs(float(den[integrators]))
    order = den.size - 1 - integrators
    return own ** (-1.0 / order) if own > 0 and np.isfinite(own) else 1.0


def responses(form: Form, theta: Array, segment: Segment, trial: Trial, slopes: bool = True) -> Responses:
    """Run the chains over the segment's inputs, exactly between its samples.

    Computed in the denominator's own time, so that its coefficients are near one: with s = s'/T,
    s^k/A = T^(n-k) s'^k/A'.
    """
    den = denominator_of(form, theta)
    _, _, dead = form.split(theta)
    n = den.size - 1
    unit = natural_time(den, form.integrators)
    den = den * unit ** (n - np.arange(n + 1.0))
    a, b = chains(den) if slopes else (companion(den), np.eye(n)[-1])
    scaled = replace(
        segment,
        interval=segment.interval / unit,
        start=0.0,
        stamps=None if segment.stamps is None else (segment.stamps - segment.stamps[0]) / unit,
        at=(segment.at - float(segment.time[0])) / unit,
        size=segment.size / unit if segment.excitation == "pulse" else segment.size,
    )
    dead /= unit
    if segment.excitation != "logged":
        states, now = unlogged_states(a, b, scaled, dead)
    elif segment.stamps is not None:
        states, now = irregular_states(a, b, scaled, trial.between, dead)
    else:
        drive, now, phi = drives(a, b, segment.inputs, scaled.interval, trial.between, dead)
        states = np.array([recursion(phi, each, np.zeros(b.size)) for each in drive])
        if trial.output_first and trial.between == "held":
            now = np.concatenate([now[:, :1], now[:, :-1]], axis=1)
    r, count = states.shape[0], segment.count
    over_a = np.empty((r, n + 1, count))
    over_a[:, :n] = states[:, :n]
    over_a[:, n] = now - np.tensordot(den[:n], states[:, :n], axes=(0, 1))
    over_a2 = np.empty((r, 2 * n + 1 if slopes else 0, count))
    if slopes:
        over_a2[:, :n] = states[:, n:]
        for k in range(n + 1):
            over_a2[:, n + k] = over_a[:, k] - np.tensordot(den[:n], over_a2[:, k : k + n], axes=(0, 1))
    by_dead = np.zeros((r, 0, count))
    if slopes and form.dead_time:
        by_dead = _by_dead_time(a[:n, :n], over_a, scaled, trial.between, dead)
        by_dead *= unit ** (n - 1 - np.arange(n + 1.0))[:, None]
    over_a *= unit ** (n - np.arange(n + 1.0))[:, None]
    over_a2 *= unit ** (2 * n - np.arange(over_a2.shape[1], dtype=float))[:, None]
    free, free_slopes = _free(a, n, scaled, slopes)
    if slopes:
        free_slopes *= unit ** (n - np.arange(n, dtype=float))[:, None]
    return Responses(over_a, over_a2, by_dead, free, free_slopes)


def _by_dead_time(a: Array, over_a: Array, segment: Segment, between: str, dead: float) -> Array:
    """(r, n + 1, N) ∂(s^k/A u)/∂(dead time): -s^(k+1)/A u, without the jump from rest to the first input, since a
    logged input is taken as steady before the record."""
    n = a.shape[0]
    out = np.empty_like(over_a)
    out[:, :n] = -over_a[:, 1:]
    slope = np.zeros((over_a.shape[0], segment.count))
    if segment.excitation == "logged":
        time = segment.time
        jump = flow(a, np.eye(n)[:, -1:], time - time[0])[:, 0]
        out[:, :n] += segment.inputs[:, 0, None, None] * jump
        if between != "held":
            place = np.searchsorted(time + dead, time, side="right") - 1
            rates = np.diff(segment.inputs, axis=1) / np.diff(time)
            within = (place >= 0) & (place < rates.shape[1])
            slope[:, within] = rates[:, place[within]]
    out[:, n] = -slope + np.tensordot(a[-1], out[:, :n], axes=(0, 1))
    return out


def _free(a: Array, n: int, segment: Segment, slopes: bool) -> tuple[Array, Array]:
    """Free responses f from the segment's begin (a release: from its moment on) and their derivatives.

    A free response of A obeys ∂f/∂a_m = -(d/dt)^m f/A up to free responses: the second chain, driven by
    f from a zero state.
    """
    time = segment.time
    since = time - (segment.at if segment.excitation == "release" else time[0])
    there = since >= 0.0
    initial = np.eye(a.shape[0], n)
    free = np.zeros((n, time.size))
    moved = np.zeros((n, n if slopes else 0, time.size))
    if there.any():
        found = flow(a, initial, since[there])
        free[:, there] = found[0]
        if slopes:
            moved[:, :, there] = -found[n:].transpose(1, 0, 2)
    size = np.linalg.norm(free, axis=1)
    size = np.where(size > 0, size, 1.0)
    return free / size[:, None], moved / size[:, None, None]


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
        if form.dead_time:
            dy[last, i] += value * found.by_dead[j, power]
    return y, dy


def nuisance(trial: Trial, segment: Segment, free: Array) -> Array:
    """(c, N) columns that are solved in closed form: initial state, offset, drift."""
    columns = []
    if not trial.rest or segment.excitation == "release":
        columns.append(free)
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
