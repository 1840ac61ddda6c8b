"""The door of the room: set a fit against a prediction."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from rigtally.errors import UsageError
from rigtally.estimation.result import Fit
from rigtally.physics.prediction_result import Finding, Prediction
from rigtally.physics.rig import Rig
from rigtally.quantities.uncertain import Uncertain
from rigtally.tallying.agreement import (
    Joint,
    Metric,
    en_number,
    joint_test,
    power_of,
    smallest_found,
    with_bend,
)
from rigtally.tallying.budget import Budget, budgets
from rigtally.tallying.comparison import compare_responses, compare_time
from rigtally.tallying.decision import CAUTION, Decision, decide, decide_limits
from rigtally.tallying.difference import Difference, difference, systematic_effects
from rigtally.tallying.explanation import explain
from rigtally.tallying.reconciliation import reconcile
from rigtally.tallying.result import ParameterAgreement, Tally

NEEDED_POWER = 0.8


def tally(
    fit: Fit,
    prediction: Prediction,
    *,
    rig: Rig | None = None,
    within: Mapping[str, float] | None = None,
    coverage: float | None = None,
    rule: str | None = None,
    systematic: Sequence[Mapping[str, Any]] | None = None,
    seed: int = 0,
    monte_carlo: int = 40_000,
) -> Tally:
    """Do bench and model tally, and if not, which element is off?

    Parameters
    ----------
    rig : Rig, optional
        Its [agreement], [limits] and [[systematic]] tables apply where nothing is stated here.
    within : mapping of parameter to relative difference that matters, optional
    coverage : float, optional
        Of the joint test (0.95).
    rule : "simple" or "guarded", optional
        Decision rule for `within` and limits (JCGM 106).
    systematic : sequence of mappings, optional
        {"of": "gain" or "time", "channel": …, "value": Uncertain, "source": …}, relative.
    monte_carlo : int
        Draws of the reference distribution where χ² would not do; 0 for none.

    Raises
    ------
    UsageError
        Nothing to compare, other units, or names that do not exist.
    """
    said = dict(rig.agreement) if rig is not None else {}
    share = float(coverage if coverage is not None else said.get("coverage", 0.95))
    if not 0.5 <= share < 1.0:
        raise UsageError(f"coverage = {share} is not a probability from 0.5 to 1", where="tally",
                         do="write coverage=0.95", code="bad-value")  # fmt: skip
    the_rule = str(rule or said.get("rule", "simple"))
    matters = dict(within if within is not None else said.get("within", {}))
    parts = tuple(systematic if systematic is not None else (rig.systematic if rig is not None else ()))
    parts = _under_form_names(parts, rig, (*fit.form.outputs, *fit.form.inputs))
    limits = dict(rig.limits) if rig is not None else {}

    d = difference(fit, prediction, parts)
    if monte_carlo:
        d = with_bend(d, prediction, np.random.default_rng(seed + 1))
    found = budgets(fit, parts)
    metric, joint = joint_test(d, prediction, share, monte_carlo, np.random.default_rng(seed))
    parameters = _parameters(fit, prediction, d, metric, joint, found)
    decisions, power = _within(matters, d, metric, joint, parameters, the_rule, share)
    verdict, reason = _verdict(d, joint, power, share)
    explained = explain(d, prediction, metric)
    reconciled = reconcile(d, prediction)
    total = _with_systematic(fit, parts)
    warnings = _warnings(verdict, d, explained, reconciled.converged, bool(matters or limits))
    return Tally(
        fit=fit,
        prediction=prediction,
        verdict=verdict,
        reason=reason,
        coverage=share,
        rule=the_rule,
        parameters=parameters,
        joint=joint,
        explanations=explained,
        reconciled=reconciled.values,
        within=decisions,
        limits=decide_limits(fit, limits, the_rule, share, {n: b.quantity for n, b in found.items()}),
        power=power,
        budgets=found,
        response=compare_responses(fit, prediction, total, share),
        time=compare_time(fit, prediction),
        warnings=warnings,
        seed=seed,
    )


def _under_form_names(
    parts: Sequence[Mapping[str, Any]], rig: Rig | None, known: Sequence[str]
) -> tuple[Mapping[str, Any], ...]:
    """Systematic parts with the names of readings and drives where the fit bears those, not the log's columns."""
    if rig is None:
        return tuple(parts)
    names = {x.channel: x.name for x in rig.readings if x.channel}
    names.update({x.channel: x.name for x in rig.drives if x.channel})
    out = []
    for part in parts:
        channel = str(part.get("channel", ""))
        out.append(part if channel in known else {**part, "channel": names.get(channel, channel)})
    return tuple(out)


