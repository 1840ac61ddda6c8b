"""Linearity before trust: do the features of several steps move with their size, or with their direction?

For each answering channel and feature: y = a + b·x + c·d with x the size of the step (its modulus, centred
and divided by its range) and d = ±½ its direction, weighted by the features' own u widened to the scatter
that is there. b is then how far the feature moves over the range of sizes, c the difference up against down.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.coverage import coverage_factor
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.event import Event

Array = NDArray[np.float64]

FEATURES = ("gain", "transition_duration", "overshoot", "peak_time")
# both tests of all four features of a channel together: one false finding in a hundred
FALSE_ALARM = 0.01


@dataclass(frozen=True)
class Movement:
    """How one feature moves.

    `with_size`: change over the range of sizes; `with_direction`: upwards less downwards; NaN value where the
    events do not tell. `mean` is that of all events.
    """

    feature: str
    mean: Uncertain
    with_size: Uncertain
    with_direction: Uncertain
    size_matters: bool
    direction_matters: bool

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "feature": self.feature,
            "mean": self.mean.to_dict(),
            "with_size": self.with_size.to_dict(),
            "with_direction": self.with_direction.to_dict(),
            "size_matters": self.size_matters,
            "direction_matters": self.direction_matters,
        }


@dataclass(frozen=True)
class Linearity:
    """The comparison for one answering channel.

    Attributes
    ----------
    channel : str
    sizes : (smallest, largest)
        Range of step sizes (modulus) in which it was made, unit of the driving channel.
    movements : tuple of Movement
    hysteresis : Uncertain
        Level after upward steps less level after downward steps at the same input level: the mean width,
        with u; NaN where no input level is reached from both sides.
    findings : tuple of str
        Sentences for what moves.
    """

    channel: str
    sizes: tuple[float, float]
    movements: tuple[Movement, ...]
    hysteresis: Uncertain
    findings: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "channel": self.channel,
            "sizes": list(self.sizes),
            "movements": [movement.to_dict() for movement in self.movements],
            "hysteresis": self.hysteresis.to_dict(),
            "findings": list(self.findings),
        }


def compare_amplitudes(events: Sequence[Event]) -> tuple[Linearity, ...]:
    """Compare the answers to several steps, one Linearity for each channel that answers to three or more.

    Events other than steps are left out.
    """
    steps = [event for event in events if event.kind == "step" and math.isfinite(event.size)]
    names = dict.fromkeys(name for event in steps for name in event.responses)
    out = []
    for name in names:
        answered = [event for event in steps if name in event.responses]
        if len(answered) >= 3:
            out.append(_compare(name, answered))
    return tuple(out)


def _compare(name: str, events: list[Event]) -> Linearity:
    sizes = np.array([abs(event.size) for event in events])
    movements = []
    for feature in FEATURES:
        found = [(event, value) for event in events if (value := _feature(event, name, feature)) is not None]
        if len(found) >= 3:
            sizes_found = [abs(event.size) for event, _ in found]
            movements.append(
                movement_of(feature, sizes_found, [e.direction for e, _ in found], [v for _, v in found])
            )
    hysteresis = _hysteresis(name, events)
    limits = (float(sizes.min()), float(sizes.max()))
    findings = [text for movement in movements for text in movement_findings(name, movement, limits)]
    if hysteresis.determined and abs(hysteresis.value) > coverage_factor(0.99, hysteresis.dof) * hysteresis.u:
        width = _pair(hysteresis)
        findings.append(
            f"{name}: the same input is answered {width} higher after a rise than after a fall "
            "(hysteresis or dead band)"
        )
    return Linearity(name, limits, tuple(movements), hysteresis, tuple(findings))


def _feature(event: Event, name: str, feature: str) -> Uncertain | None:
    features = event.responses[name]
    if feature == "gain":
        answer = features["amplitude"]
        u_size = math.hypot(_known(event.level_before.u), _known(event.level_after.u))
        gain = answer.value / event.size
        return Uncertain(gain, abs(gain) * math.hypot(answer.u / answer.value, u_size / event.size))
    value = features.get(feature)
    if value is None or not value.determined or value.limits95 is not None or value.u <= 0.0:
        return None
    return value


def _known(u: float) -> float:
    return u if math.isfinite(u) else 0.0


def movement_of(
    feature: str,
    sizes: Sequence[float],
    directions: Sequence[int],
    values: Sequence[Uncertain],
    tested: int = len(FEATURES),
) -> Movement:
    """How one feature moves with size and direction.

    Parameters
    ----------
    sizes : sequence of float
        Moduli, one for each value.
    directions : sequence of int
        +1 or −1.
    values : sequence of Uncertain
        With u > 0.
    tested : int
        Features that are tested beside this one, among which the chance of a false finding is shared.
    """
    size = np.array(sizes, dtype=float)
    direction = 0.5 * np.array(directions, dtype=float)
    y = np.array([value.value for value in values])
    u = np.array([value.u for value in values])
    unit = values[0].unit
    columns, names = [np.ones_like(y)], ["mean"]
    extent = float(np.ptp(size))
    if extent > 0.05 * float(size.max()):
        columns.append((size - size.mean()) / extent)
        names.append("size")
    if np.ptp(direction) > 0 and y.size > len(columns) + 1:
        columns.append(direction - direction.mean())
        names.append("direction")
    design = np.stack(columns, axis=1)
    rank = int(np.linalg.matrix_rank(design))
    unknown = Uncertain(math.nan, math.nan, unit)
    if rank < len(columns) or y.size <= len(columns):
        mean = Uncertain(float(y.mean()), float(y.std(ddof=1) / math.sqrt(y.size)), unit, dof=y.size - 1)
        return Movement(feature, mean, unknown, unknown, False, False)
    weighted = design / u[:, None]
    covariance = np.linalg.inv(weighted.T @ weighted)
    solved = covariance @ (weighted.T @ (y / u))
    dof = y.size - len(columns)
    # u of each feature is a lower limit: scatter from event to event beyond it widens all
    widening = max(float(np.sum(((y - design @ solved) / u) ** 2)) / dof, 1.0)
    covariance = covariance * widening
    found = {
        key: Uncertain(float(solved[k]), math.sqrt(float(covariance[k, k])), unit, dof=dof)
        for k, key in enumerate(names)
    }
    limit = coverage_factor(1.0 - FALSE_ALARM / (2 * tested), dof)

    def matters(key: str) -> bool:
        return key in found and abs(found[key].value) > limit * found[key].u

    return Movement(
        feature,
        found["mean"],
        found.get("size", unknown),
        found.get("direction", unknown),
        matters("size"),
        matters("direction"),
    )


def movement_findings(name: str, movement: Movement, limits: tuple[float, float]) -> list[str]:
    """Sentences for a movement that matters, with its amount, its share and the range of sizes."""
    out = []
    what = movement.feature.replace("_", " ")
    mean = movement.mean.value
    if movement.size_matters:
        change = movement.with_size
        share = f" ({100 * change.value / mean:+.2g} %)" if mean else ""
        out.append(
            f"{name}: the {what} changes by {_pair(change)}"
            + f"{share} between steps of {limits[0]:.4g} and {limits[1]:.4g}"
        )
    if movement.direction_matters:
        change = movement.with_direction
        share = f" ({100 * change.value / mean:+.2g} %)" if mean else ""
        out.append(
            f"{name}: the {what} differs by {_pair(change)}" + f"{share} between upward and downward steps"
        )
    return out


def _pair(value: Uncertain) -> str:
    return f"{value.value:.3g} ± {value.expanded():.1g} {value.unit}".rstrip()


def _hysteresis(name: str, events: list[Event]) -> Uncertain:
    """Mean difference of the answer's level at input levels that are reached both by a rise and by a fall."""
    unit = events[0].responses[name]["level_after"].unit
    reached: list[tuple[float, int, Uncertain]] = [
        (event.level_after.value, event.direction, event.responses[name]["level_after"])
        for event in events
        if math.isfinite(event.level_after.value)
    ]
    slack = 0.02 * max(abs(event.size) for event in events)
    differences, variances = [], []
    left = sorted(reached, key=lambda entry: entry[0])
    while left:
        group = [entry for entry in left if entry[0] - left[0][0] <= slack]
        left = left[len(group) :]
        up = [entry[2] for entry in group if entry[1] > 0]
        down = [entry[2] for entry in group if entry[1] < 0]
        if up and down:
            differences.append(float(np.mean([v.value for v in up]) - np.mean([v.value for v in down])))
            variances.append(
                sum(v.u**2 for v in up) / len(up) ** 2 + sum(v.u**2 for v in down) / len(down) ** 2
            )
    if not differences:
        return Uncertain(math.nan, math.nan, unit)
    u = math.sqrt(sum(variances)) / len(differences)
    if len(differences) >= 3:
        u = max(u, float(np.std(differences, ddof=1)) / math.sqrt(len(differences)))
    return Uncertain(float(np.mean(differences)), u, unit, dof=max(len(differences) - 1.0, 1.0))
