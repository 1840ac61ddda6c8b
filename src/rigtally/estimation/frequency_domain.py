"""The frequency road: least squares on the record's spectrum, end to end. Door: `fit_frequency`.

Model: Y = G(s) U + end terms + offset + drift + noise, exact for held and ramped inputs and a free initial state
(frequency_model). Output-error least squares in the spectrum equals maximum likelihood for white Gaussian output
noise (Ljung, System Identification, 1999; from memory); for coloured noise the rows are whitened by the
residual's own autoregression (frequency_noise) and the fit is repeated.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import FitError
from rigtally.estimation.frequency_columns import Problem
from rigtally.estimation.frequency_covariance import covariance_of
from rigtally.estimation.frequency_noise import Colour, autoregression, mains_lines
from rigtally.estimation.frequency_projection import Projection, all_columns, project_given
from rigtally.estimation.frequency_solve import Constrained, Descent, constrained, descend
from rigtally.estimation.frequency_start import in_scale, scout
from rigtally.estimation.result import RoadResult
from rigtally.estimation.spectrum import Bins, all_bins, spectral_segment
from rigtally.estimation.trial import Trial

Array = NDArray[np.float64]

_ALL_BINS_UP_TO = 20_000  # samples; longer records use the bins up to ten times the fastest pole
_WHITENED_IN_TIME_UP_TO = 200_000  # samples; longer records are whitened bin by bin
_HIGHEST_COLOUR = 24


def fit_frequency(trial: Trial) -> RoadResult:
    """Fit the trial's form on the record's spectrum.

    Raises
    ------
    FitError
        code "road-unfit" where this road cannot serve (uneven stamps, gaps, a test that begins before the
        record, a rig that starts at rest), "no-convergence" where no minimum was found.
    """
    _check(trial)
    problem = _problem(trial)
    found = _best(problem, trial)
    found = _balanced(problem, trial, found)
    if trial.noise == "estimated":
        return _coloured(problem, trial, found)
    return _result(*found, trial, [], 1)


def _check(trial: Trial) -> None:
    def refuse(what: str) -> None:
        raise FitError(what, do="take the time road (--road time)", code="road-unfit")

    if trial.rest:
        refuse("the spectrum holds both ends of the record, so a start at rest is not imposed on this road")
    for segment in trial.segments:
        if segment.stamps is not None or not np.isfinite(segment.interval):
            refuse("the stamps are not uniform, and a spectrum needs uniform ones")
        if not (np.all(np.isfinite(segment.outputs)) and np.all(np.isfinite(segment.inputs))):
            refuse("the record has gaps, and a spectrum needs every sample")
        if segment.excitation in ("step", "pulse"):
            first = (segment.at - segment.start) / segment.interval
            if first < 1.0 or first > segment.count - 2:
                refuse("the record does not hold a sample before the test begins")


def _problem(trial: Trial) -> Problem:
    offset = 0.0 if trial.offset == "free" else float(trial.offset)
    segments = tuple(spectral_segment(segment, trial, offset) for segment in trial.segments)
    with_zero = trial.offset != "free"
    bins = tuple(all_bins(s.count, with_zero=with_zero) for s in segments)
    release = all(segment.excitation == "release" for segment in trial.segments)
    sigma = np.sqrt(np.mean([np.var(s.outputs, axis=1) for s in segments], axis=0))
    sigma[sigma == 0.0] = 1.0
    return Problem(
        trial.form, segments, bins, sigma, trial.drift, not release, offset_free=trial.offset == "free"
    )


Found = tuple[Problem, Array, Projection, Constrained | None, bool, int]


def _is_constrained(trial: Trial) -> bool:
    return bool(trial.held or trial.ranges or trial.ties)


def _best(problem: Problem, trial: Trial) -> Found:
    """From nothing to the best minimum: scouts on few bins, the winners on the bins that count."""
    scouts = scout(problem, wide=False)
    if not scouts or not _clearly_good(problem, scouts[0]):
        scouts = sorted([*scouts, *scout(problem, wide=True)], key=lambda d: d.cost)
    if not scouts:
        raise FitError(
            "no set of poles describes the record",
            do="check which channel is the input, and the window",
            code="no-convergence",
        )
    ends: list[Found] = []
    for start in _distinct(scouts)[:3]:
        ended = _refine(problem, trial, start.phi, start.projection.numerator)
        if ended is not None:
            ends.append(ended)
        if ends and _clearly_good(problem, start):
            break
    if not ends:
        raise FitError(
            "no minimum was found from any start",
            do="check the window, the form and the constraints",
            code="no-convergence",
        )
    return min(ends, key=lambda e: e[2].cost)


def _distinct(scouts: list[Descent]) -> list[Descent]:
    out: list[Descent] = []
    for one in scouts:
        if not any(abs(one.cost - other.cost) <= 1e-6 * other.cost for other in out):
            out.append(one)
    return out


def _clearly_good(problem: Problem, found: Descent) -> bool:
    """Whether the residual is as flat over the low bins as over the rest (ratio of mean powers below 1.5)."""
    residual = found.projection.residual
    share = residual.size // (2 * len(problem.sigma))
    if found.cost == 0.0 or len(problem.segments) > 1 or share < 40:
        return found.cost == 0.0
    power = (residual.reshape(len(problem.sigma), 2, share) ** 2).sum(axis=(0, 1))
    low, high = float(np.mean(power[: share // 3])), float(np.median(power[share // 2 :]))
    # high bins on a thinned grid stand for many: the median of their power per bin is compared on equal weight
    count = problem.segments[0].count // 2
    weight = max(1.0, (count - share / 3) / (share * 2 / 3))
    return bool(low < 1.5 * high / weight)


def _used_bins(problem: Problem, shared: Array) -> tuple[Bins, ...]:
    """All bins of a short record; up to ten times the fastest pole of a long one."""
    poles = np.polynomial.polynomial.polyroots(problem.form.denominator(shared)[0])
    fastest = float(np.max(np.abs(poles)))
    out = []
    for segment, bins in zip(problem.segments, problem.bins, strict=True):
        if segment.count <= _ALL_BINS_UP_TO:
            out.append(bins)
            continue
        highest = int(10.0 * fastest * segment.count * segment.interval / (2.0 * np.pi))
        out.append(all_bins(segment.count, with_zero=bool(bins.index[0] == 0), highest=max(highest, 1500)))
    return tuple(out)


def _refine(problem: Problem, trial: Trial, phi: Array, numerator: Array) -> Found | None:
    """Minimise on the bins that count, from φ (SI)."""
    form = problem.form
    count = len(form.shared_names)
    shared, dead = phi[:count], float(phi[count]) if form.dead_time else 0.0
    if problem.bins[0].filters is None:
        problem = replace(problem, bins=_used_bins(problem, shared))
    if _is_constrained(trial):
        return _refine_constrained(problem, trial, phi, numerator)
    scaled, start = in_scale(problem, shared, dead)
    ended = descend(scaled, start)
    if ended is None:
        return None
    b = ended.projection.numerator if problem.slots else np.full(form.numerator_count, np.nan)
    theta = form.parameters_from(b, ended.phi[:count], float(ended.phi[-1]) if form.dead_time else 0.0)
    theta = theta * scaled.scale**form.time_powers
    return scaled, theta, ended.projection, None, ended.converged, ended.evaluations


def _refine_constrained(problem: Problem, trial: Trial, phi: Array, numerator: Array) -> Found | None:
    form = problem.form
    count = len(form.shared_names)
    dead = float(phi[count]) if form.dead_time else 0.0
    b = numerator if problem.slots else np.ones(form.numerator_count)
    theta = form.parameters_from(b, phi[:count], dead)
    theta = np.where(np.isfinite(theta), theta, 1.0)
    for place, name in enumerate(form.names):
        theta[place] = trial.held.get(name, theta[place])
    scaled, _ = in_scale(problem, form.split(theta)[1], form.split(theta)[2])
    ended = constrained(scaled, theta, trial)
    return scaled, ended.theta, ended.projection, ended, ended.converged, ended.evaluations


def _again(found: Found, trial: Trial, **changes: object) -> Found:
    """The fit repeated from where it ended, with other bins or weights."""
    problem, theta, projection, _, _, spent = found
    form = problem.form
    changed = replace(problem, **changes)  # type: ignore[arg-type]
    phi = theta[form.numerator_count :]
    if _is_constrained(trial):
        ended = constrained(changed, theta, trial)
        return changed, ended.theta, ended.projection, ended, ended.converged, spent + ended.evaluations
    del projection
    next_one = _refine(changed, trial, phi, np.zeros(0))
    if next_one is None:
        raise FitError("the fit was lost when its weights were refined", code="no-convergence")
    return (*next_one[:5], spent + next_one[5])


def _balanced(problem: Problem, trial: Trial, found: Found) -> Found:
    """Several outputs: each divided by its own residual, until the weights stand still."""
    del problem
    if len(found[0].sigma) == 1:
        return found
    for _ in range(4):
        size = _output_rms(found)
        if np.all(np.abs(size / found[0].sigma - 1.0) < 0.02):
            break
        found = _again(found, trial, sigma=size)
    return found


def _output_rms(found: Found) -> Array:
    """Root mean square of each output's rows, in the output's unit."""
    problem, _, projection = found[:3]
    outputs = len(problem.sigma)
    rows = projection.residual.reshape(outputs, -1)
    numbers = sum(b.numbers for b in problem.bins)
    linear = np.array([c.size for c in projection.linear])
    out: Array = problem.sigma * np.sqrt((rows**2).sum(axis=1) / np.maximum(numbers - linear, 1.0))
    return np.maximum(out, 1e-12 * np.max(out))


def series(
    problem: Problem, theta: Array, linear: tuple[Array, ...]
) -> tuple[tuple[Array, ...], list[Array]]:
    """The model's output in time, (q, n) per segment, and the residual, (q, n) per segment."""
    form = problem.form
    full = replace(
        problem,
        bins=tuple(all_bins(s.count, with_zero=True) for s in problem.segments),
    )
    scaled = theta / problem.scale**form.time_powers
    _, shared, dead = form.split(scaled)
    parts = all_columns(full, np.append(shared, dead)[: len(form.shared_names) + int(form.dead_time)])
    fitted, residuals = [], []
    for index, (segment, part) in enumerate(zip(problem.segments, parts, strict=True)):
        model = np.zeros(segment.outputs.shape)
        constant = problem.constant(problem.bins[index])
        for output in range(len(problem.sigma)):
            mine = [c for c, (i, _, _) in enumerate(problem.slots) if i == output]
            skip = len(mine)
            for earlier in range(index):
                skip += problem.nuisances(problem.segments[earlier], problem.bins[earlier])
            own = linear[output][skip : skip + problem.nuisances(segment, problem.bins[index])]
            fixed = part.fixed
            if not constant and full.constant(full.bins[index]):
                fixed = fixed[:-1]
            spectrum = linear[output][: len(mine)] @ part.driven[mine]
            spectrum = spectrum + own @ np.concatenate([part.ends, fixed])
            wave = np.fft.irfft(spectrum, n=segment.count)
            if not constant and full.constant(full.bins[index]):
                wave += float(np.mean(segment.outputs[output] - wave))
            model[output] = wave
        fitted.append(model)
        residuals.append(segment.outputs - model)
    return tuple(fitted), residuals


