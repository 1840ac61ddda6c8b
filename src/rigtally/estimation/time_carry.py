"""lmfit carries the time road's parameters: held values, bounds and ties are its; the residual and Jacobian ours."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import lmfit
import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.trial import Trial

Array = NDArray[np.float64]
# a point that the model cannot follow (an overflow): worse than any fit, so that the step is taken back
BEYOND = 1e30


@dataclass(frozen=True)
class Found:
    """Where an iteration ended."""

    theta: Array
    cost: float
    evaluations: int
    converged: bool


class Carrier:
    """The parameters of one trial under safe names; made once, started often."""

    def __init__(self, trial: Trial, inert: frozenset[str] = frozenset()) -> None:
        self.names = trial.form.names
        self.safe = [f"p{k}" for k in range(len(self.names))]
        self.held = dict(trial.held)
        self.ties = {name: self._safe_text(text) for name, text in trial.ties.items()}
        self.ranges = {"dead_time": (0.0, np.inf), **trial.ranges}
        self.fixed = [n in self.held or n in self.ties or n in inert for n in self.names]
        self.varying = [k for k, fixed in enumerate(self.fixed) if not fixed]

    def _safe_text(self, text: str) -> str:
        """An expression with the parameters' safe names (longest names first)."""
        for k in sorted(range(len(self.names)), key=lambda j: -len(self.names[j])):
            text = re.sub(rf"(?<![A-Za-z0-9_]){re.escape(self.names[k])}(?![A-Za-z0-9_])", self.safe[k], text)
        return text

    def parameters(self, theta: Array, held: Mapping[str, float]) -> lmfit.Parameters:
        """lmfit's parameters at θ."""
        out = lmfit.Parameters()
        later = []
        for k, name in enumerate(self.names):
            if name in self.ties and name not in held:
                later.append(k)
                out.add(self.safe[k], value=float(theta[k]), vary=False)
                continue
            low, high = self.ranges.get(name, (-np.inf, np.inf))
            fixed = self.fixed[k] or name in held
            value = held.get(name, self.held.get(name, float(theta[k])))
            if not fixed:
                span = high - low if np.isfinite(high - low) else max(abs(value), 1.0)
                value = min(max(value, low + 1e-9 * span), high - 1e-9 * span)
            out.add(self.safe[k], value=value, vary=not fixed, min=low, max=high)
        for k in later:
            out[self.safe[k]].expr = self.ties[self.names[k]]
        return out

    def vector(self, parameters: lmfit.Parameters) -> Array:
        """θ of lmfit's parameters."""
        return np.array([parameters[name].value for name in self.safe])

    def tie_slopes(self, theta: Array, varying: list[int]) -> Array:
        """(varying, p): how the whole vector moves with each varying parameter, ties followed.

        A tie is any expression in lmfit's syntax, so its slope is a central difference of the expression itself
        (a line of arithmetic); the model's derivatives are exact.
        """
        out = np.zeros((len(varying), len(self.names)))
        for row, k in enumerate(varying):
            out[row, k] = 1.0
        if not self.ties:
            return out
        for row, k in enumerate(varying):
            size = max(abs(theta[k]), 1e-6) * 1e-6
            ends = []
            for sign in (1.0, -1.0):
                moved = theta.copy()
                moved[k] += sign * size
                parameters = self.parameters(moved, {})
                parameters[self.safe[k]].set(value=moved[k], min=-np.inf, max=np.inf)
                ends.append(self.vector(parameters))
            slope = (ends[0] - ends[1]) / (2.0 * size)
            for j, name in enumerate(self.names):
                if name in self.ties:
                    out[row, j] = slope[j]
        return out

    def minimise(
        self,
        reduced: Callable[[Array], tuple[Array, Array]],
        theta: Array,
        *,
        held: Mapping[str, float] | None = None,
        evaluations: int = 80,
    ) -> Found:
        """Levenberg–Marquardt (lmfit's leastsq) from θ with our residual and exact Jacobian."""
        held = held or {}
        parameters = self.parameters(theta, held)
        varying = [k for k in self.varying if self.names[k] not in held]
        if not varying:
            at = self.vector(parameters)
            residual = reduced(at)[0]
            return Found(at, float(residual @ residual), 1, True)
        last: dict[bytes, tuple[Array, Array]] = {}

        def both(current: lmfit.Parameters) -> tuple[Array, Array]:
            at = self.vector(current)
            key = at.tobytes()
            if key not in last:
                last.clear()
                with np.errstate(all="ignore"):
                    residual, jacobian = reduced(at)
                if not (np.all(np.isfinite(residual)) and np.all(np.isfinite(jacobian))):
                    residual = np.full(residual.size, BEYOND)
                    jacobian = np.zeros_like(jacobian)
                last[key] = residual, jacobian
            return last[key]

        def slopes(current: lmfit.Parameters) -> Array:
            jacobian = both(current)[1]
            return np.asarray(jacobian @ self.tie_slopes(self.vector(current), varying).T)

        worker = lmfit.Minimizer(lambda p: both(p)[0], parameters, scale_covar=False, calc_covar=False)
        found = worker.leastsq(Dfun=slopes, max_nfev=evaluations, ftol=1e-13, xtol=1e-11, gtol=0.0)
        at = self.vector(found.params)
        residual = both(found.params)[0]
        return Found(at, float(residual @ residual), int(found.nfev), bool(found.success))
