"""The uncertainty budget of a fitted quantity: Type A from the fit, Type B as stated (JCGM 100:2008)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.result import Fit
from rigtally.quantities.propagation import propagate
from rigtally.quantities.uncertain import Uncertain
from rigtally.tallying.difference import systematic_effects

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Line:
    """One line of a budget: where it comes from, its own u, and what it adds to the result."""

    source: str
    evaluation: str
    distribution: str
    u: float
    sensitivity: float
    contribution: float
    share: float
    dof: float

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "source": self.source,
            "type": self.evaluation,
            "distribution": self.distribution,
            "u": self.u,
            "sensitivity": self.sensitivity,
            "contribution": self.contribution,
            "share": None if np.isnan(self.share) else self.share,
            "dof": None if np.isinf(self.dof) or np.isnan(self.dof) else self.dof,
        }


@dataclass(frozen=True)
class Budget:
    """A fitted quantity with all its parts: the combined result and its lines."""

    quantity: Uncertain
    lines: tuple[Line, ...]

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {"quantity": self.quantity.to_dict(), "lines": [line.to_dict() for line in self.lines]}


def budgets(fit: Fit, systematic: Sequence[Mapping[str, Any]]) -> dict[str, Budget]:
    """Budget of each determined parameter: y_k = θ_k / (1 + Σ effect·e), combined by `propagate`.

    Without a systematic part the fit's own quantity (with its own interval) stands.
    """
    effects = systematic_effects(fit.form, systematic)
    parts: list[Uncertain] = [entry["value"] for entry in systematic]
    out: dict[str, Budget] = {}
    for k, name in enumerate(fit.names):
        own = fit.parameters[name]
        if not own.determined:
            continue
        row = effects[k]

        def corrected(x: Sequence[Any], row: Array = row) -> Any:
            total = 1.0
            for effect, error in zip(row, x[1:], strict=True):
                total = total + effect * error
            return x[0] / total

        found = propagate(corrected, [own, *parts])
        combined = Uncertain(float(found.value[0]), float(found.u[0]), own.unit, float(found.dof[0]))
        if not np.any(row):
            combined = own
        elif own.limits95 is not None:
            combined = replace(combined, limits95=_widened(own, combined))
        lines = [
            Line(
                "fit of the log" if n == 0 else str(systematic[n - 1].get("source") or _label(systematic[n - 1])),
                "A" if n == 0 else "B",
                x.distribution,
                x.u,
                float(slope),
                float(abs(slope) * x.u),
                float(share),
                x.dof,
            )
            for n, (x, slope, share) in enumerate(
                zip([own, *parts], found.jacobian[0], found.shares[0], strict=True)
            )
            if n == 0 or row[n - 1]
        ]
        out[name] = Budget(combined, tuple(lines))
    return out


def _label(entry: Mapping[str, Any]) -> str:
    return "time base" if entry["of"] == "time" else f"gain of {entry['channel']}"


def _widened(own: Uncertain, combined: Uncertain) -> tuple[float, float]:
    """The fit's own asymmetric interval, each side widened by what the Type B parts add."""
    low, high = own.interval(0.95)
    scale = combined.value / own.value if own.value else 1.0
    extra = combined.u**2 - (scale * own.u) ** 2
    more = 1.959963984540054**2 * max(0.0, extra)
    below = float(np.hypot(scale * (own.value - low), np.sqrt(more)))
    above = float(np.hypot(scale * (high - own.value), np.sqrt(more)))
    return combined.value - below, combined.value + above
