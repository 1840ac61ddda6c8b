"""A residual and its input whitened together, for tests of the residual (neither road's own noise model)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_toeplitz

from rigtally.quantities.fir import moving_sum

Array = NDArray[np.float64]


def whiten(residual: Array, inputs: Array) -> tuple[Array, Array]:
    """(n,) residual and (r, n) inputs through the residual's autoregression.

    Yule–Walker, order by AIC up to 20: enough for a test, no more.
    """
    r = residual - residual.mean()
    n = r.size
    most = min(20, n // 20)
    gamma = np.array([r[: n - k] @ r[k:] for k in range(most + 1)]) / n
    if gamma[0] <= 0 or most < 1:
        return r, inputs - inputs.mean(axis=1, keepdims=True)
    best, chosen = n * np.log(gamma[0]), np.array([1.0])
    for order in range(1, most + 1):
        a = -solve_toeplitz(gamma[:order], gamma[1 : order + 1])
        variance = float(gamma[0] + a @ gamma[1 : order + 1])
        if variance <= 0:
            break
        score = n * np.log(variance) + 2 * order
        if score < best:
            best, chosen = score, np.concatenate([[1.0], a])
    centred = inputs - inputs.mean(axis=1, keepdims=True)
    return moving_sum(chosen, r), moving_sum(chosen, centred)
