"""Monte Carlo of a rig's tolerances (JCGM 101), set beside the first-order result."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.elements import FRICTION_MODEL
from rigtally.physics.line_model import LineModel, Solved
from rigtally.physics.prediction_result import Finding
from rigtally.quantities.propagation import propagate
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
LARGE = 0.2  # relative u of a positive quantity above which it is drawn log-normal
SIGNED = ("ratio", "temperature")  # values that may be negative


def drawn_inputs(model: LineModel) -> tuple[tuple[Uncertain, ...], list[str]]:
    """The inputs as they are drawn, and the names of those that are drawn log-normal."""
    out: list[Uncertain] = []
    changed: list[str] = []
    for name, x in zip(model.values.input_names, model.values.inputs, strict=True):
        key = model.values.label(name)[1]
        positive = key not in SIGNED and key != FRICTION_MODEL and x.value > 0
        if positive and x.u > LARGE * x.value and x.distribution != "lognormal":
            out.append(replace(x, distribution="lognormal"))
            changed.append(name)
        else:
            out.append(x)
    return tuple(out), changed


def monte_carlo_parameters(
    model: LineModel,
    parameters: Mapping[str, Uncertain],
    solved: Solved,
    draws: int,
    seed: int,
    progress: Callable[[int, int], None] | None,
) -> tuple[dict[str, Uncertain], list[Finding]]:
    """The parameters with the Monte Carlo 95 % interval, and what the comparison says."""
    inputs, changed = drawn_inputs(model)

    def function(x: Sequence[Any]) -> Any:
        columns = np.array(x, dtype=float)
        if columns.ndim == 1:
            return model.evaluate(columns)
        return model.evaluate_many(columns.T).T

    found = propagate(
        function,
        inputs,
        jacobian=solved.sensitivity,
        monte_carlo=draws,
        rng=np.random.default_rng(seed),
        progress=progress,
    )
    drawn = found.monte_carlo
    out = dict(parameters)
    warnings: list[Finding] = []
    if drawn is None:
        return out, warnings
    if changed:
        warnings.append(
            Finding(
                "drawn-log-normal",
                "drawn log-normal, since u is over 20 % of the value: " + ", ".join(changed),
                len(changed),
            )
        )
    for k, (name, first) in enumerate(parameters.items()):
        if not drawn.u[k] > 0:
            continue
        out[name] = replace(first, limits95=(float(drawn.low[k]), float(drawn.high[k])))
        if not drawn.agrees[k]:
            low, high = first.interval()
            warnings.append(
                Finding(
                    "first-order-differs",
                    f"{name}: the first-order 95 % interval [{low:.5g}, {high:.5g}] and the Monte Carlo one "
                    f"[{drawn.low[k]:.5g}, {drawn.high[k]:.5g}] differ by more than {drawn.tolerance[k]:.2g} "
                    f"(JCGM 101, clause 8, two digits); u is {first.u:.3g} and {drawn.u[k]:.3g}",
                    float(drawn.u[k]),
                )
            )
    if not drawn.stable:
        warnings.append(
            Finding(
                "draws-used-up",
                f"the Monte Carlo was not yet stable to two digits after {drawn.draws} draws",
                drawn.draws,
            )
        )
    if drawn.lost:
        warnings.append(
            Finding("draws-lost", f"{drawn.lost} of {drawn.draws} draws made no such rig", drawn.lost)
        )
    return out, warnings
