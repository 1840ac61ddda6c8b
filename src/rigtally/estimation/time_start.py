"""Where the time road begins: nobody is asked.

Candidate denominators over the decades that a record can show, each with its best numerator in closed form,
judged on thinned copies of the record; the best few go on to the iteration.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.time_problem import Problem
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import Form

Array = NDArray[np.float64]
THIN = 700
DAMPING = (0.02, 0.15, 0.5, 1.0, 2.0)


def denominators(form: Form, low: float, high: float) -> Iterator[Array]:
    """Shared parameters of candidate denominators between two angular frequencies."""
    steps = max(round(8 * np.log10(high / low)), 4)
    for w in np.geomspace(low, high, steps):
        if form.family == "first-order":
            yield np.array([1.0 / w])
        elif form.family == "second-order":
            for damping in DAMPING:
                yield np.array([w, damping])
        elif form.family == "third-order":
            for damping in (0.1, 0.6, 1.2):
                for lag in (0.1, 0.5, 2.0, 10.0):
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


def starts(trial: Trial, most: int = 4) -> list[Array]:
    """Parameter vectors to begin from, best first; different ones."""
    segment = max(trial.segments, key=lambda s: s.count)
    found: list[tuple[float, Array]] = []
    for view in views(segment):
        span = float(view.time[-1] - view.time[0])
        step = span / max(view.count - 1, 1)
        problem = Problem(replace(trial, segments=(view,)), (view,))
        total = problem.samples
        scored = []
        for shared in denominators(trial.form, 0.5 / span, 2.5 / step):
            for dead in _dead_times(trial, span, step, shared):
                theta, cost = problem.best_numerator(shared, dead)
                if np.all(np.isfinite(theta)) and np.isfinite(cost):
                    scored.append((cost / total, theta))
        scored.sort(key=lambda pair: pair[0])
        found.extend(_different(scored, most))
    found.sort(key=lambda pair: pair[0])
    return [theta for _, theta in _different(found, 2 * most)]


def _dead_times(trial: Trial, span: float, step: float, shared: Array) -> tuple[float, ...]:
    if not trial.form.dead_time:
        return (0.0,)
    del shared
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
