"""Draws of uncertain quantities by their stated distributions (JCGM 101:2008, clause 6.4)."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]


def draw(
    inputs: Sequence[Uncertain], size: int, rng: np.random.Generator, correlation: Array | None = None
) -> Array:
    """(v, size) draws.

    "normal" with finite dof is a t distribution scaled by u (6.4.9.4), "rectangular" has the
    half-width √3·u (6.4.2), "lognormal" has the value as its mean and u as its standard
    deviation; u = 0 (or "exact") is the value itself. `correlation` (v, v) acts through a
    normal copula: exact for normal quantities, the rank correlation of the others.
    """
    out = np.empty((len(inputs), size))
    standard: Any = None
    if correlation is not None and not np.array_equal(correlation, np.eye(len(inputs))):
        values, vectors = np.linalg.eigh(correlation)
        root = vectors * np.sqrt(np.clip(values, 0.0, None))
        standard = root @ rng.standard_normal((len(inputs), size))
    for k, x in enumerate(inputs):
        if not x.u > 0 or x.distribution == "exact":
            out[k] = x.value
        elif standard is not None:
            out[k] = _from_standard(x, standard[k])
        elif x.distribution == "rectangular":
            half = math.sqrt(3.0) * x.u
            out[k] = rng.uniform(x.value - half, x.value + half, size)
        elif x.distribution == "lognormal":
            out[k] = _lognormal(x, rng.standard_normal(size))
        elif math.isfinite(x.dof):
            out[k] = x.value + x.u * rng.standard_t(x.dof, size)
        else:
            out[k] = x.value + x.u * rng.standard_normal(size)
    return out


def _from_standard(x: Uncertain, z: Array) -> Array:
    from scipy import special

    if x.distribution == "rectangular":
        uniform: Array = x.value + math.sqrt(3.0) * x.u * (2.0 * special.ndtr(z) - 1.0)
        return uniform
    if x.distribution == "lognormal":
        return _lognormal(x, z)
    if math.isfinite(x.dof):
        return np.asarray(x.value + x.u * special.stdtrit(x.dof, special.ndtr(z)), dtype=np.float64)
    return x.value + x.u * z


def _lognormal(x: Uncertain, z: Array) -> Array:
    spread = math.sqrt(math.log1p((x.u / x.value) ** 2))
    return np.asarray(x.value * np.exp(spread * z - 0.5 * spread * spread), dtype=np.float64)
