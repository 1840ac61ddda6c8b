"""Named parameters (gain, ωn, ζ …) from the coefficients of a transfer matrix, with exact derivatives."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rigtally.forms.named import Form

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def parameters_from_coefficients(form: Form, denominator: Array, numerators: Array) -> Array:
    """The form's parameters.

    Parameters
    ----------
    denominator : (…, n + 1) array
        Monic, ascending, integrators included.
    numerators : (…, outputs, inputs, n + 1) array

    Returns
    -------
    (…, p) array in the order of `form.names`; NaN where the form cannot hold the values
    (a saddle as a second order).
    """
    den = np.asarray(denominator, dtype=float)[..., form.integrators :]
    shared = _shared(form, den)
    b = np.stack([numerators[..., i, j, p] for i, j, p in form.numerator_slots], axis=-1)
    entry = b.copy()
    if not (form.family == "rational" and form.single):
        first = 0
        for c, (i, j, power) in enumerate(form.numerator_slots):
            if power == form.powers[i][j][0]:
                first = c
                entry[..., c] = b[..., c] if form.is_highpass(i, j) else b[..., c] / den[..., 0]
            else:
                entry[..., c] = b[..., c] / b[..., first]
    return np.concatenate([entry, shared], axis=-1)


def _shared(form: Form, den: Array) -> Array:
    if form.family == "rational":
        return den[..., :-1]
    with np.errstate(invalid="ignore", divide="ignore"):
        if form.family == "first-order":
            return 1.0 / den[..., :1]
        if form.family == "second-order":
            w = np.sqrt(den[..., 0])
            return np.stack([w, den[..., 1] / (2.0 * w)], axis=-1)
        lone = slowest_real_root(den)
        w = np.sqrt(-den[..., 0] / lone)
        # what is left after the lone real pole is divided out, from the end that does not cancel
        middle = den[..., 2] + lone
        other = (den[..., 1] - w * w) / -lone
        middle = np.where(np.abs(lone) < w, middle, other)
        return np.stack([-1.0 / lone, w, middle / (2.0 * w)], axis=-1)


def slowest_real_root(den: Array) -> Array:
    """The real root of least magnitude of monic cubics (…, 4), polished by Newton's rule."""
    flat = den.reshape(-1, 4)
    # the time scale makes the roots of order 1, so that the companion matrix is well scaled
    scale = np.cbrt(np.abs(flat[:, 0]))
    scale = np.where(scale == 0.0, 1.0, scale)
    c0, c1, c2 = flat[:, 0] / scale**3, flat[:, 1] / scale**2, flat[:, 2] / scale
    companion = np.zeros((flat.shape[0], 3, 3))
    companion[:, 0, 1] = companion[:, 1, 2] = 1.0
    companion[:, 2] = np.stack([-c0, -c1, -c2], axis=-1)
    out = np.empty(flat.shape[0])
    roots = np.linalg.eigvals(companion)
    for k, found in enumerate(roots):
        real = found[np.abs(found.imag) <= 1e-7 * np.abs(found)].real
        out[k] = real[np.argmin(np.abs(real))] if real.size else np.nan
    for _ in range(3):
        value = ((out + c2) * out + c1) * out + c0
        slope = (3.0 * out + 2.0 * c2) * out + c1
        with np.errstate(invalid="ignore", divide="ignore"):
            step = value / slope
        out = np.where(np.isfinite(step) & (np.abs(step) < 0.1 * np.abs(out)), out - step, out)
    return (out * scale).reshape(den.shape[:-1])


def parameter_derivative(form: Form, theta: Array, by_denominator: Array, by_numerators: Array) -> Array:
    """d parameters, given d coefficients (implicit differentiation of the form's own map).

    Parameters
    ----------
    theta : (p,) array
    by_denominator : (v, n + 1) array
        Derivative of the monic denominator (integrators included) by each of v quantities.
    by_numerators : (v, outputs, inputs, n + 1) array

    Returns
    -------
    (p, v) array; NaN where the map has no derivative (a triple pole).
    """
    k = form.numerator_count
    shared = theta[k:]
    da = by_denominator[:, form.integrators : form.integrators + form.order]
    out = np.zeros((theta.size, by_denominator.shape[0]))
    if form.order:
        _, slope = form.denominator(shared)
        out[k:] = _solve(slope[:, : form.order].T, da.T)
    _, by = form.numerator_coefficients(theta)
    db = np.stack([by_numerators[:, i, j, p] for i, j, p in form.numerator_slots])
    out[:k] = _solve(by[:k].T, db - by[k:].T @ out[k:])
    return out


def _solve(matrix: Array, right: Array) -> Array:
    try:
        return np.asarray(np.linalg.solve(matrix, right), dtype=np.float64)
    except np.linalg.LinAlgError:
        return np.full((matrix.shape[1], right.shape[1]), np.nan)


def roots_with_derivative(denominator: Array, by_denominator: Array) -> tuple[ComplexArray, ComplexArray]:
    """Poles of a monic ascending polynomial and their exact derivative.

    Returns (n,) poles, slowest first, and (n, v): dp = −Σ da_k p^k / a'(p), not finite at a
    multiple pole.
    """
    poles = polished_roots(denominator)
    powers = poles[:, None] ** np.arange(denominator.size)
    slope = (powers[:, :-1] * (np.arange(1, denominator.size) * denominator[1:])).sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        by = -(powers @ by_denominator.T) / slope[:, None]
    return poles, by


def polished_roots(denominator: Array) -> ComplexArray:
    """Roots of a monic ascending polynomial, slowest first, each refined by Newton's rule."""
    den = np.asarray(denominator, dtype=float)
    zeros = 0
    while zeros < den.size - 1 and den[zeros] == 0.0:
        zeros += 1
    body = den[zeros:]
    if body.size > 1:
        scale = abs(body[0]) ** (1.0 / (body.size - 1))
        scaled = body * scale ** np.arange(body.size) / scale ** (body.size - 1)
        found = np.roots(scaled[::-1]).astype(complex)
        derivative = scaled[1:] * np.arange(1, scaled.size)
        for _ in range(3):
            value = np.polyval(scaled[::-1], found)
            slope = np.polyval(derivative[::-1], found)
            with np.errstate(divide="ignore", invalid="ignore"):
                step = value / slope
            good = np.isfinite(step) & (np.abs(step) < 1e-3 * np.abs(found))
            found = np.where(good, found - np.where(good, step, 0.0), found)
        found = np.where(np.abs(found.imag) < 1e-12 * np.abs(found), found.real, found) * scale
    else:
        found = np.zeros(0, dtype=complex)
    roots = np.concatenate([np.zeros(zeros, dtype=complex), found])
    out: ComplexArray = roots[np.lexsort((roots.imag, np.round(np.abs(roots), 300)))]
    return out