def _with_systematic(fit: Fit, parts: Sequence[Mapping[str, Any]]) -> Any:
    theta = np.array([fit.parameters[name].value for name in fit.names])
    effects = systematic_effects(fit.form, parts) * theta[:, None]
    u = np.array([p["value"].u for p in parts], dtype=float)
    return np.asarray(fit.covariance) + (effects * u**2) @ effects.T


def _parameters(
    fit: Fit, prediction: Prediction, d: Difference, metric: Metric, joint: Joint, found: Mapping[str, Budget]
) -> dict[str, ParameterAgreement]:
    smallest = dict(zip(d.names, smallest_found(metric, joint), strict=True)) if d.names else {}
    spread = np.sqrt(np.clip(np.diag(d.covariance), 0.0, None)) if d.names else np.zeros(0)
    out: dict[str, ParameterAgreement] = {}
    for name in prediction.names:
        if name not in fit.names:
            continue
        fitted = found[name].quantity if name in found else fit.parameters[name]
        predicted = prediction.parameters[name]
        gap = fitted.value - predicted.value
        if name not in d.names:
            status = "held" if name in d.held else "not-determined"
            unknown = Uncertain(gap, math.nan, predicted.unit)
            out[name] = ParameterAgreement(fitted, predicted, unknown, math.nan, None, math.nan, status)
            continue
        k = d.names.index(name)
        en = en_number(gap, fitted.expanded(), predicted.expanded())
        if math.isnan(en):
            tiny = abs(gap) <= 1e-10 * d.scale[k]
            agrees: bool | None = tiny if fitted.u == 0.0 == predicted.u else None
        else:
            agrees = abs(en) <= 1.0
        out[name] = ParameterAgreement(
            fitted, predicted, Uncertain(gap, float(spread[k]), predicted.unit), en, agrees, float(smallest[name])
        )
    return out


def _within(
    matters: Mapping[str, float],
    d: Difference,
    metric: Metric,
    joint: Joint,
    parameters: Mapping[str, ParameterAgreement],
    rule: str,
    coverage: float,
) -> tuple[tuple[Decision, ...], dict[str, float]]:
    """Each difference that matters: whether it is kept, and whether it would have been found."""
    decisions = []
    power: dict[str, float] = {}
    for name, relative in matters.items():
        if name not in parameters:
            raise UsageError(
                f"`within` is stated for {name!r}, which is not compared", where="[agreement] within",
                do="choose one of: " + ", ".join(parameters), code="unknown-parameter",
            )  # fmt: skip
        size = relative * abs(parameters[name].predicted.value)
        decisions.append(decide(name, parameters[name].difference, -size, size, rule, coverage))
        if name in d.names and metric.rank:
            alone = np.zeros(len(d.names))
            alone[d.names.index(name)] = size
            power[name] = float(power_of(metric, joint, alone)[d.names.index(name)])
        else:
            power[name] = math.nan
    return tuple(decisions), power


def _verdict(d: Difference, joint: Joint, power: Mapping[str, float], coverage: float) -> tuple[str, str]:
    """The joint test decides; what could not have been seen is not called agreement."""
    if not d.names:
        return "undecided", "no compared parameter is determined by the log"
    if joint.agrees is False:
        return "differs", (
            f"the joint distance {joint.chi2:.3g} exceeds {joint.critical:.3g}, which the stated tolerances "
            f"and the fit's noise keep in {100 * coverage:.3g} % of cases"
        )
    if d.undetermined:
        return "undecided", "the log does not determine " + ", ".join(d.undetermined)
    weak = [name for name, chance in power.items() if not chance >= NEEDED_POWER]
    if weak:
        return "undecided", (
            "the comparison could not have shown the stated difference with 80 % power in " + ", ".join(weak)
        )
    return "agrees", (
        f"the joint distance {joint.chi2:.3g} lies within {joint.critical:.3g}, which the stated tolerances and "
        f"the fit's noise keep in {100 * coverage:.3g} % of cases"
    )


def _warnings(
    verdict: str, d: Difference, explained: Sequence[Any], converged: bool, decided: bool
) -> tuple[Finding, ...]:
    out = []
    if verdict == "differs" and not any(x.sufficient for x in explained):
        out.append(
            Finding(
                "not-explained",
                "no single value and no pair of values of the rig explains the difference: look for what the "
                "rig file does not have (a missing element, a wrong node, the log's units, its clock)",
            )
        )
    if d.held:
        out.append(Finding("held", "held in the fit, so not compared: " + ", ".join(d.held), len(d.held)))
    if not converged:
        out.append(Finding("not-reconciled", "the reconciled values did not settle; take them as a hint only"))
    if decided:
        out.append(Finding("caution", CAUTION))
    return tuple(out)



