"""How far fit and prediction lie apart, against how far they may: E_n, and the joint distance.

The joint distance dᵀ C⁻¹ d holds both covariances. Its reference distribution is χ² where all is
normal and nearly linear, else it is drawn from the stated tolerances with the fit's noise (JCGM 101:2008).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, stats

from rigtally.physics.prediction_result import Prediction
from rigtally.quantities.draws import draw
from rigtally.tallying.difference import TINY, Difference

Array = NDArray[np.float64]
LARGE_SHARE = 0.2  # of a variance by one value that is not normal: then Monte Carlo
CURVED = 0.1  # of u: how far a tolerance may bend a parameter before Monte Carlo
BEND_DRAWS = 4000
FEW = 300.0  # degrees of freedom below which the noise's own uncertainty counts


@dataclass(frozen=True)
class Metric:
    """C⁻¹ of a possibly rank-deficient covariance, by its eigenvectors.

    `root` (rank, q): the distance is |root·d|². `blind` (q − rank, q): directions without any
    uncertainty, scaled by the parameters' size; a difference there cannot be explained by chance.
    """

    root: Array
    blind: Array

    @property
    def rank(self) -> int:
        """Directions that have an uncertainty."""
        return int(self.root.shape[0])

    def distance(self, d: Array) -> float:
        """dᵀC⁻¹d; infinite where d reaches into a direction that has no uncertainty."""
        if self.blind.size and np.max(np.abs(self.blind @ d)) > TINY:
            return float("inf")
        return float(np.sum((self.root @ d) ** 2))


def metric(covariance: Array, scale: Array) -> Metric:
    """Metric of a covariance, (q, q), with parameters of sizes `scale`, (q,)."""
    if not scale.size:
        return Metric(np.zeros((0, 0)), np.zeros((0, 0)))
    spread = np.sqrt(np.clip(np.diag(covariance), 0.0, None))
    unit = np.where(spread > TINY * scale, spread, scale)
    values, vectors = np.linalg.eigh(covariance / np.outer(unit, unit))
    keep = values > 1e-12 * max(float(values.max()), 1e-300)
    root = (vectors[:, keep] / np.sqrt(values[keep])).T / unit
    return Metric(root, vectors[:, ~keep].T / scale)


@dataclass(frozen=True)
class Joint:
    """The joint test.

    `reference` is "chi-squared" or "monte-carlo" (with `draws`); `critical` the distance that the
    stated tolerances and noise exceed with 1 − coverage; `p` the probability of a larger one.
    """

    chi2: float
    dof: int
    p: float
    critical: float
    agrees: bool | None
    reference: str
    reason: str
    draws: int = 0


def joint_test(
    d: Difference, prediction: Prediction, coverage: float, monte_carlo: int, rng: np.random.Generator
) -> tuple[Metric, Joint]:
    """Joint distance and its probability."""
    m = metric(d.covariance, d.scale)
    if not d.names:
        return m, Joint(np.nan, 0, np.nan, np.nan, None, "none", "no parameter could be compared")
    chi2 = m.distance(d.value)
    reason = _why_draws(d, prediction)
    if not reason or monte_carlo == 0 or not m.rank:
        p = float(stats.chi2.sf(chi2, m.rank)) if m.rank else (1.0 if chi2 == 0 else 0.0)
        critical = float(stats.chi2.ppf(coverage, m.rank)) if m.rank else 0.0
        why = "normal and linear" if not reason else f"{reason}; no draws were asked for"
        return m, Joint(chi2, m.rank, p, critical, chi2 <= critical, "chi-squared", why)
    reference = reference_draws(d, prediction, m, monte_carlo, rng)
    count = reference.size
    p = (1.0 + float(np.sum(reference >= chi2))) / (count + 1.0)
    critical = float(np.quantile(reference, coverage))
    return m, Joint(chi2, m.rank, p, critical, chi2 <= critical, "monte-carlo", reason, count)


def _why_draws(d: Difference, prediction: Prediction) -> str:
    """Why χ² would not do; "" where it does."""
    variance = np.diag(d.covariance)
    columns = np.concatenate([d.by_value, d.by_systematic], axis=1)
    for x, column in zip([*d.values, *d.systematic], columns.T, strict=True):
        plain = x.distribution == "normal" and np.isinf(x.dof)
        if x.u > 0 and not plain and np.any((column * x.u) ** 2 > LARGE_SHARE * variance):
            return f"a {x.distribution} tolerance carries more than 20 % of a variance"
    if d.dof < FEW and np.any(np.diag(d.noise) > 0.01 * variance):
        return f"the fit's noise is known with {d.dof:.0f} degrees of freedom"
    if bends(d, prediction):
        return "a tolerance is so wide that the prediction bends"
    return ""


def bends(d: Difference, prediction: Prediction) -> bool:
    """Whether 2 u of some value bends a parameter by more than a tenth of its u, in the joint metric."""
    nominal = np.array([x.value for x in prediction.inputs])
    m = metric(d.covariance, d.scale)
    base = prediction.evaluate(nominal)[list(d.rows)]
    for k, x in enumerate(d.values):
        if not x.u > 0.0:
            continue
        moved = nominal.copy()
        moved[k] += 2.0 * x.u
        bend = prediction.evaluate(moved)[list(d.rows)] - base - 2.0 * x.u * d.by_value[:, k]
        if not np.linalg.norm(m.root @ bend) <= CURVED * np.sqrt(m.rank):
            return True
    return False


def with_bend(d: Difference, prediction: Prediction, rng: np.random.Generator) -> Difference:
    """The difference with the second moment of what its tolerances do beyond first order.

    Where the fit's noise is far smaller than the tolerances, the parameters are tied to a curved surface; a
    metric that is flat there would blow its curvature up into distance, and hide real differences.
    """
    if not d.names or not bends(d, prediction):
        return d
    m = metric(d.covariance, d.scale)
    sample = _sample(d, m, BEND_DRAWS, rng)
    moved = _evaluated(prediction, sample.T)[:, list(d.rows)] - d.predicted
    straight = (sample - np.array([[x.value] for x in d.values])).T @ d.by_value.T
    beyond = (moved - straight)[np.all(np.isfinite(moved), axis=1)]
    return replace(d, bend=beyond.T @ beyond / max(1, beyond.shape[0]))


def _sample(d: Difference, m: Metric, count: int, rng: np.random.Generator) -> Array:
    """(v, count) draws of the rig's values, drawn in the order of their weight: that in the file is free."""
    weight = np.array(
        [
            float(np.sum((m.root @ column * x.u) ** 2)) if x.u > 0 else 0.0
            for x, column in zip(d.values, d.by_value.T, strict=True)
        ]
    )
    order = np.argsort(-np.round(weight, 12), kind="stable")
    sample = np.empty((len(d.values), count))
    sample[order] = draw([d.values[k] for k in order], count, rng)
    return sample


