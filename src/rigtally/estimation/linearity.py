"""Do the fitted parameters move with the size or the direction of the excitation?

Fits of single events are compared: each parameter against size and direction, weighted by the fits' own u,
widened to the scatter from event to event that is there.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from rigtally.errors import UsageError
from rigtally.estimation.result import Fit, Warning_
from rigtally.records.linearity import Movement, movement_findings, movement_of

# fits from which a trend with size and a difference of direction can both be told from scatter
FEWEST = 3


@dataclass(frozen=True)
class EventComparison:
    """What several fits of one rig, one for each event, say about its linearity.

    Attributes
    ----------
    sizes : (smallest, largest)
        Moduli of the events' sizes, in which a verdict on the mean holds.
    movements : tuple of Movement
        One for each parameter that at least three fits determine.
    warnings : tuple of Warning_
        "not-linear", a sentence for each parameter that moves.
    """

    sizes: tuple[float, float]
    movements: tuple[Movement, ...]
    warnings: tuple[Warning_, ...]

    @property
    def linear(self) -> bool:
        """Whether nothing was found to move."""
        return not self.warnings

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "sizes": list(self.sizes),
            "movements": [movement.to_dict() for movement in self.movements],
            "warnings": [warning.to_dict() for warning in self.warnings],
        }


def compare_events(fits: Sequence[Fit], sizes: Sequence[float]) -> EventComparison:
    """Compare fits of single events.

    Parameters
    ----------
    fits : sequence of Fit
        Of one form, one for each event, at least three.
    sizes : sequence of float
        Signed size of each event (step height, pulse area), SI.

    Raises
    ------
    UsageError
        code "bad-comparison": fewer than three fits, other numbers of sizes, several forms, a size of zero.
    """
    if len(fits) < FEWEST or len(fits) != len(sizes):
        raise UsageError(
            f"{len(fits)} fits and {len(sizes)} sizes cannot be compared",
            do="give one size for each of three fits or more",
            code="bad-comparison",
        )
    if len({fit.names for fit in fits}) > 1:
        raise UsageError("fits of several forms cannot be compared", do="fit one form", code="bad-comparison")
    if not all(math.isfinite(size) and size != 0.0 for size in sizes):
        raise UsageError("an event has no size", do="leave it out of the comparison", code="bad-comparison")
    moduli = [abs(size) for size in sizes]
    directions = [1 if size > 0 else -1 for size in sizes]
    names = [name for name in fits[0].names if name not in fits[0].held]
    movements = []
    for name in names:
        told = [
            k for k, fit in enumerate(fits) if fit.parameters[name].determined and fit.parameters[name].u > 0
        ]
        if len(told) >= FEWEST:
            movements.append(
                movement_of(
                    name,
                    [moduli[k] for k in told],
                    [directions[k] for k in told],
                    [fits[k].parameters[name] for k in told],
                    tested=len(names),
                )
            )
    limits = (min(moduli), max(moduli))
    sentences = [text for movement in movements for text in movement_findings("fit", movement, limits)]
    warnings = tuple(Warning_("not-linear", text) for text in sentences)
    return EventComparison(limits, tuple(movements), warnings)
