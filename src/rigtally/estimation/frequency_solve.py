"""Minimise: a damped Gauss-Newton iteration on the projected problem, and lmfit where the user constrains it.

Unconstrained, only the poles and the dead time are iterated (everything else is linear). With held values, ranges
or ties lmfit carries every parameter of the form, in SI, so that its own syntax holds; offsets, end terms and
drift stay in closed form.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import FitError, UsageError
from rigtally.estimation.frequency_columns import Problem
from rigtally.estimation.frequency_projection import Projection, project, project_given
from rigtally.estimation.trial import Trial
from rigtally.forms.named import Form

Array = NDArray[np.float64]

_BROKEN = (FloatingPointError, np.linalg.LinAlgError, ValueError, ZeroDivisionError, OverflowError)


@dataclass(frozen=True)
class Descent:
    """Where an iteration ended: φ (in the problem's time unit), the projection there, and how it went."""

    phi: Array
    projection: Projection
    evaluations: int
    converged: bool

    @property
    def cost(self) -> float:
        """Sum of squares."""
        return self.projection.cost


def try_project(problem: Problem, phi: Array, derivatives: bool = True) -> Projection | None:
    """The projection, or None where φ cannot be evaluated."""
    if not np.all(np.isfinite(phi)):
        return None
    try:
        with np.errstate(over="raise", invalid="raise"):
            found = project(problem, phi, derivatives)
    except _BROKEN:
        return None
    return found if np.isfinite(found.cost) else None


def positive(problem: Problem) -> NDArray[np.bool_]:
    """Which elements of φ must stay positive (dead time: not negative)."""
    names = [*problem.form.shared_names, *(["dead_time"] if problem.form.dead_time else [])]
    return np.array([name in ("natural_frequency", "time_constant") for name in names])


def descend(problem: Problem, phi: Array, *, steps: int = 60, tolerance: float = 1e-10) -> Descent | None:
    """Levenberg-Marquardt from φ; None where the start cannot be evaluated.

    Converged: the step would change the cost by less than `tolerance` of the variance of one number.
    """
    here = try_project(problem, phi)
    if here is None:
        return None
    keep = positive(problem)
    dead = phi.size - 1 if problem.form.dead_time else None
    damping, evaluations = 1e-4, 1
    freedom = max(1.0, problem.numbers - sum(c.size for c in here.linear) - phi.size)
    for _ in range(steps):
        gradient = here.jacobian.T @ here.residual
        normal = here.jacobian.T @ here.jacobian
        size = np.sqrt(np.maximum(np.diagonal(normal), 1e-300))
        scaled = normal / np.outer(size, size)
        variance = max(here.cost / freedom, 1e-300)
        while True:
            step = -np.linalg.solve(scaled + damping * np.eye(phi.size), gradient / size) / size
            predicted = -float(step @ gradient) + 0.0
            if predicted <= tolerance * variance:
                return Descent(phi, here, evaluations, True)
            trial = _limited(phi, step, keep, dead)
            there = try_project(problem, trial)
            evaluations += 1
            if there is not None and there.cost < here.cost:
                gain = here.cost - there.cost
                damping = max(damping * (0.1 if gain > 0.5 * predicted else 1.0), 1e-12)
                phi, here = trial, there
                if gain < 1e-13 * here.cost:
                    return Descent(phi, here, evaluations, True)
                break
            damping = max(damping, 1e-6) * 8.0
            if damping > 1e10:
                # nothing below this point to within the digits: the gradient decides whether it is a minimum
                return Descent(phi, here, evaluations, predicted < 1e-2 * variance)
    return Descent(phi, here, evaluations, False)


def _limited(phi: Array, step: Array, keep: NDArray[np.bool_], dead: int | None) -> Array:
    """The step, with positive parameters changed by a factor of at most 3 and the dead time at least 0."""
    trial = phi + step
    trial[keep] = np.clip(trial[keep], phi[keep] / 3.0, phi[keep] * 3.0)
    if dead is not None:
        trial[dead] = max(0.0, trial[dead])
    return trial


@dataclass(frozen=True)
class Constrained:
    """lmfit's answer: θ (SI), dθ/dfree (p, free), free names, those at a bound."""

    theta: Array
    projection: Projection
    chain: Array
    at_limit: tuple[str, ...]
    evaluations: int
    converged: bool


def lmfit_name(name: str) -> str:
    """A parameter's name as lmfit can hold it ("gain(speed, volts)" is no Python name)."""
    return "".join(c if c.isalnum() or c == "_" else "_" for c in name)


def constrained(problem: Problem, theta: Array, trial: Trial) -> Constrained:
    """Minimise over θ (SI) with the user's held values, ranges and ties, by lmfit.

    Raises
    ------
    UsageError
        code "bad-parameter" (a name that the form has not), "bad-tie".
    FitError
        code "no-convergence".
    """
    import lmfit

    parameters, names = lmfit_parameters(problem.form, theta, trial)
    powers = problem.scale**problem.form.time_powers

    def values(p: Any) -> Array:
        return np.array([p[name].value for name in names], dtype=float)

    def residual(p: Any) -> Array:
        try:
            return project_given(problem, values(p) / powers).residual
        except _BROKEN:
            return np.full(_row_count(problem), 1e30)

    def derivative(p: Any) -> Array:
        chain = chain_of(p, names)
        return (project_given(problem, values(p) / powers).jacobian / powers) @ chain

    free = [name for name in names if parameters[name].vary and not parameters[name].expr]
    if free:
        mini = lmfit.Minimizer(residual, parameters)
        found = mini.minimize(
            method="leastsq", Dfun=derivative, col_deriv=0, ftol=1e-13, xtol=1e-10, max_nfev=400
        )
        parameters = found.params
        evaluations, converged = int(found.nfev), bool(found.success)
    else:
        evaluations, converged = 1, True
    best = values(parameters)
    at_limit = tuple(
        own
        for own, name in zip(problem.form.names, names, strict=True)
        if parameters[name].vary
        and any(
            np.isfinite(edge) and abs(best[names.index(name)] - edge) <= 1e-6 * max(abs(edge), 1e-300)
            for edge in (parameters[name].min, parameters[name].max)
        )
    )
    try:
        projection = project_given(problem, best / powers)
    except _BROKEN:
        raise FitError(
            "the fit ran to values that cannot be evaluated",
            do="check the held values and ranges, or leave them out",
            code="no-convergence",
        ) from None
    return Constrained(best, projection, chain_of(parameters, names), at_limit, evaluations, converged)


def _row_count(problem: Problem) -> int:
    rows = sum(b.count if b.filters is not None else 2 * b.index.size for b in problem.bins)
    return rows * len(problem.form.outputs)


def lmfit_parameters(form: Form, theta: Array, trial: Trial) -> tuple[Any, list[str]]:
    """lmfit's parameters with the user's held values, ranges and ties, and their names in the order of θ."""
    import lmfit

    names = [lmfit_name(name) for name in form.names]
    known = set(form.names)
    for name in [*trial.held, *trial.ranges, *trial.ties]:
        if name not in known:
            raise UsageError(
                f"{form.name} has no parameter {name!r}",
                do="its parameters are: " + ", ".join(form.names),
                code="bad-parameter",
            )
    parameters = lmfit.Parameters()
    for own, name, value in zip(form.names, names, theta, strict=True):
        low, high = trial.ranges.get(own, (-np.inf, np.inf))
        if own in ("natural_frequency", "time_constant"):
            low = max(low, 1e-12 * abs(value))
        if own == "dead_time":
            low = max(low, 0.0)
        if own in trial.held:
            parameters.add(name, value=trial.held[own], vary=False)
            continue
        start = float(np.clip(value, low, high))
        span = high - low if np.isfinite(high - low) else max(abs(start), 1e-3)
        if start == low:
            start = low + 1e-3 * span
        if start == high:
            start = high - 1e-3 * span
        parameters.add(name, value=start, min=low, max=high)
    for own, expression in trial.ties.items():
        spelled = expression
        for long, short in zip(form.names, names, strict=True):
            spelled = spelled.replace(long, short) if long != short else spelled
        try:
            parameters[lmfit_name(own)].set(expr=spelled)
            parameters.update_constraints()
        except Exception as fault:  # asteval raises many kinds
            raise UsageError(
                f"the tie {own}={expression!r} cannot be read ({type(fault).__name__})",
                do="write it in the names of the other parameters: " + ", ".join(form.names),
                code="bad-tie",
            ) from None
    return parameters, names


def chain_of(parameters: Any, names: list[str]) -> Array:
    """∂θ/∂(free parameters), (p, free).

    One or zero but for ties; a tie's expression is the user's own, and is differentiated by central differences
    of the expression alone (the model's derivative is exact).
    """
    free = [name for name in names if parameters[name].vary and not parameters[name].expr]
    chain = np.zeros((len(names), len(free)))
    for column, name in enumerate(free):
        chain[names.index(name), column] = 1.0
    tied = [name for name in names if parameters[name].expr]
    if not tied:
        return chain
    for column, name in enumerate(free):
        value = parameters[name].value
        step = 1e-6 * max(abs(value), 1e-12)
        sides = []
        for sign in (1.0, -1.0):
            moved = parameters.copy()
            moved[name].min, moved[name].max = -np.inf, np.inf
            moved[name].value = value + sign * step
            moved.update_constraints()
            sides.append(np.array([moved[t].value for t in tied], dtype=float))
        chain[[names.index(t) for t in tied], column] = (sides[0] - sides[1]) / (2.0 * step)
    return chain
