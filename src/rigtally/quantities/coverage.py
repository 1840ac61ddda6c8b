"""Coverage factors (JCGM 100:2008, annex G)."""

from __future__ import annotations

import math
from collections.abc import Iterable
from functools import lru_cache


@lru_cache(maxsize=256)
def coverage_factor(probability: float, dof: float = math.inf) -> float:
    """Student's t (normal for infinite dof) that covers `probability`, two-sided.

    JCGM 100:2008, table G.2. The degrees of freedom need not be whole
    (G.4.1 interpolates). Returns NaN where dof is not above 0.
    """
    from scipy import special

    if not dof > 0:
        return math.nan
    tail = 0.5 * (1.0 + probability)
    if math.isinf(dof):
        return float(special.ndtri(tail))
    return float(special.stdtrit(dof, tail))


def effective_dof(parts: Iterable[tuple[float, float]]) -> float:
    """Welch-Satterthwaite degrees of freedom of a sum (JCGM 100:2008, G.4.1).

    Parameters
    ----------
    parts : iterable of (u, dof)
        Contributions c·u to the combined standard uncertainty, and their dof.
    """
    pairs = list(parts)
    total = sum(u * u for u, _ in pairs)
    spread = sum(u**4 / dof for u, dof in pairs if math.isfinite(dof))
    return total * total / spread if spread > 0 else math.inf
