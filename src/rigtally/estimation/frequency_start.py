"""Poles and dead time to start from, without the user.

A(δ)Y = B(δ)U + zP(δ) is linear in all coefficients. Solved by least squares, divided by the |A| found before and
solved again (Sanathanan & Koerner, IEEE Trans. Autom. Control 8 (1963) 56-58; from memory), it gives poles that
are good enough to start from, never to answer with. An oversampled record has most of its bins far above the
dynamics, so the climb goes over a ladder of bandwidths; a grid of poles stands by for records that are too noisy.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.frequency_columns import Problem
from rigtally.estimation.frequency_solve import Descent, descend, try_project
from rigtally.estimation.spectrum import thinned_bins

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

_ROUNDS = 4  # of the denominator weight
_KEPT = 4  # candidates that are refined
_FIRST_STEPS, _FINISHED, _LAST_STEPS = 6, 2, 25  # a few steps for each, then many for the best


@dataclass(frozen=True)
class Candidate:
    """Denominator parameters (SI), dead time (s), and the cost on the scouting bins."""

    shared: Array
    dead_time: float
    cost: float


def time_scale(problem: Problem, shared: Array) -> float:
    """Seconds: one over the geometric mean of the poles."""
    lowest = abs(float(problem.form.denominator(shared)[0][0]))
    return float(lowest ** (-1.0 / problem.form.order)) if lowest > 0 else 1.0


def in_scale(problem: Problem, shared: Array, dead_time: float) -> tuple[Problem, Array]:
    """The problem in the time unit that fits these poles, and φ in it."""
    scale = time_scale(problem, shared)
    moved = replace(problem, scale=scale)
    phi = np.append(shared, dead_time) if problem.form.dead_time else np.array(shared)
    return moved, phi / scale ** problem.form.time_powers[problem.form.numerator_count :]


def candidates(problem: Problem, *, wide: bool) -> list[Candidate]:
    """Starts on the problem's bins, best first; with `wide` a grid of poles as well."""
    shareds: list[tuple[Array, float]] = []
    for dead in _delays(problem):
        for poles in _ladder(problem, dead):
            shareds.extend((shared, dead) for shared in _as_parameters(problem, poles))
    if wide or not shareds:
        shareds.extend(_grid(problem))
    found = []
    for shared, dead in shareds:
        if not np.all(np.isfinite(shared)):
            continue
        scaled, phi = in_scale(problem, shared, dead)
        tried = try_project(scaled, phi, derivatives=False)
        if tried is not None:
            found.append(Candidate(shared, dead, tried.cost))
    found.sort(key=lambda c: c.cost)
    return found


def scout(problem: Problem, *, wide: bool) -> list[Descent]:
    """The best few starts, refined on thinned bins; each Descent is in SI (scale 1). Best first."""
    thin = replace(
        problem,
        scale=1.0,
        bins=tuple(
            thinned_bins(s.count, with_zero=bool(b.index[0] == 0))
            for s, b in zip(problem.segments, problem.bins, strict=True)
        ),
    )
    tried: list[Candidate] = []
    refined: list[Descent] = []
    for candidate in candidates(thin, wide=wide):
        if len(tried) >= _KEPT * (2 if wide else 1):
            break
        if any(_same(candidate, other) for other in tried):
            continue
        tried.append(candidate)
        refined += _short_descent(thin, np.append(candidate.shared, candidate.dead_time), _FIRST_STEPS)
    refined.sort(key=lambda d: d.cost)
    finished: list[Descent] = []
    for one in refined[:_FINISHED]:
        dead = one.phi if thin.form.dead_time else np.append(one.phi, 0.0)
        finished += [one] if one.converged else _short_descent(thin, dead, _LAST_STEPS)
    return sorted([*finished, *refined[_FINISHED:]], key=lambda d: d.cost)