def reference_draws(
    d: Difference, prediction: Prediction, m: Metric, count: int, rng: np.random.Generator
) -> Array:
    """(≤ count,) joint distances when rig, noise and systematic parts are what they are stated to be.

    Each draw takes the rig's values by their distributions and re-solves the rig; with finite degrees of
    freedom ν the estimated noise variance is drawn too, s² ~ χ²_ν/ν, and the distance of that draw is
    measured with it, as that of the log was. The order of the values in the file changes nothing:
    they are drawn in the order of their weight.
    """
    sample = _sample(d, m, count, rng)
    moved = _evaluated(prediction, sample.T)[:, list(d.rows)] - d.predicted
    noise = rng.standard_normal((count, len(d.names))) @ _square_root(d.noise, d.scale).T
    total = noise - moved
    if d.systematic:
        parts = draw(d.systematic, count, rng) - np.array([[x.value] for x in d.systematic])
        total = total + (d.by_systematic @ parts).T
    total = total[np.all(np.isfinite(total), axis=1)]
    if np.isinf(d.dof) or not np.any(d.noise):
        return np.asarray(np.sum((total @ m.root.T) ** 2, axis=1))
    s2: Array = np.asarray(rng.chisquare(d.dof, total.shape[0])) / d.dof
    own = m.root @ d.noise @ m.root.T
    inside = total @ m.root.T
    # root·C·rootᵀ = 1: in the eigenvectors of the noise's part both parts are diagonal
    values, vectors = np.linalg.eigh(0.5 * (own + own.T))
    share = np.clip(values, 0.0, 1.0)
    turned: Array = inside @ vectors
    spread: Array = np.outer(s2, share) + (1.0 - share)
    return np.asarray(np.sum(turned**2 / spread, axis=1), dtype=np.float64)


def _evaluated(prediction: Prediction, values: Array) -> Array:
    if prediction.evaluate_many is not None:
        return np.asarray(prediction.evaluate_many(values), dtype=float)
    return np.array([prediction.evaluate(row) for row in values], dtype=float)


def _square_root(covariance: Array, scale: Array) -> Array:
    values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    out: Array = scale[:, None] * vectors * np.sqrt(np.clip(values, 0.0, None))
    return out


def noncentrality(power: float, dof: int, critical: float) -> float:
    """λ with which a non-central χ² exceeds `critical` with probability `power`."""

    def short(x: float) -> float:
        return float(stats.ncx2.sf(critical, dof, x)) - power

    return float(optimize.brentq(short, 1e-9, 1e4)) if short(1e-9) < 0 else 0.0


def smallest_found(m: Metric, joint: Joint, power: float = 0.95) -> Array:
    """(q,) smallest difference in each parameter alone that the joint test finds with `power`."""
    if not m.rank or not np.isfinite(joint.critical):
        return np.full(m.root.shape[1], np.nan)
    needed = noncentrality(power, m.rank, joint.critical)
    precision: Array = np.sum(m.root**2, axis=0)
    if m.blind.size:
        precision = np.where(np.max(np.abs(m.blind), axis=0) > TINY, np.inf, precision)
    return np.asarray(np.sqrt(needed / precision), dtype=np.float64)


def power_of(m: Metric, joint: Joint, difference: Array) -> Array:
    """(q,) probability that a difference of each parameter alone would have been found."""
    out = np.full(difference.size, np.nan)
    for k, size in enumerate(difference):
        alone = np.zeros(difference.size)
        alone[k] = size
        far = m.distance(alone)
        out[k] = 1.0 if np.isinf(far) else float(stats.ncx2.sf(joint.critical, m.rank, max(far, 1e-12)))
    return out


def en_number(difference: float, fitted_u: float, predicted_u: float) -> float:
    """E_n = difference/√(U_fit² + U_pred²), U the half-width of each 95 % interval (ISO/IEC 17043).

    NaN where both are exact or one is not known.
    """
    together = np.hypot(fitted_u, predicted_u)
    return float(difference / together) if together > 0 and np.isfinite(together) else float("nan")
