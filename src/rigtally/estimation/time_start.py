"""Where the time road begins: nobody is asked.

Candidate denominators, from linear least squares on filtered equations and from a coarse grid over the decades
that a record can show, each with its best numerator in closed form, judged on thinned copies of the record; the best
few go on to the iteration.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.time_problem import Problem
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.hold import companion, drives, flow, recursion
from rigtally.forms.named import Form

Array = NDArray[np.float64]
THIN = 700
DAMPING = (0.05, 0.5, 1.5)


def denominators(form: Form, low: float, high: float) -> Iterator[Array]:
    """Shared parameters of candidate denominators between two angular frequencies."""
    steps = max(round(3 * np.log10(high / low)), 4)
    for w in np.geomspace(low, high, steps):
        if form.family == "first-order":
            yield np.array([1.0 / w])
        elif form.family == "second-order":
            for damping in DAMPING:
                yield np.array([w, damping])
        elif form.family == "third-order":
            for damping in (0.1, 0.7):
                for lag in (0.3, 3.0):
                    yield np.array([lag / w, w, damping])
        else:
            for damping in (0.1, 0.7):
                for spread in (1.3, 3.0):
                    yield _spread_poles(form.order, w, damping, spread)[:-1]


def _spread_poles(order: int, w: float, damping: float, spread: float) -> Array:
    """Ascending monic coefficients with poles spread upwards from w."""
    den = np.array([1.0])
    place = w
    left = order
    while left > 0:
        factor = [1.0, place] if left == 1 else [1.0, 2 * damping * place, place * place]
        den = np.convolve(den, factor)
        left -= len(factor) - 1
        place *= spread
    return den[::-1]


def thinned(segment: Segment) -> Segment:
    """At most about THIN samples over the whole segment: block means, or every so many stamps."""
    stride = segment.count // THIN
    if stride < 2:
        return segment
    if segment.stamps is not None or segment.excitation != "logged":
        pick = slice(None, None, stride)
        return replace(
            segment,
            inputs=segment.inputs[:, pick],
            outputs=segment.outputs[:, pick],
            stamps=segment.time[pick],
        )
    whole = segment.count // stride * stride

    def mean(rows: Array) -> Array:
        return np.asarray(rows[:, :whole].reshape(rows.shape[0], -1, stride).mean(axis=2))

    return replace(
        segment,
        inputs=mean(segment.inputs),
        outputs=mean(segment.outputs),
        interval=segment.interval * stride,
        start=segment.start + 0.5 * (stride - 1) * segment.interval,
    )


def close_up(segment: Segment, length: int) -> Segment:
    """`length` samples from just before the input's largest move (or the stated event)."""
    if segment.count <= length:
        return segment
    if segment.excitation != "logged":
        centre = int(np.searchsorted(segment.time, segment.at))
    else:
        span = np.ptp(segment.inputs, axis=1, keepdims=True)
        moves = np.abs(np.diff(segment.inputs, axis=1)) / np.where(span > 0, span, 1.0)
        centre = int(np.argmax(moves.sum(axis=0)))
    begin = int(np.clip(centre - length // 5, 0, segment.count - length))
    part = slice(begin, begin + length)
    return replace(
        segment,
        inputs=segment.inputs[:, part],
        outputs=segment.outputs[:, part],
        stamps=None if segment.stamps is None else segment.stamps[part],
        start=float(segment.time[part][0]),
    )


def views(segment: Segment) -> list[Segment]:
    """The whole at coarse resolution, and close-ups of the largest move at finer ones."""
    out = [thinned(segment)]
    length = segment.count // 8
    while length > THIN:
        out.append(thinned(close_up(segment, length)))
        length //= 8
    if segment.count > THIN:
        out.append(close_up(segment, THIN))
    return out


def starts(trial: Trial, most: int = 3) -> list[tuple[Segment, list[Array]]]:
    """For each view of the longest segment, parameter vectors to begin from, best first; different ones."""
    segment = max(trial.segments, key=lambda s: s.count)
    out = []
    for view in views(segment):
        span = float(view.time[-1] - view.time[0])
        step = span / max(view.count - 1, 1)
        problem = Problem(replace(trial, segments=(view,)), (view,))
        low, high = 0.5 / span, 2.5 / step
        scored = []
        for dead in _dead_times(trial, span, step):
            if view.stamps is None:
                shared_ones = [
                    *linear_denominators(trial, view, low, high, dead),
                    *denominators(trial.form, low, high),
                ]
            else:
                shared_ones = list(denominators(trial.form, low, high))
            for shared in shared_ones:
                theta, cost = problem.best_numerator(shared, dead)
                if np.all(np.isfinite(theta)) and np.isfinite(cost):
                    scored.append((cost, theta))
        scored.sort(key=lambda pair: pair[0])
        out.append((view, [theta for _, theta in _different(scored, most)]))
    return out


def linear_denominators(trial: Trial, view: Segment, low: float, high: float, dead: float) -> list[Array]:
    """Denominators by linear least squares on filtered equations, the filter then replaced by what was found.

    With any stable F of A's degree, A y = B u reads Σ a_m (s^m/F) y = Σ b_k (s^k/F) u + free responses of F + a
    constant: linear in a and b. F = (s + λ)^n for a ladder of λ; then F = A, twice over (Steiglitz &
    McBride, IEEE Transactions on Automatic Control 10 (1965) 461, here in continuous time; from memory).
    Where the input is not logged, the stretch after the event is a free response and needs no input.
    """
    form = trial.form
    if view.excitation != "logged":
        after = view.time >= view.at + dead
        if after.sum() < 4 * form.degree + 4:
            return []
        outputs, inputs = view.outputs[:, after], np.zeros((0, int(after.sum())))
    else:
        outputs, inputs = view.outputs, view.inputs
    if not np.all(np.isfinite(outputs)):
        return []
    between = trial.between if trial.between != "band-limited" else "ramped"
    found = []
    for rate in np.geomspace(low, high, max(round(2 * np.log10(high / low)), 3)):
        unit = 1.0 / rate
        filter_ = np.asarray(np.poly(-np.ones(form.degree))[::-1], dtype=np.float64)
        for _ in range(3):
            coefficients = _one_pass(
                form, filter_, inputs, outputs, view.interval / unit, between, dead / unit
            )
            if coefficients is None:
                break
            own = coefficients[form.integrators :]
            scale = unit ** -(form.order - np.arange(form.order + 1.0))
            with np.errstate(all="ignore"):
                shared = form.shared_from(own * scale)
            if np.all(np.isfinite(shared)):
                found.append(shared)
            filter_ = _stable(coefficients)
    return found


def _one_pass(
    form: Form, filter_: Array, inputs: Array, outputs: Array, interval: float, between: str, dead: float
) -> Array | None:
    """Monic ascending A from the equations filtered by 1/F; None where they say nothing."""
    n = form.degree
    a, b = companion(filter_), np.eye(n)[-1]
    count = outputs.shape[1]

    def powers(rows: Array, hold: str, delay: float) -> Array:
        drive, now, phi = drives(a, b, rows, interval, hold, delay)
        states = np.array([recursion(phi, each, np.zeros(n)) for each in drive])
        top = now - np.tensordot(filter_[:n], states, axes=(0, 1))
        return np.concatenate([states, top[:, None]], axis=1)

    with np.errstate(all="ignore"):
        y = powers(outputs, "ramped", 0.0)
        u = powers(inputs, between, dead) if inputs.shape[0] else np.zeros((0, n + 1, count))
        free = flow(a, np.eye(n), interval * np.arange(count, dtype=np.float64))[0]
    own = np.concatenate([free, np.ones((1, count))])
    tables, rights = [], []
    for i in range(outputs.shape[0]):
        columns = (
            [own]
            if not inputs.shape[0]
            else [own, *(u[j, list(p)] for j, p in enumerate(form.powers[i]) if p)]
        )
        local = np.concatenate(columns)
        size = float(np.std(outputs[i])) or 1.0
        table = np.concatenate([-y[i, form.integrators : n], y[i, n][None]]) / size
        local = local / np.maximum(np.linalg.norm(local, axis=1), 1e-300)[:, None]
        if not (np.all(np.isfinite(table)) and np.all(np.isfinite(local))):
            return None
        q, _ = np.linalg.qr(local.T)
        table = table - (table @ q) @ q.T
        tables.append(table[:-1].T)
        rights.append(table[-1])
    found = np.linalg.lstsq(np.concatenate(tables), np.concatenate(rights), rcond=1e-12)[0]
    return np.concatenate([np.zeros(form.integrators), found, [1.0]])


def _stable(coefficients: Array) -> Array:
    """The same polynomial with its roots moved to the left half plane."""
    roots = np.roots(coefficients[::-1])
    size = np.maximum(np.abs(roots), 1e-6)
    roots = -np.maximum(np.abs(roots.real), 1e-3 * size) + 1j * roots.imag
    return np.real(np.poly(roots))[::-1]


def _dead_times(trial: Trial, span: float, step: float) -> tuple[float, ...]:
    if not trial.form.dead_time:
        return (0.0,)
    return (0.0, step, 4 * step, *(span * np.array([0.01, 0.03, 0.08, 0.2])))


def _different(scored: list[tuple[float, Array]], most: int) -> list[tuple[float, Array]]:
    """The best, leaving out those whose parameters lie close to a better one."""
    kept: list[tuple[float, Array]] = []
    for cost, theta in scored:
        near = any(np.allclose(theta, other, rtol=0.3, atol=1e-9) for _, other in kept)
        if not near:
            kept.append((cost, theta))
        if len(kept) == most:
            break
    return kept
