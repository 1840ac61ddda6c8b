"""Exact response of a transfer matrix to a sampled input."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from rigtally.errors import UsageError
from rigtally.forms.hold import companion, drives, flow, recursion
from rigtally.forms.transfer_matrix import TransferMatrix

Array = NDArray[np.float64]


def simulate(
    matrix: TransferMatrix,
    input: ArrayLike,
    interval: float,
    *,
    between: str = "held",
    steady_start: bool = False,
) -> Array:
    """Response of a transfer matrix to a sampled input, exact between the samples.

    Parameters
    ----------
    matrix : TransferMatrix
    input : (n,) for one input, or (inputs, n) array
    interval : float
        Seconds between samples.
    between : "held" or "ramped"
        The input is constant, or a straight line, between its samples.
    steady_start : bool
        Start in balance with the first input (needs a denominator without integrators); else from rest.

    Returns
    -------
    (n,) for one output, or (outputs, n) array

    Raises
    ------
    UsageError
        code "bad-input": shapes do not fit; "bad-option": another word for `between`.
    """
    if between not in ("held", "ramped"):
        raise UsageError(
            f"between = {between!r} cannot be simulated", do="use 'held' or 'ramped'", code="bad-option"
        )
    samples = np.atleast_2d(np.asarray(input, dtype=float))
    if samples.shape[0] != len(matrix.inputs):
        raise UsageError(
            f"the input has {samples.shape[0]} rows, the transfer matrix {len(matrix.inputs)} inputs",
            do="give (inputs, n)",
            code="bad-input",
        )
    den = matrix.denominator
    n = den.size - 1
    out = np.zeros((len(matrix.outputs), samples.shape[1]))
    a = companion(den)
    b = np.zeros(n)
    b[-1] = 1.0
    for j in range(samples.shape[0]):
        for dead in sorted(set(matrix.dead_time[:, j])):
            drive, now, phi = drives(a, b, samples[j : j + 1], interval, between, float(dead))
            initial = np.zeros(n)
            if steady_start:
                initial[0] = now[0, 0] / den[0]
            x = recursion(phi, drive[0], initial)
            top = now[0] - den[:-1] @ x
            for i in np.flatnonzero(matrix.dead_time[:, j] == dead):
                out[i] += matrix.numerators[i, j, :n] @ x + matrix.numerators[i, j, n] * top
    return out[0] if len(matrix.outputs) == 1 else out


def respond_at(matrix: TransferMatrix, times: ArrayLike, excitation: str = "step") -> Array:
    """Response from rest to a unit step or a unit pulse at time 0, in closed form at any times.

    Parameters
    ----------
    matrix : TransferMatrix
    times : (n,) array
        Seconds, rising or not; before the dead time the response is zero.
    excitation : "step" or "pulse"
        A pulse has the area 1; where an entry passes its input straight through, the pulse itself (infinite at
        one instant) is not in the response.

    Returns
    -------
    (n,) for one output and one input, else (outputs, inputs, n)

    Raises
    ------
    UsageError
        code "bad-option": another word for `excitation`.
    """
    if excitation not in ("step", "pulse"):
        raise UsageError(
            f"excitation = {excitation!r} is not known", do="use 'step' or 'pulse'", code="bad-option"
        )
    when = np.asarray(times, dtype=float)
    den = matrix.denominator
    n = den.size - 1
    block = np.zeros((n + 1, n + 1))
    block[:n, :n] = companion(den)
    block[n - 1, n] = 1.0
    begin = np.zeros((n + 1, 1))
    begin[n if excitation == "step" else n - 1] = 1.0
    out = np.zeros((len(matrix.outputs), len(matrix.inputs), when.size))
    for i, j in np.ndindex(out.shape[:2]):
        since = when - matrix.dead_time[i, j]
        acting = since >= 0
        if acting.any():
            x = flow(block, begin, since[acting])[:, 0]
            top = x[n] - den[:-1] @ x[:n]
            out[i, j, acting] = matrix.numerators[i, j, :n] @ x[:n] + matrix.numerators[i, j, n] * top
    return out[0, 0] if out.shape[:2] == (1, 1) else out
