"""States of the two chains where the grid does not help: true stamps, and tests whose input is not logged."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.trial import Segment
from rigtally.forms.hold import held, ramped

Array = NDArray[np.float64]


def _remembering(function: Callable[[float], tuple[Array, ...]]) -> Callable[[float], tuple[Array, ...]]:
    """The same function, evaluated once for each distinct interval."""
    known: dict[float, tuple[Array, ...]] = {}

    def remembered(duration: float) -> tuple[Array, ...]:
        key = float(f"{duration:.12e}")
        if key not in known:
            known[key] = function(key)
        return known[key]

    return remembered


def irregular_states(
    a: Array, b: Array, segment: Segment, between: str, dead_time: float
) -> tuple[Array, Array, Array]:
    """Both chains from stamp to stamp, for an input that is held or ramped between its true stamps.

    Returns
    -------
    states (r, 2n, N), input at each stamp (r, N), free responses (n, N)
    """
    time, u = segment.time, segment.inputs
    r, count = u.shape
    n = b.size // 2
    # knots of the delayed input and the stamps themselves; the state is followed from one to the next
    knots = time + dead_time
    union = np.unique(np.concatenate([time, knots[(knots > time[0]) & (knots < time[-1])]]))
    if between == "held":
        index = np.searchsorted(knots, union, side="right") - 1
        values = u[:, np.clip(index, 0, count - 1)]
        ends = values
    else:
        values = np.array([np.interp(union, knots, row) for row in u])
        ends = np.concatenate([values[:, 1:], values[:, -1:]], axis=1)
    by_hold = _remembering(lambda d: held(a, b, d))
    by_ramp = _remembering(lambda d: ramped(a, b, d))
    state = np.zeros((2 * n, r))
    free = np.eye(n)
    states = np.empty((r, 2 * n, union.size))
    frees = np.empty((n, union.size))
    for k in range(union.size):
        states[:, :, k] = state.T
        frees[:, k] = free[0]
        if k + 1 == union.size:
            break
        duration = float(union[k + 1] - union[k])
        if between == "held":
            phi, gamma = by_hold(duration)
            state = phi @ state + np.outer(gamma, values[:, k])
        else:
            phi, g0, g1 = by_ramp(duration)
            state = phi @ state + np.outer(g0, values[:, k]) + np.outer(g1, ends[:, k])
        free = phi[:n, :n] @ free
    at = np.searchsorted(union, time)
    return states[:, :, at], values[:, at], frees[:, at]


def unlogged_states(a: Array, b: Array, segment: Segment, dead_time: float) -> tuple[Array, Array, Array]:
    """Both chains for a stated step, pulse or release, in closed form at the stamps.

    A step of height `size` (from 0) and a pulse of area `size` act at `at` + dead time. A release has
    no input: its free response begins at `at`, and what was logged before belongs to no model (the caller
    leaves it out). The other tests' free response begins with the record.
    """
    time = segment.time
    n = b.size // 2
    since = time - (segment.at + dead_time)
    state = np.zeros(2 * n)
    states = np.zeros((1, 2 * n, time.size))
    now = np.zeros((1, time.size))
    advance = _remembering(lambda d: held(a, b, d))
    value = 0.0
    if segment.excitation == "pulse":
        state = b * segment.size
    elif segment.excitation == "step":
        value = segment.size
    elapsed = 0.0
    for k in np.flatnonzero(since >= 0) if segment.excitation != "release" else ():
        phi, gamma = advance(float(since[k] - elapsed))
        state = phi @ state + gamma * value
        elapsed = float(since[k])
        states[0, :, k] = state
        now[0, k] = value
    frees = np.zeros((n, time.size))
    free = np.eye(n)
    begin = segment.at if segment.excitation == "release" else float(time[0])
    for k in range(time.size):
        if time[k] < begin:
            continue
        phi, _ = advance(float(time[k] - begin))
        free = phi[:n, :n] @ free
        begin = float(time[k])
        frees[:, k] = free[0]
    return states, now, frees