def _short_descent(thin: Problem, start: Array, steps: int) -> list[Descent]:
    """A few steps from (shared, dead time), both in SI; the result in SI; empty where the start is no good."""
    scaled, phi = in_scale(thin, start[:-1], float(start[-1]))
    found = descend(scaled, phi, steps=steps, tolerance=1e-3)
    if found is None:
        return []
    powers = scaled.scale ** thin.form.time_powers[thin.form.numerator_count :]
    return [replace(found, phi=found.phi * powers)]


def _same(one: Candidate, other: Candidate) -> bool:
    return bool(
        np.allclose(one.shared, other.shared, rtol=0.05)
        and np.isclose(one.dead_time, other.dead_time, rtol=0.05)
    )


def _delays(problem: Problem) -> list[float]:
    """Dead times to try, in seconds: none, then a geometric ladder of whole samples up to a third of the record."""
    if not problem.form.dead_time:
        return [0.0]
    count = min(s.count for s in problem.segments)
    samples = np.unique(np.geomspace(1, max(2, count // 3), 24).round().astype(int))
    return [0.0, *(float(k) * problem.segments[0].interval for k in samples)]


def _ladder(problem: Problem, dead_time: float) -> list[ComplexArray]:
    """Poles (rad/s) of the linearised fit at each bandwidth."""
    out = []
    n = problem.form.degree
    top = min(b.index.size for b in problem.bins)
    least = min(top, 4 * n + 6)
    rungs = np.unique(np.geomspace(least, top, 7 if dead_time == 0.0 else 4).round().astype(int))
    for rung in rungs:
        poles = _linearised(problem, dead_time, int(rung))
        if poles is not None:
            out.append(poles)
    return out


def _linearised(problem: Problem, dead_time: float, used: int) -> ComplexArray | None:
    """Poles of A(δ)Y = B(δ)U + zP(δ), iterated with the weight 1/|A|, on the first `used` bins."""
    form = problem.form
    n, pad = form.degree, form.integrators
    blocks, targets = [], []
    deltas = []
    unit = problem.segments[0].interval
    edge = max(
        float(s.angle(b.index[used - 1 : used])[0]) / s.interval
        for s, b in zip(problem.segments, problem.bins, strict=True)
    )
    outputs = len(form.outputs)
    segments = len(problem.segments)
    inputs = problem.segments[0].inputs.shape[0] if problem.free_input else 0
    extra = int(problem.drift)
    width_b, width_p = inputs * (n + 1), n + extra
    total = (n - pad) + outputs * (width_b + segments * width_p)
    for index, (segment, bins) in enumerate(zip(problem.segments, problem.bins, strict=True)):
        here = bins.index[:used]
        angle = segment.angle(here)
        z = np.exp(1j * angle)
        d = np.expm1(1j * angle) / (segment.interval * edge)
        powers = d[:, None] ** np.arange(n + 1)
        shift = round((dead_time + segment.delay) / segment.interval)
        weight = bins.weight[:used]
        v = segment.input_spectrum(shift)[:, here] if inputs else np.zeros((0, here.size))
        for output in range(outputs):
            y = segment.spectrum[output, here] / problem.sigma[output]
            block = np.zeros((here.size, total), complex)
            block[:, : n - pad] = y[:, None] * powers[:, pad:n]
            start = (n - pad) + output * (width_b + segments * width_p)
            for j in range(inputs):
                block[:, start + j * (n + 1) : start + (j + 1) * (n + 1)] = -v[j][:, None] * powers
            start += width_b + index * width_p
            block[:, start : start + n] = -z[:, None] * powers[:, :n]
            if extra:
                # a drift is one more pole at δ = 0 that the record's ends excite; z/δ·A
                with np.errstate(divide="ignore", invalid="ignore"):
                    block[:, start + n] = np.where(here > 0, z / d, 0.0)
            blocks.append(block * weight[:, None])
            targets.append(-y * powers[:, n] * weight)
            deltas.append(d)
    matrix, target, grid = np.concatenate(blocks), np.concatenate(targets), np.concatenate(deltas)
    scale = np.linalg.norm(matrix, axis=0)
    scale[scale == 0.0] = 1.0
    down = np.ones(grid.size)
    alpha = None
    for _ in range(_ROUNDS):
        rows = matrix / scale / down[:, None]
        both = np.concatenate([rows.real, rows.imag])
        right = np.concatenate([(target / down).real, (target / down).imag])
        try:
            solved = np.linalg.lstsq(both, right, rcond=1e-13)[0]
        except np.linalg.LinAlgError:
            break
        alpha = np.concatenate([np.zeros(pad), solved[: n - pad] / scale[: n - pad], [1.0]])
        if not np.all(np.isfinite(alpha)):
            return None
        down = np.abs(np.polynomial.polynomial.polyval(grid, alpha))
        down = np.maximum(down, 1e-6 * float(np.median(down)) + 1e-300)
    if alpha is None:
        return None
    roots = np.polynomial.polynomial.polyroots(alpha[pad:]) * edge
    inside = 1.0 + roots * unit
    inside = np.where(np.abs(inside) < 1e-12, 1e-12, inside).astype(complex)
    poles: ComplexArray = np.where(
        np.abs(roots * unit) < 1e-3,
        roots - 0.5 * unit * roots**2,
        np.log(inside) / unit,
    )
    stable: ComplexArray = -np.abs(poles.real) + 1j * poles.imag
    return stable


def _as_parameters(problem: Problem, poles: ComplexArray) -> list[Array]:
    """Denominator parameters of a set of poles: as they are, and made to fit the form where they do not."""
    form = problem.form
    span = max(s.count * s.interval for s in problem.segments)
    unit = min(s.interval for s in problem.segments)
    slow, fast = 0.05 / span, 30.0 / unit
    size = np.clip(np.abs(poles), slow, fast)
    poles = poles / np.maximum(np.abs(poles), 1e-300) * size
    poles = np.minimum(poles.real, -2e-3 * np.abs(poles)) + 1j * poles.imag
    # a lone complex pole (its conjugate lost at half the sampling rate) stands as a real one
    matched = [bool(np.any(np.isclose(np.conj(p), poles, rtol=1e-6))) for p in poles]
    poles = np.where(matched, poles, -np.abs(poles))
    monic: Array = np.real(np.polynomial.polynomial.polyfromroots(poles)).astype(float)
    out = [form.shared_from(monic)]
    if form.family == "first-order":
        return out
    if form.family == "second-order":
        w, zeta = out[0]
        if np.isfinite(w) and zeta > 0.9:
            out.append(np.array([w, 0.5]))
    return [shared for shared in out if np.all(np.isfinite(shared))]


def _grid(problem: Problem) -> list[tuple[Array, float]]:
    """Poles over all that the record can show, slow to fast, lightly to heavily damped."""
    form = problem.form
    span = max(s.count * s.interval for s in problem.segments)
    unit = min(s.interval for s in problem.segments)
    delays = _delays(problem)
    delays = delays if len(delays) < 8 else [delays[0], *delays[2::5]]
    out: list[tuple[Array, float]] = []
    for w in np.geomspace(1.0 / span, 2.0 / unit, 16):
        for zeta in (0.03, 0.3, 1.2):
            pair = w * (-zeta + np.array([1, -1]) * np.sqrt(complex(zeta**2 - 1)))
            poles = pair[: form.order]
            if form.order == 1:
                poles = np.array([-w])
            elif form.order > 2:
                poles = np.concatenate([pair, -w * np.geomspace(0.3, 3.0, form.order - 2)])
            monic = np.real(np.polynomial.polynomial.polyfromroots(poles))
            shared = form.shared_from(monic)
            if np.all(np.isfinite(shared)):
                out.extend((shared, dead) for dead in delays)
            if form.order == 1:
                break
    return out
