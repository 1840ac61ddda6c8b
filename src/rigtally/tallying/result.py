"""Tally: what the comparison of bench and model found. Frozen."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from rigtally.estimation.result import Fit
from rigtally.physics.prediction_result import Finding, Prediction
from rigtally.quantities.uncertain import Uncertain
from rigtally.tallying.agreement import Joint
from rigtally.tallying.budget import Budget
from rigtally.tallying.comparison import ResponseComparison, TimeComparison
from rigtally.tallying.decision import Decision
from rigtally.tallying.explanation import Explanation
from rigtally.tallying.reconciliation import Reconciled


@dataclass(frozen=True)
class ParameterAgreement:
    """One parameter, fitted against predicted.

    `agrees` is None where the parameter is not determined or was held. `would_find` is the smallest
    difference in this parameter alone that the joint test finds with 95 % power (NaN if unknown).
    """

    fitted: Uncertain
    predicted: Uncertain
    difference: Uncertain
    en: float
    agrees: bool | None
    would_find: float
    status: str = "compared"

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "fitted": self.fitted.to_dict(),
            "predicted": self.predicted.to_dict(),
            "difference": self.difference.to_dict(),
            "en": self.en if math.isfinite(self.en) else None,
            "agrees": self.agrees,
            "status": self.status,
        }


@dataclass(frozen=True)
class Tally:
    """Bench against model.

    Attributes
    ----------
    verdict : "agrees", "differs" or "undecided"
    reason : str
        Why, in a sentence.
    parameters : mapping of name to ParameterAgreement
    joint : Joint
    explanations : tuple of Explanation
        Best first. Beside the verdict "agrees" they are only what could hide below the noise.
    reconciled : mapping of value name to Reconciled
    within, limits : tuple of Decision
        Against the stated differences that matter, and against stated limits.
    """

    fit: Fit
    prediction: Prediction
    verdict: str
    reason: str
    coverage: float
    rule: str
    parameters: Mapping[str, ParameterAgreement]
    joint: Joint
    explanations: tuple[Explanation, ...]
    reconciled: Mapping[str, Reconciled]
    within: tuple[Decision, ...] = ()
    limits: tuple[Decision, ...] = ()
    power: Mapping[str, float] = field(default_factory=dict)
    budgets: Mapping[str, Budget] = field(default_factory=dict)
    response: ResponseComparison | None = None
    time: tuple[TimeComparison, ...] = ()
    warnings: tuple[Finding, ...] = ()
    seed: int = 0

    @property
    def reconciled_values(self) -> dict[str, Uncertain]:
        """Value name -> the most probable value with its uncertainty, for writing a rig file back."""
        return {name: found.posterior for name, found in self.reconciled.items()}

    def to_dict(self) -> dict[str, Any]:
        """The tally as the JSON contract states it ("rigtally/tally/1")."""
        return {
            "schema": "rigtally/tally/1",
            "fit": self.fit.to_dict(),
            "prediction": self.prediction.to_dict(),
            "agreement": {
                "parameters": {name: found.to_dict() for name, found in self.parameters.items()},
                "joint": {
                    "chi2": _finite(self.joint.chi2),
                    "dof": self.joint.dof,
                    "p": _finite(self.joint.p),
                    "critical": _finite(self.joint.critical),
                    "agrees": self.joint.agrees,
                    "reference": self.joint.reference,
                    "reason": self.joint.reason,
                    "draws": self.joint.draws,
                },
                "verdict": self.verdict,
                "reason": self.reason,
                "coverage": self.coverage,
                "rule": self.rule,
                "would_find": {name: _finite(found.would_find) for name, found in self.parameters.items()},
                "within": {d.name: {**d.to_dict(), "power": _finite(self.power.get(d.name, math.nan))}
                           for d in self.within},
                "limits": {d.name: d.to_dict() for d in self.limits},
            },
            "explanations": [found.to_dict() for found in self.explanations],
            "reconciled": {name: found.to_dict() for name, found in self.reconciled.items()},
            "budget": {name: found.to_dict() for name, found in self.budgets.items()},
            "response": None if self.response is None else self.response.to_dict(),
            "time": [{"record": t.label, "rms": list(t.rms)} for t in self.time],
            "warnings": [finding.to_dict() for finding in self.warnings],
            "seed": self.seed,
        }  # fmt: skip


def _finite(x: float) -> float | None:
    return float(x) if math.isfinite(x) else None
