"""What a reader of a fit has to know: tests of the residual, of the assumptions, of the sampling."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special

from rigtally.estimation.result import RoadResult, Warning_
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import Form

Array = NDArray[np.float64]
RARE = 1e-4  # probability below which a test speaks up: one false alarm in ten thousand records
LAGS = 24


def lag_one(residual: Array) -> float:
    """Correlation of a residual's samples with their neighbours (NaN samples left out)."""
    r = residual[np.isfinite(residual)]
    if r.size < 3 or np.ptp(r[1:]) == 0.0 or np.ptp(r[:-1]) == 0.0:
        return math.nan
    return float(np.corrcoef(r[1:], r[:-1])[0, 1])


def slow_residual(residual: Array) -> bool:
    """Whether what is left moves slowly and far beyond its sample-to-sample noise.

    Third differences see the noise alone (their squared weights sum to 20). A residual worth fewer than 20
    independent samples, n (1-ρ)/(1+ρ) by its neighbours' correlation ρ, and eight times that noise is structure, not
    noise: an autoregression with ρ = 0.95 stays below six times. Common practice, no source.
    """
    r = residual[np.isfinite(residual)]
    if r.size < 20:
        return False
    rho = lag_one(r)
    noise = float(np.std(np.diff(r, 3))) / math.sqrt(20.0)
    return rho > 0 and r.size * (1.0 - rho) / (1.0 + rho) < 20.0 and float(np.std(r)) > 8.0 * noise


def correlation_with_input(residual: Array, inputs: Array, later: bool) -> float:
    """p-value of the residual's regression on the input's moves at earlier (or later) samples.

    Both are whitened by the residual's own autoregression; the lagged moves are made orthonormal, since those
    of a step are nearly alike. F test of the regression (Draper & Smith, from memory).
    """
    n = residual.size
    if n < 6 * LAGS or not np.all(np.isfinite(residual)):
        return 1.0
    from rigtally.estimation.residual_colour import whiten

    white, filtered = whiten(residual, inputs)
    stride = max(n // 400, 1)
    lags = np.unique(np.round(np.geomspace(1, max(stride * LAGS, LAGS + 1), LAGS)).astype(int))
    columns = []
    for row in filtered:
        for lag in lags:
            moved = np.zeros(n)
            if later:
                moved[:-lag] = row[lag:]
            else:
                moved[lag:] = row[:-lag]
            columns.append(moved - moved.mean())
    table = np.array(columns).T
    power, turn = np.linalg.eigh(table.T @ table)
    kept = power > 1e-6 * max(float(power[-1]), 1e-300)
    rank = int(np.sum(kept))
    if rank == 0 or n - rank < 20:
        return 1.0
    white = white - white.mean()
    part = (turn[:, kept].T @ (table.T @ white)) / np.sqrt(power[kept])
    explained, total = float(part @ part), float(white @ white)
    if total <= 0:
        return 1.0
    ratio = (explained / rank) / max((total - explained) / (n - rank), 1e-300)
    return float(special.fdtrc(rank, n - rank, ratio))


def residual_findings(trial: Trial, segments: Sequence[Segment], result: RoadResult) -> list[Warning_]:
    """Does the form hold? Does the residual know the input, or the input's future?"""
    out: list[Warning_] = []
    names = trial.form.outputs
    for i, name in enumerate(names):
        rests = [s.outputs[i] - f[i] for s, f in zip(segments, result.fitted, strict=True)]
        longest = max(range(len(rests)), key=lambda k: rests[k].size)
        if slow_residual(rests[longest]):
            out.append(
                Warning_(
                    "form-does-not-hold",
                    f"the form does not hold for {name}: what the fit leaves over moves slowly (autocorrelation at "
                    f"lag one {lag_one(rests[longest]):.3f}) and far beyond the noise; the parameters' u is not to be "
                    "relied on. Try another form, or a free drift",
                )
            )
            continue
        if segments[longest].excitation != "logged" or segments[longest].stamps is not None:
            continue
        u = segments[longest].inputs
        if correlation_with_input(rests[longest], u, later=False) < RARE:
            out.append(
                Warning_(
                    "form-does-not-hold",
                    f"the form does not hold for {name}: what the fit leaves over still follows the input "
                    f"(probability by chance below {RARE:g}); try a form of higher order, or look for non-linearity",
                )
            )
        elif correlation_with_input(rests[longest], u, later=True) < RARE:
            out.append(
                Warning_(
                    "feedback",
                    f"what the fit of {name} leaves over goes before the input: the bench seems to be regulated by "
                    "this output. The estimate may be biased; log the set point and use it as the input",
                )
            )
    return out


def sampling_findings(form: Form, theta: Array, interval: float, between: str) -> list[Warning_]:
    """Sampling too slow for the fitted frequency: below twenty samples in a period of fn.

    Rule: AD0404383 (1963), sampling at 20 times the highest frequency for 0.5 % (abstract opened).
    """
    names = form.names
    if between == "held" or not np.isfinite(interval):
        return []
    if "natural_frequency" in names:
        w = float(theta[names.index("natural_frequency")])
        what = "natural frequency"
    elif "time_constant" in names:
        w = 1.0 / float(theta[names.index("time_constant")])
        what = "corner frequency"
    else:
        return []
    ratio = 2.0 * math.pi / (w * interval) if w > 0 else math.inf
    if ratio >= 20.0:
        return []
    return [
        Warning_(
            "coarse-sampling",
            f"only {ratio:.1f} samples in a period of the fitted {what}: what the input does between samples matters; "
            "sample at 20 times that frequency or more",
        )
    ]


def between_findings(trial: Trial, result: RoadResult, other: RoadResult, word: str) -> list[Warning_]:
    """By how much another assumption on the input between its samples would move the parameters."""
    u = np.sqrt(np.diag(result.covariance))
    moved = []
    for k, name in enumerate(trial.form.names):
        if np.isfinite(u[k]) and u[k] > 0:
            steps = (other.theta[k] - result.theta[k]) / u[k]
            if abs(steps) > 1.0:
                moved.append(f"{name} by {steps:+.1f} u")
    if not moved:
        return []
    better = " and fits better" if _likelier(trial, result, other) else ""
    return [
        Warning_(
            "between-assumption",
            f"the input is taken as {trial.between} between its samples; taken as {word} it moves {', '.join(moved)}"
            f"{better}",
        )
    ]


def _likelier(trial: Trial, result: RoadResult, other: RoadResult) -> bool:
    """Whether the other fit leaves clearly less over: its log-likelihood (white residuals) is higher by 2."""
    gain = 0.0
    for i in range(len(trial.form.outputs)):
        sums, count = [], 0
        for found in (result, other):
            rests = [s.outputs[i] - f[i] for s, f in zip(trial.segments, found.fitted, strict=True)]
            rest = np.concatenate([r[np.isfinite(r)] for r in rests])
            sums.append(float(rest @ rest))
            count = rest.size
        if min(sums) > 0:
            gain += 0.5 * count * math.log(sums[0] / sums[1])
    return gain > 2.0
