"""The sampled transfer function on the record's spectrum, exactly, with its exact derivatives.

Between samples x' = A x + B u(t − L) with the companion matrix of the form's denominator, so that the state
holds 1/den, s/den, … s^(n−1)/den of the input. One sampling interval of it is

    x[k+1] = Φ x[k] + c₋ u[k−d−1] + c₀ u[k−d] + c₊ u[k−d+1],      L = (d + f)·T,  0 ≤ f < 1,

with taps c that depend on what the input does between samples. Summed over the record, with z = exp(jωT) on the
record's own bins, z^N = 1 and δ = (z − 1)/T:

    X = (δI − F)⁻¹ [(c₋ V₋ + c₀ V₀ + c₊ V₊)/T + z w],      F = (Φ − I)/T,

where V are the spectra of the shifted inputs and w = (x₀ − x_N)/T is free: n numbers per output that stand for
the record's two ends. Nothing is approximated (the end term in the spectrum: Pintelon & Schoukens, System
Identification: A Frequency Domain Approach, 2012, chapter 6; from memory). The resolvent is written with the
adjugate's polynomials (Faddeev-LeVerrier recursion), so repeated poles and poles at zero need no special case;
F comes from an expm1 series, so that an oversampled record keeps its digits.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

_TERMS = 16  # of the exponential series at a norm of at most 1/2


def exponential_less_one(x: Array) -> Array:
    """exp(X) − I of a stack of square matrices (…, m, m), without the loss of digits near X = 0."""
    norm = float(np.abs(x).sum(axis=-1).max())
    halvings = max(0, int(np.ceil(np.log2(max(norm, 1e-300)))) + 1)
    y = x * 0.5**halvings
    total = y / _TERMS
    for k in range(_TERMS - 1, 0, -1):
        total = (y + y @ total) / k
    for _ in range(halvings):
        total = total @ total + 2.0 * total
    return total


@dataclass(frozen=True)
class Interval:
    """One sampling interval: F (n, n), taps (3, n) for u[k−d−1], u[k−d], u[k−d+1], divided by T.

    The derivatives come first along the leading axis: by each denominator parameter, then by L.
    """

    f: Array
    df: Array
    taps: Array
    dtaps: Array


def one_interval(den: Array, dden: Array, interval: float, fraction: float, hold: str) -> Interval:
    """Discretise 1/den over one interval.

    Parameters
    ----------
    den : (n + 1,) monic, ascending; dden : (k, n + 1) its derivatives
    interval : T; fraction : f in [0, 1)
    hold : "held", "ramped" or "pulse" (the input's samples are areas of pulses at t_k + L)

    Returns
    -------
    Interval, with k + 1 derivatives
    """
    n, k = den.size - 1, dden.shape[0]
    m = n + 2
    a = np.zeros((m, m))
    a[np.arange(n - 1), np.arange(1, n)] = 1.0
    a[n - 1, :n] = -den[:n]
    a[n - 1, n] = 1.0
    a[n, n + 1] = 1.0
    # [[X, dX], [0, X]]: the exponential's upper right block is its derivative in the direction dX
    big = np.zeros((k, 2 * m, 2 * m))
    big[:, :m, :m] = a
    big[:, m:, m:] = a
    big[:, n - 1, m : m + n] = -dden[:, :n]
    # the whole interval, the part before a delayed sample acts, the part after
    lengths = interval * np.array([1.0, fraction, 1.0 - fraction])
    grown = exponential_less_one(big * lengths[:, None, None, None])
    value, by = grown[:, 0, :m, :m], grown[:, :, :m, m:]
    state, b, t = a[:n, :n], a[:n, n], interval
    e, de = value[:, :n, :n] + np.eye(n), by[:, :, :n, :n]
    g1, dg1 = value[:, :n, n], by[:, :, :n, n]  # response to a constant input, …
    g2, dg2 = value[:, :n, n + 1], by[:, :, :n, n + 1]  # … and to a slope
    f = value[0, :n, :n] / t
    df = np.concatenate([de[0] / t, np.zeros((1, n, n))])
    taps = np.zeros((3, n))
    dtaps = np.zeros((k + 1, 3, n))
    if hold == "held":
        taps[0] = e[2] @ g1[1]
        dtaps[:k, 0] = de[2] @ g1[1] + dg1[1] @ e[2].T
        dtaps[k, 0] = e[2] @ (e[1] @ b) - state @ taps[0]
        taps[1], dtaps[:k, 1] = g1[2], dg1[2]
        dtaps[k, 1] = -(e[2] @ b)
    elif hold == "ramped":
        # the line through u₋ and u₀ up to f·T, then the line through u₀ and u₊
        early = np.array([fraction * g1[1] - g2[1] / t, (1.0 - fraction) * g1[1] + g2[1] / t])
        dearly = np.stack([fraction * dg1[1] - dg2[1] / t, (1.0 - fraction) * dg1[1] + dg2[1] / t], axis=1)
        moved = np.outer([fraction, 1.0 - fraction], e[1] @ b)
        taps[:2] = early @ e[2].T
        dtaps[:k, :2] = dearly @ e[2].T + np.einsum("kij,aj->kai", de[2], early)
        dtaps[k, :2] = moved @ e[2].T - taps[:2] @ state.T
        taps[2], dtaps[:k, 2] = g2[2] / t, dg2[2] / t
        dtaps[k, 2] = -g1[2] / t
        taps[1] += g1[2] - taps[2]
        dtaps[:k, 1] += dg1[2] - dtaps[:k, 2]
        dtaps[k, 1] += g1[2] / t - e[2] @ b
    else:
        taps[1], dtaps[:k, 1] = e[2] @ b, de[2] @ b
        dtaps[k, 1] = -(state @ taps[1])
    return Interval(f, df, taps / t, dtaps / t)


@dataclass(frozen=True)
class Resolvent:
    """(δI − F)⁻¹ c as polynomials: alpha (n + 1,), numerators (3, n, n) [tap, state, power], derivatives first."""

    alpha: Array
    dalpha: Array
    numerators: Array
    dnumerators: Array


def resolvent(step: Interval) -> Resolvent:
    """Adjugate and characteristic polynomial by the Faddeev-LeVerrier recursion, with derivatives."""
    n, k = step.f.shape[0], step.df.shape[0]
    eye = np.eye(n)
    alpha, dalpha = np.zeros(n + 1), np.zeros((k, n + 1))
    alpha[n] = 1.0
    r, dr = eye, np.zeros((k, n, n))
    num, dnum = np.zeros((3, n, n)), np.zeros((k, 3, n, n))
    for j in range(n):
        power = n - 1 - j
        num[:, :, power] = step.taps @ r.T
        dnum[:, :, :, power] = step.dtaps @ r.T + step.taps @ dr.transpose(0, 2, 1)
        fr = step.f @ r
        dfr = step.df @ r + step.f @ dr
        alpha[power] = -np.trace(fr) / (j + 1)
        dalpha[:, power] = -np.trace(dfr, axis1=1, axis2=2) / (j + 1)
        r = fr + alpha[power] * eye
        dr = dfr + dalpha[:, power, None, None] * eye
    return Resolvent(alpha, dalpha, num, dnum)


def horner(coefficients: Array, x: ComplexArray) -> ComplexArray:
    """Polynomials (…, n + 1) in ascending powers at the points x (m,): (…, m)."""
    out = np.empty((*coefficients.shape[:-1], x.size), dtype=complex)
    out[...] = coefficients[..., -1, None]
    for power in range(coefficients.shape[-1] - 2, -1, -1):
        out *= x
        out += coefficients[..., power, None]
    return out
