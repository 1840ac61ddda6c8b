"""Oscillating laminar flow in a round bore: resistance and inertance at a frequency.

The momentum balance of a laminar column in a rigid round pipe of radius a,
ρ ∂w/∂t = −∂p/∂x + μ ∇²w, has for e^{jωt} the exact solution (J. R. Womersley,
J. Physiol. 127 (1955) 553; from memory, verified against the limits below)

    Z(ω) = R + jωI = jω (ρ l/A) / (1 − F(z)),    F(z) = 2 J1(z)/(z J0(z)),    z² = −jωρ a²/μ

with the Womersley number α = a √(ωρ/μ), |z| = α. Limits: R → 128 μ l/(π d⁴) and
I → (4/3) ρ l/A as α → 0; I → ρ l/A as α → ∞.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.physics import geometry
from rigtally.quantities.dual import Dual, value_of

SERIES_BELOW = 0.5  # Womersley number below which the power series is used


def womersley_number(bore: Any, density: Any, viscosity: Any, omega: Any) -> Any:
    """(d/2) √(ωρ/μ), dimensionless."""
    return 0.5 * bore * (omega * density / viscosity) ** 0.5


def factors(beta: Any) -> tuple[Any, Any, Any, Any]:
    """Resistance and inertance as multiples of Poiseuille's and of the plug's.

    Parameters
    ----------
    beta : float or array
        Womersley number squared, ω ρ a²/μ, at least 0.

    Returns
    -------
    r, i, dr, di
        R/R_poiseuille, I/I_plug and their derivatives by beta.
    """
    if np.ndim(beta) == 0:
        return _factors_at(float(beta))
    b = np.asarray(beta, dtype=float)
    small = b < SERIES_BELOW**2
    near = _series(np.where(small, b, 0.0))
    if np.all(small):
        return near
    far = _bessel(np.where(small, 1.0, b))
    r, i, dr, di = (np.where(small, a, c) for a, c in zip(near, far, strict=True))
    return r, i, dr, di


@lru_cache(maxsize=256)
def _factors_at(beta: float) -> tuple[Any, Any, Any, Any]:
    """The factors at one beta (a line's resistance and inertance ask for the same)."""
    return _series(beta) if beta < SERIES_BELOW**2 else _bessel(beta)


def _bessel(b: Any) -> tuple[Any, Any, Any, Any]:
    """The factors from g = 1/(1 − F), Z = jω I_plug g; in units of R_poiseuille, jβ g/8."""
    from scipy import special

    x = -1j * b
    z = np.sqrt(x)
    f = 2.0 * special.jve(1, z) / (z * special.jve(0, z))  # both scaled by the same exp(−|Im z|)
    g = 1.0 / (1.0 - f)
    # by x = z²: with J0' = −J1 and J1' = J0 − J1/z,  dF/dx = (1 − F)/x + F²/4
    slope = g * g * ((1.0 - f) / x + 0.25 * f * f)
    r = (0.125j * b * g).real
    dr = (0.125j * g + 0.125 * b * slope).real  # dx/dβ = −j
    return r, g.real, dr, (-1j * slope).real


@lru_cache(maxsize=1)
def _series_coefficients() -> NDArray[np.float64]:
    """Coefficients of x g(x) = x/(1 − F(x)), a power series in x, from those of J0 and J1."""
    terms = 16
    k = np.arange(terms + 1)
    factorial = np.cumprod(np.concatenate([[1.0], np.arange(1.0, terms + 1)]))
    j0 = (-0.25) ** k / factorial**2  # J0(z)
    j1 = (-0.25) ** k / (factorial * factorial * (k + 1))  # 2 J1(z)/z
    rest = (j0 - j1)[1:]  # (J0 − 2J1/z)/x
    out = np.zeros(terms)
    for n in range(terms):
        out[n] = (j0[n] - np.dot(out[:n], rest[1 : n + 1][::-1])) / rest[0]
    return out


def _series(b: Any) -> tuple[Any, Any, Any, Any]:
    """The factors for small β from x g = Σ c_k x^k: r = −Re Σ c_k x^k / 8, i = Re Σ_{k≥1} c_k x^(k−1)."""
    polyval = np.polynomial.polynomial.polyval
    c = _series_coefficients()
    k = np.arange(c.size)
    x = -1j * b
    r = -0.125 * polyval(x, c).real
    dr = (0.125j * polyval(x, (c * k)[1:])).real
    i = polyval(x, c[1:]).real
    di = (-1j * polyval(x, (c[1:] * k[:-1])[1:])).real
    return r, i, dr, di


@dataclass(frozen=True)
class LineValues:
    """Resistance (Pa s/m³), inertance (Pa s²/m³), each a number or a Dual."""

    resistance: Any
    inertance: Any


def line_values(
    friction: str, bore: Any, length: Any, density: Any, viscosity: Any, omega: Any
) -> LineValues:
    """Resistance and inertance of a laminar line.

    `friction` is "oscillating" (exact at the angular frequency `omega`), "steady"
    (Poiseuille and 4/3 ρl/A) or "plug" (Poiseuille and ρl/A).
    """
    steady = geometry.poiseuille_resistance(bore, length, viscosity)
    plug = geometry.plug_inertance(bore, length, density)
    if friction == "plug":
        return LineValues(steady, plug)
    if friction == "steady":
        return LineValues(steady, plug * (4.0 / 3.0))
    beta = omega * density * bore**2 / (viscosity * 4.0)
    if np.ndim(value_of(beta)) == 0 and value_of(beta) == 0:
        return LineValues(steady, plug * (4.0 / 3.0))
    r, i, dr, di = factors(value_of(beta))
    if not isinstance(beta, Dual):
        return LineValues(steady * r, plug * i)
    return LineValues(steady * beta.scaled(r, dr), plug * beta.scaled(i, di))
