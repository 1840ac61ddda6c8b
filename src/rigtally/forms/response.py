"""The complex gain of a form with its exact derivative by the parameters."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rigtally.forms.named import Form

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def gain_with_derivative(form: Form, theta: Array, omega: Array) -> tuple[ComplexArray, ComplexArray]:
    """Complex gain and its derivative at angular frequencies.

    With G = B/A·e^(−sT): ∂G = (∂B − (B/A)·∂A)/A·e^(−sT), and ∂G/∂T = −s·G.

    Parameters
    ----------
    theta : (p,) parameters in the order of form.names
    omega : (m,) rad/s

    Returns
    -------
    (m, outputs, inputs) gain, (m, outputs, inputs, p) derivative
    """
    theta = np.asarray(theta, dtype=float)
    s = 1j * np.asarray(omega, dtype=float)
    k = form.numerator_count
    _, shared, dead = form.split(theta)
    den, by_shared = form.denominator(shared)
    powers = s[:, None] ** np.arange(form.degree + 1)
    free = powers[:, form.integrators :]  # s^i·(1, s, …): the integrators stand before the rest
    a = free @ den
    da = np.zeros((s.size, theta.size), dtype=complex)
    da[:, k : k + shared.size] = free @ by_shared.T
    b, by = form.numerator_coefficients(theta)
    shape = (s.size, len(form.outputs), len(form.inputs))
    numerator = np.zeros(shape, dtype=complex)
    d_numerator = np.zeros((*shape, theta.size), dtype=complex)
    for c, (i, j, power) in enumerate(form.numerator_slots):
        numerator[:, i, j] += b[c] * powers[:, power]
        d_numerator[:, i, j] += powers[:, power, None] * by[:, c]
    delay = np.exp(-dead * s) / a
    gain = numerator * delay[:, None, None]
    slope = d_numerator * delay[:, None, None, None] - gain[..., None] * (da / a[:, None])[:, None, None]
    if form.dead_time:
        slope[..., -1] = -s[:, None, None] * gain
    return gain, slope
