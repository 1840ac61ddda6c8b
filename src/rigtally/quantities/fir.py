"""A finite filter along the last axis, without the weight of a signal-processing library at start-up."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def moving_sum(weights: Array, rows: Array) -> Array:
    """y[k] = Σ_j weights[j] x[k-j] with x = 0 before the first sample; (p + 1,), (…, n) -> (…, n)."""
    out = weights[0] * rows
    for j in range(1, min(weights.size, rows.shape[-1])):
        out[..., j:] += weights[j] * rows[..., :-j]
    return np.asarray(out)
