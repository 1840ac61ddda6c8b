"""Decisions against limits: JCGM 106:2012, simple acceptance or guarded by w = U."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from scipy import stats

from rigtally.errors import UsageError
from rigtally.estimation.result import Fit
from rigtally.quantities.uncertain import Uncertain

CAUTION = (
    "A decision against limits does not replace the local code, the type approval or the judgement of a "
    "licensed person where people can be hurt."
)


@dataclass(frozen=True)
class Decision:
    """One quantity against its tolerance interval.

    Attributes
    ----------
    accepted : bool or None
        By the rule; None where the quantity is not determined.
    conformity : float
        Probability that the true value lies inside (JCGM 106:2012, 7).
    risk : float
        Specific risk of the decision taken: of a false acceptance if accepted, of a false
        rejection if rejected (JCGM 106:2012, 9.3.2).
    guard : float
        Width w of the guard band, 0 for the simple rule.
    """

    name: str
    quantity: Uncertain
    lower: float | None
    upper: float | None
    rule: str
    accepted: bool | None
    conformity: float
    risk: float
    guard: float

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "quantity": self.quantity.to_dict(),
            "lower": self.lower,
            "upper": self.upper,
            "rule": self.rule,
            "accepted": self.accepted,
            "conformity": None if math.isnan(self.conformity) else self.conformity,
            "risk": None if math.isnan(self.risk) else self.risk,
            "guard": self.guard,
        }


def conformity_probability(x: Uncertain, lower: float | None, upper: float | None) -> float:
    """Probability that the quantity lies between the limits.

    Normal, or a scaled t for finite degrees of freedom (JCGM 106:2012, 7.2 to 7.4); an asymmetric
    95 % interval gives each side its own u.
    """
    if not x.determined:
        return math.nan
    low = -math.inf if lower is None else lower
    high = math.inf if upper is None else upper
    if x.u == 0.0:
        return float(low <= x.value <= high)
    return max(0.0, _below(x, high) - _below(x, low))


def _below(x: Uncertain, limit: float) -> float:
    if math.isinf(limit):
        return float(limit > 0)
    if x.distribution == "rectangular":
        half = math.sqrt(3.0) * x.u
        return min(1.0, max(0.0, 0.5 * (limit - x.value + half) / half))
    from rigtally.quantities.coverage import coverage_factor

    bottom, top = x.interval(0.95)
    side = (x.value - bottom) if limit < x.value else (top - x.value)
    u = side / coverage_factor(0.95, x.dof)
    z = (limit - x.value) / u if u > 0 else math.copysign(math.inf, limit - x.value)
    return float(stats.norm.cdf(z) if math.isinf(x.dof) else stats.t.cdf(z, x.dof))


def decide(
    name: str, x: Uncertain, lower: float | None, upper: float | None, rule: str, coverage: float = 0.95
) -> Decision:
    """Accept or reject a quantity.

    Parameters
    ----------
    rule : "simple" or "guarded"
        Inside the limits, or inside them by at least w = U (JCGM 106:2012, 8.2 and 8.3.2).
    """
    if rule not in ("simple", "guarded"):
        raise UsageError(
            f"rule = {rule!r} is not known", where="tally", do='choose "simple" or "guarded"', code="unknown-word"
        )
    if not x.determined:
        return Decision(name, x, lower, upper, rule, None, math.nan, math.nan, math.nan)
    guard = x.expanded(coverage) if rule == "guarded" else 0.0
    accepted = (lower is None or x.value >= lower + guard) and (upper is None or x.value <= upper - guard)
    conforms = conformity_probability(x, lower, upper)
    return Decision(
        name, x, lower, upper, rule, accepted, conforms, 1.0 - conforms if accepted else conforms, guard
    )


def decide_limits(
    fit: Fit, limits: Mapping[str, tuple[float | None, float | None, str]], rule: str, coverage: float,
    quantities: Mapping[str, Uncertain] | None = None,
) -> tuple[Decision, ...]:
    """Each stated limit against the fit (with no model needed).

    `quantities` replaces the fit's own parameters, for example by those with their Type B parts.

    Raises
    ------
    UsageError
        "unknown-parameter": the fit has no such quantity.
    """  # fmt: skip
    known = {**fit.derived, **fit.parameters, **(quantities or {})}
    out = []
    for name, (lower, upper, _) in limits.items():
        if name not in known:
            raise UsageError(
                f"a limit is stated for {name!r}, which the fit does not have",
                where="[limits]",
                do="choose one of: " + ", ".join(known),
                code="unknown-parameter",
            )
        out.append(decide(name, known[name], lower, upper, rule, coverage))
    return tuple(out)
