"""The Cramér–Rao bound from a brute-force model, for the tests: nothing of the estimator is used.

The model is the plain textbook one (matrix exponential, sample by sample); derivatives by central differences of
that model; the bound by QR of the whitened Jacobian with the same free offset, drift, initial state and dead time.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.linalg import expm, solve_triangular
from scipy.signal import lfilter

Array = np.ndarray


def second_order(theta: Array, u: Array, interval: float, state: Array) -> Array:
    """K ωn²/(s² + 2ζωn s + ωn²) on a held input from `state` = (output, its rate), sample by sample."""
    gain, w, damping = theta
    block = np.zeros((3, 3))
    block[0, 1] = 1.0
    block[1] = [-w * w, -2 * damping * w, gain * w * w]
    step = expm(block * interval)
    phi, gamma = step[:2, :2], step[:2, 2]
    y = np.empty(u.size)
    x = np.array(state, dtype=float)
    for k in range(u.size):
        y[k] = x[0]
        x = phi @ x + gamma * u[k]
    return y


def bound(
    model: Callable[[Array], Array],
    values: Array,
    sigma: float,
    keep: int,
    steps: Array | None = None,
    rho: float = 0.0,
) -> Array:
    """Standard deviations of the first `keep` of all parameters of `model` at `values`.

    Noise is white (sigma), or the stationary first-order autoregression with that standard deviation.
    """
    columns = []
    for k, value in enumerate(values):
        size = 1e-5 * max(abs(value), 1e-2) if steps is None else steps[k]
        up, down = values.copy(), values.copy()
        up[k] += size
        down[k] -= size
        columns.append((model(up) - model(down)) / (2 * size))
    table = np.array(columns) / sigma
    if rho:
        white = lfilter([1.0, -rho], [1.0], table, axis=1) / np.sqrt(1 - rho**2)
        white[:, 0] = table[:, 0]
        table = white
    scale = np.linalg.norm(table, axis=1)
    upper = np.linalg.qr((table / scale[:, None]).T, mode="r")
    inverse = solve_triangular(upper, np.eye(values.size))
    return (np.linalg.norm(inverse, axis=1) / scale)[:keep]


def second_order_bound(
    theta: Array, u: Array, interval: float, sigma: float, *, drift: bool = False, rho: float = 0.0
) -> Array:
    """Bound of K, ωn, ζ with a free offset and initial state (and drift)."""
    ramp = np.linspace(-1.0, 1.0, u.size)

    def model(values: Array) -> Array:
        y = second_order(values[:3], u, interval, values[3:5]) + values[5]
        return y + values[6] * ramp if drift else y

    return bound(model, np.concatenate([theta, np.zeros(4 if drift else 3)]), sigma, 3, rho=rho)
