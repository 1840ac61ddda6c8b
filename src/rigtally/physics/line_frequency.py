"""The frequency at which a rig's oscillating lines are taken: its own, by iteration.

An oscillating line's resistance and inertance depend on the frequency; the rig's
frequency depends on them. The fixed point ω = |p(ω)| is sought, p being the pole of the
least damped pair, or the slowest pole where all are real.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.physics.parameters import polished_roots

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

STEPS = 40
TOLERANCE = 1e-13


def leading_pole(poles: ComplexArray) -> int | None:
    """Index of the pole that sets the frequency of the lines: of the least damped pair, else the slowest.

    Poles at s = 0 do not count. None where there is no other pole.
    """
    moving = [k for k, p in enumerate(poles) if p != 0]
    if not moving:
        return None
    pairs = [k for k in moving if abs(poles[k].imag) > 1e-9 * abs(poles[k])]
    if pairs:
        return min(pairs, key=lambda k: (-poles[k].real / abs(poles[k]), abs(poles[k]), -poles[k].imag))
    return min(moving, key=lambda k: abs(poles[k]))


def leading_frequency(denominator: Array) -> Array:
    """|p| of the leading pole of monic ascending polynomials (…, n + 1); NaN where there is none."""
    degree = denominator.shape[-1] - 1
    if degree == 2 and np.all(denominator[..., 0] != 0.0):
        a0, a1 = denominator[..., 0], denominator[..., 1]
        disc = a1 * a1 - 4.0 * a0
        with np.errstate(invalid="ignore"):
            fast = np.abs(a1) + np.sqrt(np.maximum(disc, 0.0))
            found: Array = np.where(disc < 0.0, np.sqrt(np.abs(a0)), 2.0 * np.abs(a0) / fast)
        return found
    flat = denominator.reshape(-1, degree + 1)
    out = np.full(flat.shape[0], np.nan)
    for k, row in enumerate(flat):
        if np.all(np.isfinite(row)):
            poles = polished_roots(row)
            lead = leading_pole(poles)
            if lead is not None:
                out[k] = abs(poles[lead])
    return out.reshape(denominator.shape[:-1])


def solve_frequency(frequency: Callable[[Array], Array], start: Array, where: str = "") -> Array:
    """The fixed points ω = frequency(ω), each by a secant on logarithms, or within a bracket.

    Parameters
    ----------
    frequency : callable
        (m,) angular frequencies -> (m,) angular frequencies.
    start : (m,) array

    Raises
    ------
    RigError
        code "no-line-frequency" where none is found and m is 1; else NaN there.
    """

    def off(x: Array) -> Array:
        with np.errstate(all="ignore"):
            return np.log(frequency(np.exp(x))) - x

    x = np.log(start)
    error = off(x)
    before, error_before = x, error
    for step in range(STEPS):
        if np.all((np.abs(error) < TOLERANCE) | ~np.isfinite(error)):
            break
        with np.errstate(all="ignore"):
            secant = -error * (x - before) / (error - error_before)
        good = np.isfinite(secant) & (np.abs(secant) < 4.0 * np.abs(error)) & (step > 0)
        move = np.where(good, secant, error)
        move = np.where(np.abs(error) < TOLERANCE, 0.0, np.clip(move, -2.0, 2.0))
        before, error_before = x, error
        x = x + move
        error = off(x)
    settled = np.abs(error) < 1e-11
    for k in np.flatnonzero(~settled & np.isfinite(np.log(start))):
        x[k] = _bracketed(_one(off, x, int(k)), float(np.log(start[k])))
    if x.size == 1 and not np.isfinite(x[0]):
        raise RigError(
            "no frequency was found at which the oscillating lines agree with the rig's own",
            where=where,
            do='choose friction = "steady" or "plug" for the lines',
            code="no-line-frequency",
        )
    out: Array = np.exp(x)
    return out


def _one(off: Callable[[Array], Array], x: Array, k: int) -> Callable[[float], float]:
    """off as a function of the k-th value alone."""

    def alone(value: float) -> float:
        probe = x.copy()
        probe[k] = value
        return float(off(probe)[k])

    return alone


def _bracketed(off: Callable[[float], float], start: float) -> float:
    """A zero of off near start, by widening a bracket and bisection; NaN where it jumps across zero."""
    from scipy import optimize

    here = off(start)
    for half in (0.01, 0.1, 0.5, 2.0, 8.0):
        for low, high in ((start - half, start), (start, start + half)):
            a, b = (off(low), here) if high == start else (here, off(high))
            if math.isfinite(a) and math.isfinite(b) and a * b <= 0.0:
                root = float(optimize.brentq(off, low, high, xtol=1e-14, rtol=1e-14))
                return root if abs(off(root)) < 1e-8 else math.nan
    return math.nan
