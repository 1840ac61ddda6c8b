"""Propagation of uncertainty: first order (JCGM 100), Monte Carlo (JCGM 101), and their comparison."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from rigtally.errors import UsageError
from rigtally.quantities.coverage import coverage_factor
from rigtally.quantities.draws import draw
from rigtally.quantities.dual import Dual, partials_of, value_of
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
BLOCK = 10_000  # draws a block: JCGM 101:2008, 7.9.4 b), max(100/(1 − p), 10⁴) for p = 0.95


@dataclass(frozen=True)
class MonteCarlo:
    """What the draws say of each of q outputs.

    Attributes
    ----------
    mean, u, low, high : (q,) arrays
        Of the draws; low and high bound the 95 % interval (equal tails, or the shortest).
    draws : int
    lost : int
        Draws with no answer (left out).
    stable : bool
        Mean, u and limits stand still to two significant digits of u (JCGM 101:2008, 7.9.4).
    agrees : tuple of bool
        First-order and Monte Carlo interval agree within the numerical tolerance of u with two
        significant digits (JCGM 101:2008, clause 8), beyond twice the draws' own scatter.
    tolerance : (q,) array
        That numerical tolerance.
    """

    mean: Array
    u: Array
    low: Array
    high: Array
    draws: int
    lost: int
    stable: bool
    agrees: tuple[bool, ...]
    tolerance: Array


@dataclass(frozen=True)
class Propagated:
    """First-order result and, where asked for, the Monte Carlo beside it.

    value, u, dof : (q,); covariance : (q, q); jacobian : (q, v);
    shares : (q, v) of the variance (rows sum to 1; NaN where u is 0; with correlated inputs
    a share is c_i u_i Σ_j r_ij c_j u_j / u², which may be negative).
    """

    value: Array
    u: Array
    dof: Array
    covariance: Array
    jacobian: Array
    shares: Array
    monte_carlo: MonteCarlo | None = None


def propagate(
    function: Callable[[Sequence[Any]], Any],
    inputs: Sequence[Uncertain],
    correlation: ArrayLike | None = None,
    *,
    jacobian: ArrayLike | None = None,
    monte_carlo: int = 0,
    rng: np.random.Generator | None = None,
    interval: str = "equal-tails",
    progress: Callable[[int, int], None] | None = None,
) -> Propagated:
    """Uncertainty of function(inputs).

    Parameters
    ----------
    function : callable
        Takes a sequence of v numbers, gives one number or a sequence of q. Called with plain
        numbers, with arrays of draws and, where no `jacobian` is given, with `Dual` numbers
        (then it may use + − * / and powers only).
    inputs : v Uncertain
        Their distributions are those of the draws; finite dof with "normal" is a scaled t.
    correlation : (v, v), optional
        Of the inputs (draws then by a normal copula).
    jacobian : (q, v), optional
        Exact derivatives at the inputs' values.
    monte_carlo : int
        At most so many draws; 0 for none.
    interval : "equal-tails" or "shortest"
        Which 95 % interval the draws give.

    Raises
    ------
    UsageError
        code "not-differentiable": no jacobian, and the function does not take Duals.
    """
    count = len(inputs)
    r = np.eye(count) if correlation is None else np.asarray(correlation, dtype=float)
    u = np.array([x.u for x in inputs])
    value = _outputs(function([x.value for x in inputs]))
    slopes = _derivative(function, inputs) if jacobian is None else np.atleast_2d(np.asarray(jacobian, float))
    parts = np.where(u > 0, slopes * u, 0.0)
    covariance = parts @ r @ parts.T
    spread = np.sqrt(np.clip(np.diag(covariance), 0.0, None))
    with np.errstate(divide="ignore", invalid="ignore"):
        shares = parts * (parts @ r) / spread[:, None] ** 2
    dof = np.array([_effective_dof(row, inputs, s) for row, s in zip(parts, spread, strict=True)])
    drawn = None
    if monte_carlo:
        generator = rng if rng is not None else np.random.default_rng(0)
        limits = [(y - coverage_factor(0.95, n) * s, y + coverage_factor(0.95, n) * s)
                  for y, s, n in zip(value, spread, dof, strict=True)]  # fmt: skip
        drawn = _monte_carlo(
            function, inputs, r, monte_carlo, generator, interval, progress, np.array(limits), value.size
        )
    return Propagated(value, spread, dof, covariance, slopes, shares, drawn)


def _outputs(found: Any) -> Array:
    return np.atleast_1d(np.asarray(found, dtype=float))


def _derivative(function: Callable[[Sequence[Any]], Any], inputs: Sequence[Uncertain]) -> Array:
    seeds = [Dual(x.value, {str(k): 1.0}) for k, x in enumerate(inputs)]
    try:
        found = function(seeds)
    except TypeError as error:
        raise UsageError(
            f"the function cannot be differentiated by itself ({error})",
            do="state its jacobian",
            code="not-differentiable",
        ) from None
    results = found if isinstance(found, list | tuple | np.ndarray) else [found]
    out = np.zeros((len(results), len(inputs)))
    for i, result in enumerate(results):
        value_of(result)
        for name, slope in partials_of(result).items():
            out[i, int(name)] = slope
    return out


def _effective_dof(parts: Array, inputs: Sequence[Uncertain], total: float) -> float:
    """Welch-Satterthwaite (JCGM 100:2008, G.4.1)."""
    finite = [(c, x.dof) for c, x in zip(parts, inputs, strict=True) if math.isfinite(x.dof) and c != 0.0]
    spread = sum(c**4 / dof for c, dof in finite)
    return total**4 / spread if spread > 0 else math.inf


def _monte_carlo(
    function: Callable[[Sequence[Any]], Any],
    inputs: Sequence[Uncertain],
    correlation: Array,
    most: int,
    rng: np.random.Generator,
    interval: str,
    progress: Callable[[int, int], None] | None,
    first_order: Array,
    outputs: int,
) -> MonteCarlo:
    """Blocks of draws until mean, u and both limits stand still (JCGM 101:2008, 7.9)."""
    blocks: list[Array] = []
    figures: list[Array] = []
    done = 0
    lost = 0
    stable = False
    settled = False
    # with few draws the blocks are smaller, so that their scatter is known
    block = BLOCK if most >= 2 * BLOCK else max(2, most // 10)
    scatter = np.full((4, outputs), np.inf)
    while done < most and not settled:
        size = min(block, most - done)
        sample = draw(inputs, size, rng, correlation)
        found = np.stack(
            [np.broadcast_to(np.asarray(y, float), (size,)) for y in _listed(function(list(sample)), outputs)]
        )
        good = np.all(np.isfinite(found), axis=0)
        lost += int(size - good.sum())
        found = found[:, good]
        done += size
        if found.shape[1]:
            blocks.append(found)
            figures.append(_figures(found, interval))
        if progress is not None:
            progress(done, most)
        if len(figures) > 1:
            stack = np.array(figures)
            scatter = stack.std(axis=0, ddof=1) / math.sqrt(len(figures))
            tolerance = _tolerances(stack[:, 1].mean(axis=0))
            stable = bool(np.all(2.0 * scatter <= tolerance))
            # a fifth of the tolerance, so that the comparison of clause 8 can be trusted (8.2, note 2)
            settled = bool(np.all(2.0 * scatter <= 0.2 * tolerance))
    if not blocks:
        nothing = np.full(outputs, np.nan)
        return MonteCarlo(nothing, nothing, nothing, nothing, done, lost, False, (False,) * outputs, nothing)
    everything = np.concatenate(blocks, axis=1)
    mean, spread, low, high = _figures(everything, interval)
    tolerance = _tolerances(spread)
    # a difference counts where the draws' own scatter cannot have made it
    noise = 2.0 * np.where(np.isfinite(scatter[2:]), scatter[2:], 0.0)
    off = np.abs(first_order.T - np.stack([low, high])) - noise
    agrees = tuple(bool(x) for x in np.all(off <= tolerance, axis=0))
    return MonteCarlo(mean, spread, low, high, done, lost, stable, agrees, tolerance)


def _listed(found: Any, outputs: int) -> list[Any]:
    if isinstance(found, list | tuple):
        return list(found)
    array = np.asarray(found, dtype=float)
    return [array] if outputs == 1 and array.ndim < 2 else list(array)


def _figures(found: Array, interval: str) -> Array:
    """(4, q): mean, u, low, high of (q, m) draws."""
    ordered = np.sort(found, axis=1)
    if interval == "shortest":
        low, high = _shortest(ordered)
    else:
        low, high = np.quantile(ordered, [0.025, 0.975], axis=1)
    spread = found.std(axis=1, ddof=1) if found.shape[1] > 1 else np.full(found.shape[0], np.nan)
    return np.stack([found.mean(axis=1), spread, low, high])


def _shortest(ordered: Array) -> tuple[Array, Array]:
    """Ends of the shortest interval with 95 % of the draws (JCGM 101:2008, 7.7.3)."""
    m = ordered.shape[1]
    inside = max(1, round(0.95 * m)) if m > 1 else 0
    widths = ordered[:, inside:] - ordered[:, : m - inside]
    start = np.argmin(widths, axis=1)
    rows = np.arange(ordered.shape[0])
    return ordered[rows, start], ordered[rows, start + inside]


def _tolerances(spread: Array) -> Array:
    """Numerical tolerance of each u: u = c·10^l with c of two digits, δ = 10^l/2 (JCGM 101:2008, 7.9.2)."""
    out = np.zeros_like(spread)
    for k, s in enumerate(spread):
        if s > 0 and math.isfinite(s):
            power = math.floor(math.log10(s)) - 1
            if round(s / 10.0**power) >= 100:
                power += 1
            out[k] = 0.5 * 10.0**power
    return out
