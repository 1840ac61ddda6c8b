"""What a linear sensor does to a signal, from its parameters: closed forms, and exact numerical ones.

Closed forms of the second order (ωn, ζ, q = √(1 − ζ²)), from the trade's handbooks; each was verified by
a second route (root finding or simulation) in the tests:
overshoot exp(−πζ/q), peak at π/(ωn q), resonance 1/(2ζq) at ωn√(1 − 2ζ²), −3 dB at
ωn√(1 − 2ζ² + √(4ζ⁴ − 4ζ² + 2)), noise bandwidth ωn/(8ζ) Hz; first order ln 9·τ, noise bandwidth 1/(4τ) Hz.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def band_edge(wn: Array, zeta: Array, limit: float) -> tuple[Array, NDArray[np.bool_]]:
    """Highest ω up to which |G|/K of a second order stays within 1 ± limit, and whether it leaves upwards.

    With x = (ω/ωn)²: (1 − x)² + 4ζ²x = 1/g², so x = 1 − 2ζ² ∓ √((1 − 2ζ²)² − (1 − 1/g²)). The gain leaves
    through 1 + limit where its resonance 1/(2ζq) exceeds that, else through 1 − limit.
    """
    wn, zeta = np.broadcast_arrays(np.asarray(wn, dtype=float), np.asarray(zeta, dtype=float))
    m = 1.0 - 2.0 * zeta**2
    above = m**2 - (1.0 - (1.0 + limit) ** -2)
    upward = (m > 0) & (above >= 0)
    below = m**2 - (1.0 - (1.0 - limit) ** -2)
    high = m - np.sqrt(np.where(upward, above, 0.0))
    low = m + np.sqrt(np.maximum(below, 0.0))
    return wn * np.sqrt(np.maximum(np.where(upward, high, low), 0.0)), upward


def bandwidth_3db(wn: Array, zeta: Array) -> Array:
    """ω at which |G| has fallen to K/√2."""
    z2 = np.asarray(zeta, dtype=float) ** 2
    return np.asarray(wn * np.sqrt(1.0 - 2.0 * z2 + np.sqrt(4.0 * z2**2 - 4.0 * z2 + 2.0)))


def resonance(wn: Array, zeta: Array) -> tuple[Array, Array]:
    """(peak |G|/K, its ω); NaN where ζ ≥ 1/√2: there is no peak."""
    zeta = np.asarray(zeta, dtype=float)
    there = (zeta > 0) & (zeta < math.sqrt(0.5))
    z = np.where(there, zeta, 0.5)
    peak = 1.0 / (2.0 * z * np.sqrt(1.0 - z**2))
    where = wn * np.sqrt(1.0 - 2.0 * z**2)
    return np.where(there, peak, np.nan), np.where(there, where, np.nan)


def overshoot(zeta: Array) -> Array:
    """Step overshoot relative to the step; 0 for ζ ≥ 1."""
    zeta = np.asarray(zeta, dtype=float)
    z = np.clip(zeta, None, 1.0 - 1e-15)
    return np.where(zeta < 1.0, np.exp(-math.pi * z / np.sqrt(1.0 - z**2)), 0.0)


def peak_time(wn: float, zeta: float, zero_time: float = 0.0) -> float:
    """Time of the first peak of the step response, with a numerator 1 + Ts: (π − atan2(Tωd, 1 − Tζωn))/ωd."""
    if zeta >= 1.0:
        return math.nan
    wd = wn * math.sqrt(1.0 - zeta * zeta)
    return (math.pi - math.atan2(zero_time * wd, 1.0 - zero_time * zeta * wn)) / wd


def overshoot_with_zero(wn: float, zeta: float, zero_time: float) -> float:
    """Overshoot with a numerator 1 + Ts: exp(−ζωn t_p)·√(1 − 2ζωnT + (ωnT)²)."""
    time = peak_time(wn, zeta, zero_time)
    size = math.sqrt(1.0 - 2.0 * zeta * wn * zero_time + (wn * zero_time) ** 2)
    return math.exp(-zeta * wn * time) * size


def noise_bandwidth(wn: Array, zeta: Array) -> Array:
    """Equivalent noise bandwidth of a second order in Hz (one-sided): ωn/(8ζ)."""
    return np.asarray(wn / (8.0 * np.asarray(zeta)))


def step_response(wn: Array, zeta: Array, time: Array) -> Array:
    """(…, n) unit step response of a second order at times (…, n), for any ζ > 0.

    1 − e^(−ζωn t)·(cos ωd t + ζωn·sin(ωd t)/ωd), with ωd imaginary for ζ > 1 (hyperbolic, written with
    decaying exponentials), and t in place of sin(ωd t)/ωd at ζ = 1.
    """
    w, z = np.asarray(wn, dtype=float)[..., None], np.asarray(zeta, dtype=float)[..., None]
    wd = w * np.sqrt((1.0 - z**2).astype(complex))
    slow, fast = -z * w + 1j * wd, -z * w - 1j * wd
    a, b = np.exp(slow * time), np.exp(fast * time)
    near = np.abs(wd * time) < 1e-6
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(near, time * np.exp(-z * w * time), ((a - b) / (2j * wd)).real)
    out: Array = 1.0 - (0.5 * (a + b)).real - z * w * ratio
    return out


def settling(wn: Array, zeta: Array, band: float, points: int = 1500) -> Array:
    """Last time at which the step response lies outside 1 ± band; exact to the linear interpolation of a
    dense grid. It jumps with ζ where a swing just leaves the band: it has no derivative there."""
    wn, zeta = np.atleast_1d(np.asarray(wn, dtype=float)), np.atleast_1d(np.asarray(zeta, dtype=float))
    slowest = np.where(zeta < 1.0, zeta, zeta - np.sqrt(np.maximum(zeta**2 - 1.0, 0.0))) * wn
    longest = (math.log(1.0 / band) + 2.5 + 0.5 * np.log1p(1.0 / np.abs(1.0 - zeta**2 + 1e-9))) / slowest
    steps = np.linspace(0.0, 1.0, points)
    out = np.empty(wn.size)
    for k in range(wn.size):  # a light damping needs more points a record than a heavy one
        n = max(points, int(20 * wn[k] * longest[k]))
        grid = (steps if n == points else np.linspace(0.0, 1.0, min(n, 200_000))) * longest[k]
        y = np.abs(step_response(wn[k], zeta[k], grid) - 1.0) - band
        last = int(np.flatnonzero(y > 0)[-1])
        last = min(last, grid.size - 2)
        share = y[last] / (y[last] - y[last + 1])
        out[k] = grid[last] + share * (grid[last + 1] - grid[last])
    return out


def rise_time(wn: Array, zeta: Array, points: int = 2000) -> Array:
    """10 % to 90 % of the step response, first crossings."""
    wn, zeta = np.atleast_1d(np.asarray(wn, dtype=float)), np.atleast_1d(np.asarray(zeta, dtype=float))
    longest = (4.0 + 6.0 * zeta) / wn
    out = np.empty(wn.size)
    for k in range(wn.size):
        grid = np.linspace(0.0, longest[k], points)
        y = step_response(wn[k], zeta[k], grid)
        out[k] = _crossing(grid, y, 0.9) - _crossing(grid, y, 0.1)
    return out


def _crossing(time: Array, y: Array, level: float) -> float:
    k = int(np.argmax(y >= level))
    return float(time[k - 1] + (level - y[k - 1]) / (y[k] - y[k - 1]) * (time[k] - time[k - 1]))
