"""Covariance of the frequency road's parameters."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def covariance_of(sensitivity: Array, variance: float) -> Array:
    """σ²(JᵀJ)⁻¹ by QR; infinite directions stay infinite (NaN in the parameters that they touch)."""
    size = np.linalg.norm(sensitivity, axis=0)
    if sensitivity.shape[1] == 0:
        return np.zeros((0, 0))
    bad = ~(size > 0)
    safe = np.where(bad, 1.0, size)
    _, singular, vt = np.linalg.svd(np.linalg.qr(sensitivity / safe, mode="r"))
    dead = singular <= 1e-10 * singular[0]
    inverse = np.where(dead, 0.0, 1.0 / np.where(dead, 1.0, singular))
    half = vt.T * inverse
    out: Array = variance * (half @ half.T) / np.outer(safe, safe)
    lost = bad | (np.abs(vt[dead]) > 1e-3).any(axis=0)
    out[lost] = np.nan
    out[:, lost] = np.nan
    return out
