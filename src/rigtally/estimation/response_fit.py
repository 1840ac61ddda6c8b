"""Fit a form to a measured frequency response, with or without stated uncertainties.

Least squares on the real and imaginary part, G(jω; θ) = Σ b s^p / den(s) · e^{−sL}, with exact derivatives:

    ∂G = Σ ∂b s^p/den · e^{−sL} − G ∂den/den − s G ∂L.

Stated covariances are taken as known (dof infinite) and the fit is tested against them. Without them every point is
taken to have the same relative uncertainty (with a coherence: √((1 − γ²)/γ²) times it, Bendat & Piersol, Random
Data; from memory), whose size is found from the scatter. The start is the linearised fit A·Ĝ = B, iterated with
the weight 1/|A| (Sanathanan & Koerner 1963; from memory).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import FitError, LogError, UsageError
from rigtally.estimation.derived import derived_quantities
from rigtally.estimation.frequency_solve import chain_of, lmfit_parameters
from rigtally.estimation.result import Fit, MeasuredResponse, Residual, Warning_
from rigtally.estimation.trial import Trial
from rigtally.forms.named import Form
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.record import Response

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
RARE = 1e-4
_REFINED = 2  # starts that are minimised from


def gain_with_derivative(form: Form, theta: Array, omega: Array) -> tuple[ComplexArray, ComplexArray]:
    """G (m, q, r) at rad/s and its derivative (p, m, q, r) by θ."""
    s = 1j * omega
    _, shared, dead = form.split(theta)
    own, down = form.denominator(shared)
    lift = s**form.integrators
    den = np.polynomial.polynomial.polyval(s, own) * lift
    b, by = form.numerator_coefficients(theta)
    shape = (omega.size, len(form.outputs), len(form.inputs))
    gain, slope = np.zeros(shape, complex), np.zeros((theta.size, *shape), complex)
    late = np.exp(-s * dead) / den
    for k, (i, j, p) in enumerate(form.numerator_slots):
        wave = s**p * late
        gain[:, i, j] += b[k] * wave
        slope[:, :, i, j] += by[:, k, None] * wave
    first = form.numerator_count
    for k in range(shared.size):
        move = np.polynomial.polynomial.polyval(s, down[k]) * lift / den
        slope[first + k] -= gain * move[:, None, None]
    if form.dead_time:
        slope[-1] = -s[:, None, None] * gain
    return gain, slope


def fit_response(
    response: Response,
    form: Form,
    *,
    held: Mapping[str, float] | None = None,
    ranges: Mapping[str, tuple[float, float]] | None = None,
    ties: Mapping[str, str] | None = None,
) -> Fit:
    """Fit a form to a measured response.

    Raises
    ------
    LogError
        code "too-short": fewer numbers than parameters.
    UsageError
        code "needs-phase": a dead time asked of magnitudes alone.
    FitError
        code "no-convergence".
    """
    form = form.with_names(response.outputs, response.inputs)
    points = response.gain.size * (1 if response.magnitude_only else 2)
    where = response.provenance.file
    if points <= len(form.names):
        raise LogError(
            f"{points} numbers cannot determine {len(form.names)} parameters",
            where=where, do="measure at more frequencies or choose a simpler form", code="too-short",
        )  # fmt: skip
    if response.magnitude_only and form.dead_time:
        raise UsageError(
            "magnitudes alone say nothing of a dead time", where=where, do="leave --dead-time out, or give the phase",
            code="needs-phase",
        )  # fmt: skip
    whiten, stated = _weights(response)
    trial = Trial(form, (), held=dict(held or {}), ranges=dict(ranges or {}), ties=dict(ties or {}))
    best = _minimised(response, form, trial, whiten)
    theta, chain, cost, jacobian = best
    dof = points - chain.shape[1]
    variance = 1.0 if stated else cost / max(dof, 1)
    upper = np.linalg.qr(jacobian @ chain, mode="r")
    inverse = np.linalg.pinv(upper, rcond=1e-10)
    covariance = variance * chain @ inverse @ inverse.T @ chain.T
    warnings = _findings(response, cost, dof, stated)
    return _assembled(response, form, trial, theta, covariance, math.inf if stated else float(dof), warnings)


def _weights(response: Response) -> tuple[Array, bool]:
    """(m, q, r, 2, 2) square roots of the inverse covariances, and whether they are stated."""
    if response.covariance is not None and np.all(np.isfinite(response.covariance)):
        try:
            return np.linalg.inv(np.linalg.cholesky(response.covariance)), True
        except np.linalg.LinAlgError:
            raise LogError(
                "a stated uncertainty is nought or not a covariance", where=response.provenance.file,
                do="state uncertainties above nought, or leave their column out", code="bad-uncertainty",
            ) from None  # fmt: skip
    size = np.abs(response.gain)
    size = np.maximum(size, 1e-6 * float(size.max()))
    if response.coherence is not None and np.all(np.isfinite(response.coherence)):
        share = np.clip(response.coherence, 1e-3, 1.0 - 1e-6)
        size = size * np.sqrt((1.0 - share) / share)[:, None, None]
    return np.eye(2) / size[..., None, None], False


def _pair(z: ComplexArray) -> Array:
    return np.stack([z.real, z.imag], axis=-1)


def _minimised(
    response: Response, form: Form, trial: Trial, whiten: Array
) -> tuple[Array, Array, float, Array]:
    """θ, dθ/dfree, sum of squares and the whitened derivative by θ, from the best of the starts."""
    import lmfit

    omega, measured = response.frequency, response.gain

    def residual_of(theta: Array) -> tuple[Array, Array]:
        gain, slope = gain_with_derivative(form, theta, omega)
        if response.magnitude_only:
            size = np.abs(gain)
            by = np.real(np.conj(gain) * slope) / np.maximum(size, 1e-300)
            weight = whiten[..., 0, 0]
            return ((size - np.abs(measured)) * weight).ravel(), (by * weight).reshape(theta.size, -1).T
        off = np.einsum("mqrab,mqrb->mqra", whiten, _pair(gain - measured))
        by = np.einsum("mqrab,pmqrb->pmqra", whiten, _pair(slope))
        return off.ravel(), by.reshape(theta.size, -1).T

    best: tuple[Array, Array, float, Array] | None = None
    with np.errstate(all="ignore"):
        scored = [(float(np.sum(residual_of(start)[0] ** 2)), start) for start in _starts(response, form)]
    scored = sorted((pair for pair in scored if np.isfinite(pair[0])), key=lambda pair: pair[0])
    for _, start in scored[:_REFINED]:
        parameters, names = lmfit_parameters(form, start, trial)

        def values(p: Any, names: list[str] = names) -> Array:
            return np.array([p[name].value for name in names], dtype=float)

        def residual(p: Any) -> Array:
            with np.errstate(all="ignore"):
                return np.nan_to_num(residual_of(values(p))[0], nan=1e30, posinf=1e30, neginf=-1e30)

        def derivative(p: Any, names: list[str] = names) -> Array:
            with np.errstate(all="ignore"):
                return np.nan_to_num(residual_of(values(p))[1] @ chain_of(p, names))

        if any(p.vary and not p.expr for p in parameters.values()):
            mini = lmfit.Minimizer(residual, parameters)
            found = mini.minimize(method="leastsq", Dfun=derivative, col_deriv=0, ftol=1e-13, xtol=1e-11)
            parameters = found.params
        theta = values(parameters)
        with np.errstate(all="ignore"):
            off, by = residual_of(theta)
        cost = float(off @ off)
        if np.isfinite(cost) and (best is None or cost < best[2]):
            best = theta, chain_of(parameters, names), cost, by
    if best is None:
        raise FitError(
            "no start led to a fit of the response", do="try a simpler form", code="no-convergence"
        )
    return best


def _starts(response: Response, form: Form) -> list[Array]:
    """θ by the linearised fit at a ladder of bandwidths, and a few resonances for magnitudes."""
    omega = response.frequency
    out = []
    ladder = np.unique(np.geomspace(min(omega.size, 2 * form.degree + 4), omega.size, 4).round().astype(int))
    if not response.magnitude_only:
        for used in ladder:
            for delay in (0.0, *(np.geomspace(0.03, 3.0, 6) / omega[-1] if form.dead_time else ())):
                out += _linearised(response, form, int(used), float(delay))
    if not out:
        for w in np.geomspace(omega[0], omega[-1], 7)[1:-1]:
            poles = w * np.exp(
                1j * np.pi * (1 + (2 * np.arange(form.order) + 1 - form.order) / (2 * form.order))
            )
            monic = np.real(np.polynomial.polynomial.polyfromroots(poles))
            shared = form.shared_from(monic)
            size = float(np.abs(response.gain).max())
            b = np.array([size * monic[0] / w**p for _, _, p in form.numerator_slots])
            out.append(form.parameters_from(b, shared, 0.1 / float(omega[-1])))
    return [theta for theta in out if np.all(np.isfinite(theta))]


def _linearised(response: Response, form: Form, used: int, delay: float) -> list[Array]:
    """A·Ĝ = B on the lowest `used` frequencies, a dead time taken off the phase first."""
    scale = 1.0 / float(np.exp(np.mean(np.log(response.frequency[:used]))))
    s = 1j * response.frequency[:used] * scale
    gain = response.gain[:used] * np.exp(s / scale * delay)[:, None, None]
    n, pad, slots = form.order, form.integrators, form.numerator_slots
    weight = 1.0 / np.maximum(np.abs(gain), 1e-300)
    down = np.ones(used)
    alpha, b = np.zeros(0), np.zeros(0)
    for _ in range(5):
        blocks, targets = [], []
        for i, j in form.entries:
            block = np.zeros((used, n + len(slots)), complex)
            block[:, :n] = gain[:, i, j, None] * s[:, None] ** (pad + np.arange(n))
            for k, (oi, ij, p) in enumerate(slots):
                if (oi, ij) == (i, j):
                    block[:, n + k] = -(s**p)
            factor = weight[:, i, j] / down
            blocks.append(block * factor[:, None])
            targets.append(-gain[:, i, j] * s ** (pad + n) * factor)
        rows, right = np.concatenate(blocks), np.concatenate(targets)
        solved = np.linalg.lstsq(
            np.concatenate([rows.real, rows.imag]), np.concatenate([right.real, right.imag]), rcond=1e-13
        )[0]
        alpha, b = np.append(solved[:n], 1.0), solved[n:]
        down = np.maximum(np.abs(np.polynomial.polynomial.polyval(s, alpha) * s**pad), 1e-12)
    roots = np.polynomial.polynomial.polyroots(alpha)
    roots = -np.abs(roots.real) + 1j * roots.imag
    shared = form.shared_from(np.real(np.polynomial.polynomial.polyfromroots(roots)))
    if not np.all(np.isfinite(shared)):
        return []
    theta = form.parameters_from(b, shared, delay / scale)
    return [theta * scale**form.time_powers]


def _findings(response: Response, cost: float, dof: int, stated: bool) -> list[Warning_]:
    from scipy import special

    out = []
    if stated and float(special.chdtrc(max(dof, 1), cost)) < RARE:
        out.append(
            Warning_(
                "form-does-not-hold",
                f"the response lies {math.sqrt(cost / max(dof, 1)):.2g} times its stated uncertainty off the form; "
                "the parameters' u rests on what was stated",
            )
        )
    if not stated:
        out.append(
            Warning_(
                "uncertainty-not-stated",
                "the response has no stated uncertainty: one relative size for all points is taken and found from "
                "the scatter",
            )
        )
    if response.magnitude_only:
        out.append(
            Warning_(
                "needs-phase", "magnitudes alone do not determine a dead time or on which side a zero lies"
            )
        )
    return out


def _assembled(
    response: Response,
    form: Form,
    trial: Trial,
    theta: Array,
    covariance: Array,
    dof: float,
    warnings: Sequence[Warning_],
) -> Fit:
    units = form.units(response.output_units, response.input_units)
    u = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    parameters = {
        name: Uncertain(float(theta[k]), 0.0, units[k], math.inf, "exact")
        if name in trial.held
        else Uncertain(float(theta[k]), float(u[k]), units[k], dof)
        for k, name in enumerate(form.names)
    }
    matrix = form.transfer_matrix(theta)
    gain, _ = gain_with_derivative(form, theta, response.frequency)
    rest = response.gain - gain if not response.magnitude_only else np.abs(response.gain) - np.abs(gain)
    m = response.frequency.size
    size = np.full(response.gain.shape, np.nan)
    if response.covariance is not None:
        size = np.sqrt(0.5 * np.trace(response.covariance, axis1=-2, axis2=-1))
    coherence = response.coherence if response.coherence is not None else np.full(m, np.nan)
    residual = tuple(
        Residual(
            output=name,
            rms=float(np.sqrt(np.mean(np.abs(rest[:, i]) ** 2))),
            unit=units[0] if form.single else "",
            explained=1.0 - float(np.sum(np.abs(rest[:, i]) ** 2) / np.sum(np.abs(response.gain[:, i]) ** 2)),
            noise="stated" if math.isinf(dof) else "white",
            effective_samples=float(m),
        )
        for i, name in enumerate(form.outputs)
    )
    provenance = response.provenance
    return Fit(
        form=form,
        road="frequency",
        names=form.names,
        parameters=parameters,
        covariance=covariance,
        transfer_function=matrix,
        derived=derived_quantities(form.names, theta, covariance, dof),
        output_units=tuple(response.output_units),
        input_units=tuple(response.input_units),
        interval=math.nan,
        samples=m,
        between="response",
        held=tuple(trial.held),
        response=MeasuredResponse(response.frequency, response.gain, size, coherence),
        residual=residual,
        warnings=tuple(warnings),
        log={
            "file": provenance.file or None,
            "sha256": provenance.sha256 or None,
            "samples": m,
            "interval": None,
            "inputs": list(form.inputs),
            "outputs": list(form.outputs),
            "how_read": list(provenance.how_read),
        },
    )
