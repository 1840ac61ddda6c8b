"""States of the chains where the grid does not help: true stamps, and tests whose input is not logged."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.trial import Segment
from rigtally.forms.hold import exponentials, flow

Array = NDArray[np.float64]


def irregular_states(
    a: Array, b: Array, segment: Segment, between: str, dead_time: float
) -> tuple[Array, Array]:
    """The chains from stamp to stamp, for an input that is held or ramped between its true stamps.

    Returns
    -------
    states (r, m, N), input at each stamp (r, N)
    """
    time, u = segment.time, segment.inputs
    r, count = u.shape
    m = b.size
    # knots of the delayed input and the stamps themselves; the state is followed from one to the next
    knots = time + dead_time
    union = np.unique(np.concatenate([time, knots[(knots > time[0]) & (knots < time[-1])]]))
    durations = np.diff(union)
    # the state is joined by the input and its slope, both of which the interval's exponential carries along
    block = np.zeros((m + 2, m + 2))
    block[:m, :m], block[:m, m], block[m, m + 1] = a, b, 1.0
    if between == "held":
        values = u[:, np.clip(np.searchsorted(knots, union, side="right") - 1, 0, count - 1)]
        rates = np.zeros((r, durations.size))
    else:
        values = np.array([np.interp(union, knots, row) for row in u])
        rates = np.diff(values, axis=1) / durations
    rounded = np.asarray(np.round(durations, 15), dtype=np.float64)
    distinct, which = np.unique(rounded, return_inverse=True)
    phi = (
        exponentials(block, distinct)[which]
        if distinct.size < durations.size
        else exponentials(block, durations)
    )
    moves = phi[:, :m, m] * values[:, :-1, None] + phi[:, :m, m + 1] * rates[:, :, None]
    states = np.empty((r, m, union.size))
    state = np.zeros((m, r))
    for k in range(durations.size):
        states[:, :, k] = state.T
        state = phi[k, :m, :m] @ state + moves[:, k].T
    states[:, :, -1] = state.T
    at = np.searchsorted(union, time)
    return states[:, :, at], values[:, at]


def unlogged_states(a: Array, b: Array, segment: Segment, dead_time: float) -> tuple[Array, Array]:
    """The chains for a stated step, pulse or release, in closed form at the stamps.

    A step of height `size` (from 0) and a pulse of area `size` act at `at` + dead time. A release has
    no input.

    Returns
    -------
    states (1, m, N), input at each stamp (1, N)
    """
    since = segment.time - (segment.at + dead_time)
    m = b.size
    states = np.zeros((1, m, since.size))
    now = np.zeros((1, since.size))
    acting = since >= 0
    if segment.excitation == "release" or not acting.any():
        return states, now
    block = np.zeros((m + 1, m + 1))
    block[:m, :m], block[:m, m] = a, b
    begin = np.zeros((m + 1, 1))
    if segment.excitation == "step":
        begin[m] = segment.size
        now[0, acting] = segment.size
    else:
        begin[:m, 0] = b * segment.size
    states[0][:, acting] = flow(block, begin, since[acting])[:m, 0]
    return states, now