def _coloured(problem: Problem, trial: Trial, found: Found) -> RoadResult:
    """Find the residual's colour, whiten, repeat until it stands still."""
    outputs = len(problem.sigma)
    colours: list[Colour] = []
    hum: tuple[float, ...] = ()
    for turn in range(4):
        _, residuals = series(found[0], found[1], found[2].linear)
        if turn == 0:
            hum = _hum(found[0], residuals)
            if hum:
                found = _again(found, trial, hum=hum)
                _, residuals = series(found[0], found[1], found[2].linear)
        length = min(r.shape[1] for r in residuals)
        highest = min(_HIGHEST_COLOUR, length // 12)
        spent = found[2].residual.size and sum(c.size for c in found[2].linear) / outputs
        fresh = [autoregression([r[i] for r in residuals], highest, spent) for i in range(outputs)]
        if all(c.order == 0 for c in fresh) and turn == 0:
            return _result(*found, trial, [], 1, hum)
        settled = bool(colours) and all(_alike(a, b) for a, b in zip(colours, fresh, strict=True))
        colours = fresh
        if settled:
            break
        found = _again(found, trial, **_whitened(found[0], colours))
    return _result(*found, trial, colours, 1, hum)


def _hum(problem: Problem, residuals: list[Array]) -> tuple[float, ...]:
    if len(problem.segments) != 1 or residuals[0].shape[1] > _WHITENED_IN_TIME_UP_TO:
        return ()
    lines: list[float] = []
    span = problem.segments[0].interval * problem.segments[0].count
    for row in residuals[0]:
        for line in mains_lines(row, problem.segments[0].interval):
            if all(abs(line - other) * span > np.pi for other in lines):
                lines.append(line)
    return tuple(lines)


def _alike(one: Colour, other: Colour) -> bool:
    return one.order == other.order and bool(np.all(np.abs(one.predictors[-1] - other.predictors[-1]) < 2e-3))


def _whitened(problem: Problem, colours: list[Colour]) -> dict[str, object]:
    """Bins and scales that whiten: in time for records of ordinary length, bin by bin for very long ones."""
    sigma = np.array([c.innovation for c in colours])
    bins = []
    for segment, old in zip(problem.segments, problem.bins, strict=True):
        if segment.count <= _WHITENED_IN_TIME_UP_TO:
            zero = all_bins(segment.count, with_zero=True)
            bins.append(replace(zero, filters=tuple(c.whiten for c in colours)))
        else:
            # the weight differs by output only through the colour's shape; one weight serves one output
            gain = colours[0].gain(segment.angle(old.index))
            plain = all_bins(segment.count, with_zero=bool(old.index[0] == 0), highest=int(old.index[-1]))
            bins.append(replace(plain, weight=plain.weight * gain))
    return {"bins": tuple(bins), "sigma": sigma}


def _result(
    problem: Problem,
    theta: Array,
    projection: Projection,
    held: Constrained | None,
    converged: bool,
    evaluations: int,
    trial: Trial,
    colours: list[Colour],
    turns: int,
    hum: tuple[float, ...] = (),
) -> RoadResult:
    """Covariance, fitted traces and what was found of the noise."""
    del turns
    form = problem.form
    powers = problem.scale**form.time_powers
    linear_count = sum(c.size for c in projection.linear) - len(problem.slots)
    if problem.slots:
        chain = held.chain if held is not None else np.eye(theta.size)
        sensitivity = (project_given(problem, theta / powers).sensitivity / powers) @ chain
    else:
        first = form.numerator_count
        stand_in = np.where(np.isfinite(theta), theta, 1.0)
        chain = np.eye(theta.size)[:, first:] if held is None else held.chain
        sensitivity = _release_sensitivity(problem, stand_in / powers, projection) / powers @ chain
        if held is not None:
            theta = stand_in
            theta[:first] = np.nan
    free = sensitivity.shape[1]
    freedom = problem.numbers - linear_count - free - sum(c.order for c in colours)
    stated = not isinstance(trial.noise, str)
    if stated:
        scale = float(trial.noise) / problem.sigma
        variance = float(np.mean(scale**2))
        dof = float("inf")
    else:
        variance = projection.cost / max(freedom, 1.0)
        dof = max(freedom, 1.0)
    covariance = chain @ covariance_of(sensitivity, variance) @ chain.T
    if not problem.slots:
        covariance[: form.numerator_count] = np.nan
        covariance[:, : form.numerator_count] = np.nan
    if not converged and not np.isfinite(projection.cost):
        raise FitError("the fit did not converge", code="no-convergence")
    fitted, _ = series(problem, theta if problem.slots else np.where(np.isfinite(theta), theta, 1.0),
                       projection.linear)  # fmt: skip
    offset = 0.0 if trial.offset == "free" else float(trial.offset)
    total = float(sum(s.count for s in problem.segments))
    noise = []
    effective = []
    for output in range(len(problem.sigma)):
        coloured = bool(colours) and colours[output].order > 0
        noise.append("stated" if stated else "coloured" if coloured or hum else "white")
        effective.append(total * (colours[output].effective_share() if coloured else 1.0))
    return RoadResult(
        road="frequency",
        theta=theta,
        covariance=covariance,
        dof=dof,
        fitted=tuple(f + offset for f in fitted),
        cost=projection.cost,
        noise=tuple(noise),
        effective_samples=tuple(effective),
        nuisance={"hum": len(hum)} if hum else {},
        evaluations=evaluations,
        converged=converged,
    )


def _release_sensitivity(problem: Problem, theta: Array, projection: Projection) -> Array:
    """Of a free decay: the iteration's own derivative, without numerator columns."""
    first = problem.form.numerator_count
    out = np.zeros((projection.residual.size, theta.size))
    out[:, first:] = -project_given(problem, theta).sensitivity[:, first:]
    return out
