"""What a good practitioner writes with scipy alone: the speed benchmark runs it beside ours.

Both fit K ωn²/(s² + 2ζωn s + ωn²) to a sampled input and output, with a constant offset, from a given good
start, and return parameters with a white-noise covariance. They have no drift and no free initial state.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, signal

Array = NDArray[np.float64]


def plain(u: Array, y: Array, interval: float, start: tuple[float, float, float]) -> tuple[Array, Array]:
    """scipy.signal.lsim inside scipy.optimize.curve_fit."""
    t = interval * np.arange(u.size)

    def model(_: Array, gain: float, wn: float, zeta: float, offset: float) -> Array:
        system = signal.lti([gain * wn**2], [1.0, 2.0 * zeta * wn, wn**2])
        return signal.lsim(system, u, t, interp=False)[1] + offset

    values, covariance = optimize.curve_fit(model, t, y, p0=[*start, 0.0])
    return values, covariance


def competent(u: Array, y: Array, interval: float, start: tuple[float, float, float]) -> tuple[Array, Array]:
    """The exact discrete filter (lfilter) inside least_squares, with difference derivatives."""
    scale = np.array([*start, 1.0])

    def residual(p: Array) -> Array:
        gain, wn, zeta, offset = p * scale
        b, a, _ = signal.cont2discrete(([gain * wn**2], [1.0, 2.0 * zeta * wn, wn**2]), interval, "zoh")
        # cont2discrete's first coefficient is the sample's own: a held input acts one sample later
        return signal.lfilter(b[0], a, u) + offset - y

    found = optimize.least_squares(residual, np.array([1.0, 1.0, 1.0, 0.0]), method="lm", x_scale=1.0)
    q, r = np.linalg.qr(found.jac)
    del q
    inverse = np.linalg.inv(r)
    variance = 2.0 * found.cost / (u.size - 4)
    return found.x * scale, variance * (inverse @ inverse.T) * np.outer(scale, scale)
