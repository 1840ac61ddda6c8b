"""The time road: output error by maximum likelihood, what the input does between samples followed exactly.

Model: y = G(θ) u + offset + drift + free response of a free initial state + noise, the noise an autoregression
whose order is found (white is order 0). Numerator, denominator and dead time are iterated; offset, drift and
initial state are solved in closed form at every step. Sources: Ljung, System Identification (1999), chapters 7
and 16; Golub & Pereyra (1973) for the projection (both from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import FitError
from rigtally.estimation.result import RoadResult, Warning_
from rigtally.estimation.time_carry import Carrier, Found
from rigtally.estimation.time_noise import Noise, estimate
from rigtally.estimation.time_problem import Problem
from rigtally.estimation.time_start import starts
from rigtally.estimation.trial import Trial
from rigtally.quantities.coverage import coverage_factor

Array = NDArray[np.float64]
ROUNDS = 3


def fit_time(trial: Trial, start: Array | None = None) -> RoadResult:
    """Fit a trial on the time road.

    Parameters
    ----------
    trial : Trial
    start : (p,) array, optional
        Where to begin; without it the road finds its own start.

    Raises
    ------
    FitError
        code "no-convergence": no start led to a fit; "too-few-samples": fewer samples than parameters.
    """
    problem = Problem(trial, trial.segments)
    inert = inert_parameters(trial)
    carrier = Carrier(trial, inert)
    if problem.samples <= len(carrier.varying) + 2:
        raise FitError(
            f"{problem.samples} samples cannot determine {len(carrier.varying)} parameters",
            do="use a longer record or a simpler form",
            code="too-few-samples",
        )
    found = _first(problem, carrier, start)
    found = _with_noise(problem, carrier, found)
    return _result(problem, carrier, found, inert)


def inert_parameters(trial: Trial) -> frozenset[str]:
    """Numerator parameters that no input excites: a release has no gain."""
    if all(segment.excitation == "release" for segment in trial.segments):
        return frozenset(trial.form.names[: trial.form.numerator_count])
    return frozenset()


def _first(problem: Problem, carrier: Carrier, start: Array | None) -> Found:
    """White-noise fits: short ones on each view from its starts, the best few on the whole, the best finished."""
    trial = problem.trial
    if start is not None:
        return carrier.minimise(_reduced(problem), start, evaluations=200)
    ends, whole = [], False
    for view, thetas in starts(trial):
        whole = whole or (len(trial.segments) == 1 and view is trial.segments[0])
        close = Problem(replace(trial, segments=(view,)), (view,))
        ends.extend(_near_ends(carrier, close, thetas))
    scored = []
    for theta in ends:
        _, shared, dead = trial.form.split(_normal(trial, theta))
        better, cost = problem.best_numerator(shared, dead)
        if np.isfinite(cost) and np.all(np.isfinite(better)):
            scored.append((cost, better))
    scored.sort(key=lambda pair: pair[0])
    if whole:
        scored = scored[:1]
    best: Found | None = None
    done: list[float] = []
    for cost, theta in scored:
        if len(done) == 3 or any(cost <= other * (1 + 1e-3) for other in done):
            continue
        done.append(cost)
        found = _tried(carrier, problem, theta, 12)
        if found is not None and (best is None or found.cost < best.cost):
            best = found
    if best is None:
        raise FitError(
            "no start led to a fit on the time road",
            do="look at the log with `rigtally inspect`, or try another form",
            code="no-convergence",
        )
    return carrier.minimise(_reduced(problem), best.theta, evaluations=200)


def _near_ends(carrier: Carrier, problem: Problem, thetas: list[Array]) -> list[Array]:
    """Where short fits from the starts end; once the two best starts end at one place, the others are not tried."""
    ends: list[Found] = []
    for theta in thetas:
        found = _tried(carrier, problem, theta, 20)
        if found is None:
            continue
        if ends and abs(found.cost - ends[0].cost) <= 1e-6 * ends[0].cost:
            break
        ends.append(found)
    return [found.theta for found in ends]


def _tried(carrier: Carrier, problem: Problem, theta: Array, evaluations: int) -> Found | None:
    """A fit of at most so many evaluations, None where it leaves the finite numbers."""
    try:
        found = carrier.minimise(_reduced(problem), theta, evaluations=evaluations)
    except (ValueError, np.linalg.LinAlgError, FloatingPointError):
        return None
    return found if np.isfinite(found.cost) else None


def _reduced(problem: Problem) -> Callable[[Array], tuple[Array, Array]]:
    """Residual and Jacobian as the minimiser takes them."""

    def reduced(theta: Array) -> tuple[Array, Array]:
        residual, jacobian, _ = problem.reduced(theta)
        return residual, jacobian

    return reduced


def _with_noise(problem: Problem, carrier: Carrier, found: Found) -> Found:
    """Estimate the noise of the residual and fit again under it, until it settles."""
    stated = problem.trial.noise
    if not isinstance(stated, str):
        problem.noise = [Noise(np.array([1.0]), float(stated))] * problem.outputs

    reduced = _reduced(problem)
    for _ in range(ROUNDS):
        if isinstance(stated, str):
            spent = problem.reduced(found.theta)[2] + len(carrier.varying)
            pieces = problem.residuals(found.theta)
            each = round(spent / problem.outputs)
            problem.noise = [estimate(rows, stated == "estimated", each) for rows in pieces]
            if all(noise.white for noise in problem.noise) and problem.outputs == 1:
                residual = problem.reduced(found.theta)[0]
                return replace(found, cost=float(residual @ residual))
        found = carrier.minimise(reduced, found.theta, evaluations=100)
        if not isinstance(stated, str):
            break
    return found


def covariance_of(jacobian: Array, moves: Array, varying: list[int]) -> tuple[Array, list[int]]:
    """Covariance by QR of the whitened Jacobian; positions of parameters that lie in its null space.

    Parameters
    ----------
    jacobian : (m, p) whitened; moves : (varying, p)
        How the vector moves with each varying parameter.

    Returns
    -------
    (p, p) covariance, NaN in rows and columns that are not determined
    """
    p = jacobian.shape[1]
    out = np.zeros((p, p))
    if not varying:
        return out, []
    table = jacobian @ moves.T
    size = np.linalg.norm(table, axis=0)
    dead = size <= 0
    scaled = table / np.where(dead, 1.0, size)
    _, singular, vt = np.linalg.svd(np.linalg.qr(scaled, mode="r"), full_matrices=False)
    weak = singular <= 1e-9 * max(float(singular.max(initial=0.0)), 1e-300)
    inverse = np.where(weak, 0.0, 1.0 / np.where(weak, 1.0, singular))
    root = (vt.T * inverse) / np.where(dead, 1.0, size)[:, None]
    small = root @ root.T
    lost_in = set(np.flatnonzero(np.any(np.abs(vt[weak]) > 0.1, axis=0))) | set(np.flatnonzero(dead))
    out = np.asarray(moves.T @ small @ moves)
    lost = sorted({int(j) for k in lost_in for j in np.flatnonzero(moves[k])})
    for j in lost:
        out[j, :] = np.nan
        out[:, j] = np.nan
    return out, lost


def _result(problem: Problem, carrier: Carrier, found: Found, inert: frozenset[str]) -> RoadResult:
    """What the road leaves behind."""
    theta = _normal(problem.trial, found.theta)
    _, jacobian, spent = problem.reduced(theta)
    moves = carrier.tie_slopes(theta, carrier.varying)
    covariance, lost = covariance_of(jacobian, moves, carrier.varying)
    share = min(noise.independent_share for noise in problem.noise)
    stated = not isinstance(problem.trial.noise, str)
    dof = np.inf if stated else max((problem.samples - spent - len(carrier.varying)) * share, 1.0)
    names = problem.trial.form.names
    for k, name in enumerate(names):
        if name in inert:
            theta[k] = np.nan
            covariance[k, :] = np.nan
            covariance[:, k] = np.nan
    fitted, values = problem.fitted(np.where(np.isfinite(theta), theta, 1.0))
    warnings = tuple(
        Warning_("not-determined", f"the log does not determine {names[k]}")
        for k in lost
        if names[k] not in inert
    )
    return RoadResult(
        road="time",
        theta=theta,
        covariance=covariance,
        dof=float(dof),
        fitted=fitted,
        cost=found.cost,
        noise=tuple("stated" if stated else "white" if n.white else "coloured" for n in problem.noise),
        effective_samples=tuple(
            float(sum(v[i].sum() for v in problem.valid)) * noise.independent_share
            for i, noise in enumerate(problem.noise)
        ),
        nuisance=values,
        evaluations=found.evaluations,
        converged=found.converged,
        warnings=warnings,
    )


def _normal(trial: Trial, theta: Array) -> Array:
    """ωn positive: (ωn, ζ) and (-ωn, -ζ) are one denominator."""
    out = np.array(theta, dtype=float)
    names = trial.form.names
    if "natural_frequency" in names and out[names.index("natural_frequency")] < 0:
        for name in ("natural_frequency", "damping_ratio"):
            out[names.index(name)] *= -1.0
    return out


def profile(trial: Trial, result: RoadResult, name: str, probability: float = 0.95) -> tuple[float, float]:
    """Interval of one parameter from the profile of the whitened likelihood.

    The parameter is held (lmfit) at values further and further away while all others are fitted again; an end
    lies where the cost has grown by t². An end that lies beyond what the record can resolve is open (±inf, or 0 for
    a positive parameter).
    """
    names = trial.form.names
    k = names.index(name)
    centre = float(result.theta[k])
    problem = Problem(trial, trial.segments)
    carrier = Carrier(trial, inert_parameters(trial))
    start = np.where(np.isfinite(result.theta), result.theta, 1.0)
    found = _with_noise(problem, carrier, Found(start, result.cost, 0, True))
    rise = coverage_factor(probability, result.dof) ** 2
    reduced = _reduced(problem)
    positive = name in ("natural_frequency", "time_constant", "damping_ratio", "dead_time") and centre > 0
    lowest, highest = _resolvable(trial, name)
    u = float(np.sqrt(result.covariance[k, k]))
    if not np.isfinite(u) or u <= 0:
        u = 0.5 * abs(centre) or 1.0
    walk = _Walk(carrier, reduced, name, k, found.cost + rise)
    ends = []
    for sign in (-1.0, 1.0):
        here, before, step, taken = found.theta, found.theta, 1.0, 1.0
        inside, end = 0.0, sign * np.inf
        for _ in range(60):
            value = _away(centre, u, sign * step, positive)
            if positive and (value < lowest if sign < 0 else value > highest):
                end = 0.0 if sign < 0 else np.inf
                break
            cost, there = walk.at(value, here, before)
            if cost >= walk.level:
                for _ in range(8):
                    middle = 0.5 * (inside + step)
                    cost, there = walk.at(_away(centre, u, sign * middle, positive), here, before)
                    if cost >= walk.level:
                        step = middle
                    else:
                        inside, before, here = middle, here, there
                end = _away(centre, u, sign * 0.5 * (inside + step), positive)
                break
            before, here, inside = here, there, step
            taken = (
                min(1.6 * taken, 1.5 * centre / u) if positive and u < 1.5 * centre else min(1.6 * taken, 1.5)
            )
            step += taken
        ends.append(float(end))
    return ends[0], ends[1]


@dataclass(frozen=True)
class _Walk:
    """Along the profile of one parameter: all others fitted again from where the walk was."""

    carrier: Carrier
    reduced: Callable[[Array], tuple[Array, Array]]
    name: str
    place: int
    level: float

    def at(self, value: float, here: Array, before: Array) -> tuple[float, Array]:
        """Lowest cost with the parameter held at `value`, from the last point and from the last two drawn on."""
        guesses = [here]
        moved = here[self.place] / before[self.place] if before[self.place] else 1.0
        if moved > 0 and moved != 1.0 and value / here[self.place] > 0:
            power = np.log(value / here[self.place]) / np.log(moved)
            with np.errstate(all="ignore"):
                drawn = np.where(here * before > 0, here * (here / before) ** power, here)
            if np.all(np.isfinite(drawn)):
                guesses.insert(0, drawn)
        best_cost, best = np.inf, here
        for guess in guesses:
            found = self.carrier.minimise(self.reduced, guess, held={self.name: value}, evaluations=40)
            if found.cost < best_cost:
                best_cost, best = found.cost, found.theta
            if best_cost < self.level:
                break
        return best_cost, best


def _resolvable(trial: Trial, name: str) -> tuple[float, float]:
    """Values of a positive parameter beyond which the record cannot tell one from another: rates of a thousandth
    of a radian in the longest segment, and a thousand times half the sampling rate."""
    slow = min(1e-3 / float(np.ptp(segment.time)) for segment in trial.segments)
    fast = max(1e3 * np.pi / float(np.median(np.diff(segment.time))) for segment in trial.segments)
    if name == "natural_frequency":
        return slow, fast
    if name in ("time_constant", "dead_time"):
        return 1.0 / fast, 1.0 / slow
    return slow / fast, 0.5 * float(np.sqrt(fast / slow))  # two real poles, one at each end, have that ζ


def _away(centre: float, u: float, steps: float, positive: bool) -> float:
    """`steps` standard uncertainties from the centre: on a logarithmic scale for a positive parameter."""
    if positive:
        return float(centre * np.exp(steps * min(u / centre, 1.0)))
    return centre + steps * u
