"""Parameters that the data hardly determine: asymmetric intervals, open ends, and what is determined instead."""

from __future__ import annotations

import importlib
import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from rigtally.errors import RigtallyError
from rigtally.estimation.result import RoadResult, Warning_
from rigtally.estimation.trial import Trial
from rigtally.quantities.uncertain import Uncertain

_POSITIVE = ("natural_frequency", "time_constant", "damping_ratio")


def doubtful(trial: Trial, parameters: Mapping[str, Uncertain], share: float) -> list[str]:
    """Positive parameters whose u is more than `share` of them, or that lie in the data's null space."""
    out = []
    for name, q in parameters.items():
        if name in trial.held or name not in _POSITIVE or not math.isfinite(q.value):
            continue
        small_damping = name == "damping_ratio" and q.determined and q.u < 0.05
        if not q.determined or (q.u > share * abs(q.value) and not small_damping):
            out.append(name)
    return out


def profiled(
    trial: Trial, result: RoadResult, parameters: dict[str, Uncertain], names: Sequence[str]
) -> tuple[dict[str, Uncertain], list[Warning_]]:
    """Those parameters with their profile intervals; an open end makes u unknown, and it is said."""
    out, warnings = dict(parameters), []
    open_ones = []
    for name in names:
        try:
            profile = importlib.import_module("rigtally.estimation.time_domain").profile
            low, high = profile(trial, result, name)
        except (RigtallyError, RuntimeError, ValueError, np.linalg.LinAlgError):
            low, high = -math.inf, math.inf
        q = out[name]
        closed = math.isfinite(low) and math.isfinite(high) and low > 0
        out[name] = replace(q, limits95=(low, high), u=q.u if closed else math.nan)
        if not closed:
            open_ones.append(name)
    if open_ones:
        warnings.append(
            Warning_(
                "not-determined",
                f"the log does not determine {' and '.join(open_ones)} (the interval is open)"
                + _determined_instead(trial, result, open_ones),
            )
        )
    return out, warnings


def _determined_instead(trial: Trial, result: RoadResult, names: Sequence[str]) -> str:
    """Which product of powers of the positive parameters the data do determine, to two per cent or better."""
    all_names = trial.form.names
    group = [n for n in (*_POSITIVE, "gain") if n in all_names and n not in trial.held]
    at = [all_names.index(n) for n in group]
    part = result.covariance[np.ix_(at, at)]
    values = result.theta[at]
    if len(group) < 2 or not np.all(np.isfinite(part)) or np.any(values == 0):
        return ""
    relative = part / np.outer(values, values)
    size, direction = np.linalg.eigh(relative)
    best = direction[:, 0]
    if size[0] <= 0 or math.sqrt(size[0]) > 0.2:
        return ""
    best = best / best[np.argmax(np.abs(best))]
    terms = [f"{n}^{p:.2g}" for n, p in zip(group, best, strict=True) if abs(p) > 0.05]
    return f"; what it does determine, to {100 * math.sqrt(size[0]):.1f} %, is " + "·".join(terms)
