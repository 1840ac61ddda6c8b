"""Variable projection: the linear unknowns in closed form, poles and dead time with the full derivative.

Golub & Pereyra, SIAM J. Numer. Anal. 10 (1973) 413-432 (from memory): with the columns C(φ) and the closed-form
coefficients c = C⁺y, the residual r = y − C c has the derivative

    ∂r/∂φ = −(I − C C⁺) (∂C/∂φ) c − C⁺ᵀ (∂C/∂φ)ᵀ r.

Leaving the second term out makes the iteration crawl to a slightly wrong place.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.frequency_columns import Columns, Problem, columns

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Projection:
    """The closed-form part at given φ = (denominator parameters, dead time).

    Attributes
    ----------
    residual : (rows,) of all outputs, divided by sigma
    jacobian : (rows, k) its derivative by φ
    numerator : (slots,) coefficients in slot order
    linear : per output, all its coefficients (its slots, then each segment's nuisances)
    sensitivity : (rows, p)
        Of `project_given` alone: what θ moves that no nuisance can make up for; its QR is the covariance's.
    """

    residual: Array
    jacobian: Array
    numerator: Array
    linear: tuple[Array, ...]
    sensitivity: Array = field(default_factory=lambda: np.zeros((0, 0)))

    @property
    def cost(self) -> float:
        """Sum of squares."""
        return float(self.residual @ self.residual)


def unpack(problem: Problem, phi: Array) -> tuple[Array, float]:
    """Denominator parameters and dead time."""
    count = len(problem.form.shared_names)
    return phi[:count], float(phi[count]) if problem.form.dead_time else 0.0


def all_columns(problem: Problem, phi: Array) -> list[Columns]:
    """Columns of each segment."""
    shared, dead = unpack(problem, phi)
    return [
        columns(problem, segment, bins, shared, dead)
        for segment, bins in zip(problem.segments, problem.bins, strict=True)
    ]


def output_rows(problem: Problem, output: int) -> Array:
    """The output's spectrum as rows, all segments."""
    return np.concatenate(
        [
            bins.rows(segment.spectrum[output, bins.index], output)
            for segment, bins in zip(problem.segments, problem.bins, strict=True)
        ]
    )


def output_columns(
    problem: Problem, parts: list[Columns], output: int, derivatives: bool = True
) -> tuple[Array, Array]:
    """One output's columns (rows, c) and their derivatives (k, rows, c).

    The output's slots come first and are common to all segments; each segment's nuisances follow in its own
    block.
    """
    mine = [c for c, (i, _, _) in enumerate(problem.slots) if i == output]
    values, slopes = [], []
    for part, bins in zip(parts, problem.bins, strict=True):
        values.append(bins.rows(np.concatenate([part.driven[mine], part.ends, part.fixed]), output))
        if derivatives:
            slopes.append(bins.rows(np.concatenate([part.ddriven[:, mine], part.dends], axis=1), output))
    k = parts[0].dends.shape[0] if derivatives else 0
    if len(parts) == 1:
        fixed = parts[0].fixed.shape[0]
        value = values[0].T
        if not derivatives:
            return value, np.zeros((0, *value.shape))
        still = np.zeros((k, fixed, value.shape[0]))
        return value, np.concatenate([slopes[0], still], axis=1).transpose(0, 2, 1)
    rows = sum(v.shape[1] for v in values)
    width = len(mine) + sum(v.shape[0] - len(mine) for v in values)
    value, slope = np.zeros((rows, width)), np.zeros((k, rows, width))
    row, column = 0, len(mine)
    for index, block in enumerate(values):
        here = slice(row, row + block.shape[1])
        own = block.shape[0] - len(mine)
        value[here, : len(mine)] = block[: len(mine)].T
        value[here, column : column + own] = block[len(mine) :].T
        if derivatives:
            moving = slopes[index].shape[1] - len(mine)
            slope[:, here, : len(mine)] = slopes[index][:, : len(mine)].transpose(0, 2, 1)
            slope[:, here, column : column + moving] = slopes[index][:, len(mine) :].transpose(0, 2, 1)
        row, column = row + block.shape[1], column + own
    return value, slope


def project(problem: Problem, phi: Array, derivatives: bool = True) -> Projection:
    """Closed-form coefficients, residual and its full derivative.

    Raises
    ------
    numpy.linalg.LinAlgError, FloatingPointError
        Where the columns are not finite (poles far out of reach of the sampling).
    """
    parts = all_columns(problem, phi)
    numerator = np.full(len(problem.slots), np.nan)
    residuals, jacobians, linear = [], [], []
    for output, sigma in enumerate(problem.sigma):
        value, slope = output_columns(problem, parts, output, derivatives)
        y = output_rows(problem, output)
        size = np.sqrt(np.einsum("rc,rc->c", value, value))
        size[size == 0.0] = 1.0
        if not np.all(np.isfinite(size)):
            raise FloatingPointError("columns are not finite")
        q, r = np.linalg.qr(value / size)
        diagonal = np.abs(np.diagonal(r))
        coefficients = _back(r, q.T @ y, diagonal)
        residual = y - q @ (r @ coefficients)
        if derivatives:
            coefficients_si = coefficients / size
            moved = slope @ coefficients_si  # (k, rows)
            bent = np.einsum("krc,r->kc", slope, residual) / size
            away = moved - (moved @ q) @ q.T
            along = np.array([q @ _back_transposed(r, b, diagonal) for b in bent])
            jacobians.append(-(away + along).T / sigma)
        residuals.append(residual / sigma)
        linear.append(coefficients / size)
        mine = [c for c, (i, _, _) in enumerate(problem.slots) if i == output]
        numerator[mine] = linear[-1][: len(mine)]
    jacobian = np.concatenate(jacobians) if derivatives else np.zeros((0, phi.size))
    return Projection(np.concatenate(residuals), jacobian, numerator, tuple(linear))


def _back(r: Array, b: Array, diagonal: Array) -> Array:
    """R⁻¹b; a column that depends on those before it gets no part."""
    good = diagonal > 1e-11 * max(float(diagonal.max(initial=0.0)), 1e-300)
    if good.all():
        return np.asarray(np.linalg.solve(r, b))
    return np.asarray(np.linalg.lstsq(r, b, rcond=1e-11)[0])


def _back_transposed(r: Array, b: Array, diagonal: Array) -> Array:
    """R⁻ᵀb, likewise."""
    good = diagonal > 1e-11 * max(float(diagonal.max(initial=0.0)), 1e-300)
    if good.all():
        return np.asarray(np.linalg.solve(r.T, b))
    return np.asarray(np.linalg.lstsq(r.T, b, rcond=1e-11)[0])


def project_given(problem: Problem, theta: Array) -> Projection:
    """The projection with all of θ given (in the problem's time unit): only the nuisances are in closed form.

    The derivative is by θ, again in full.
    """
    form = problem.form
    _, shared, dead = form.split(theta)
    parts = all_columns(problem, np.append(shared, dead)[: len(form.shared_names) + int(form.dead_time)])
    b, by = form.numerator_coefficients(theta)
    first = form.numerator_count
    residuals, jacobians, sensitivities, linear = [], [], [], []
    for output, sigma in enumerate(problem.sigma):
        value, slope = output_columns(problem, parts, output)
        mine = [c for c, (i, _, _) in enumerate(problem.slots) if i == output]
        taken = len(mine)
        given = value[:, :taken] @ b[mine]
        free, size = value[:, taken:], np.sqrt(np.einsum("rc,rc->c", value[:, taken:], value[:, taken:]))
        size[size == 0.0] = 1.0
        if not (np.all(np.isfinite(size)) and np.all(np.isfinite(given))):
            raise FloatingPointError("columns are not finite")
        q, r = np.linalg.qr(free / size)
        diagonal = np.abs(np.diagonal(r))
        left = output_rows(problem, output) - given
        coefficients = _back(r, q.T @ left, diagonal)
        residual = left - q @ (r @ coefficients)
        all_coefficients = np.concatenate([b[mine], coefficients / size])
        moved = np.zeros((theta.size, residual.size))
        moved += by[:, mine] @ value[:, :taken].T
        moved[first:] += slope @ all_coefficients
        away = moved - (moved @ q) @ q.T
        sensitivities.append(away.T / sigma)
        away = away.copy()
        bent = np.einsum("krc,r->kc", slope[:, :, taken:], residual) / size
        away[first:] += np.array([q @ _back_transposed(r, row, diagonal) for row in bent])
        residuals.append(residual / sigma)
        jacobians.append(-away.T / sigma)
        linear.append(all_coefficients)
    return Projection(
        np.concatenate(residuals), np.concatenate(jacobians), b, tuple(linear), np.concatenate(sensitivities)
    )
