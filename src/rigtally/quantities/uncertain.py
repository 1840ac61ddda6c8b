"""A value with its standard uncertainty: what every result is made of."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from rigtally.quantities.coverage import coverage_factor


@dataclass(frozen=True)
class Uncertain:
    """A quantity with its standard uncertainty.

    Attributes
    ----------
    value : float
        The best estimate, in `unit`.
    u : float
        Standard uncertainty in `unit`; 0 is "taken as exact", NaN is "not determined".
    unit : str
        SI-coherent unit unless it says otherwise ("" is dimensionless).
    dof : float
        Degrees of freedom of u; inf where u is taken as known.
    distribution : str
        "normal" (scaled t for finite dof), "rectangular", "lognormal" or "exact".
    limits95 : tuple of float or None
        The 95 % interval where it is not value ± k·u (a profile, a Monte Carlo);
        -inf or +inf is an open end.
    """

    value: float
    u: float = 0.0
    unit: str = ""
    dof: float = math.inf
    distribution: str = "normal"
    limits95: tuple[float, float] | None = None

    @property
    def determined(self) -> bool:
        """Whether a standard uncertainty is known."""
        return math.isfinite(self.u) and math.isfinite(self.value)

    def interval(self, probability: float = 0.95) -> tuple[float, float]:
        """The symmetric (or, with `limits95`, profile) coverage interval.

        Where only the 95 % profile is known, another probability scales each
        side by the ratio of the coverage factors.
        """
        if self.limits95 is not None:
            ratio = 1.0
            if probability != 0.95:
                ratio = coverage_factor(probability, self.dof) / coverage_factor(0.95, self.dof)
            low, high = self.limits95
            return self.value - ratio * (self.value - low), self.value + ratio * (high - self.value)
        if self.distribution == "rectangular":
            half = probability * math.sqrt(3.0) * self.u
        elif self.u == 0.0:
            half = 0.0
        else:
            half = coverage_factor(probability, self.dof) * self.u
        return self.value - half, self.value + half

    def expanded(self, probability: float = 0.95) -> float:
        """U: half the width of the coverage interval."""
        low, high = self.interval(probability)
        return 0.5 * (high - low)

    def to_dict(self) -> dict[str, Any]:
        """The quantity as the JSON contract states it (open or unknown ends are null)."""
        low, high = self.interval(0.95)
        return {
            "value": _finite(self.value),
            "unit": self.unit,
            "u": _finite(self.u),
            "interval95": [_finite(low), _finite(high)],
            "dof": _finite(self.dof),
        }


def _finite(number: float) -> float | None:
    return float(number) if math.isfinite(number) else None
