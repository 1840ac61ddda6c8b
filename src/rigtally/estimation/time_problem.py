"""Residual and exact Jacobian of the time road, with the nuisance projected out (variable projection).

For given parameters θ the residual r = W(y - ŷ(θ)) is reduced by its best fit in the span of the whitened
nuisance columns Z(θ): P⊥r with P⊥ = I - QQᵀ, Z = QR. The Jacobian keeps the derivative of Z by the poles only
as far as it leaves the span of Z (Kaufman, BIT 15 (1975) 49; Golub & Pereyra 1973, from memory): free responses are
differentiated exactly.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.time_model import nuisance, outputs_and_derivatives, responses, stated_offset
from rigtally.estimation.time_noise import Noise
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import Form

Array = NDArray[np.float64]


def runs_of(valid: NDArray[np.bool_]) -> list[slice]:
    """Stretches of samples that are there, without a gap."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], valid, [False]]).astype(int)))
    return [slice(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]


@dataclass
class Problem:
    """One trial's data, prepared once; noise may be replaced between fits."""

    trial: Trial
    segments: Sequence[Segment]
    noise: list[Noise] = field(default_factory=list)
    runs: list[list[list[slice]]] = field(default_factory=list)
    valid: list[NDArray[np.bool_]] = field(default_factory=list)

    def __post_init__(self) -> None:
        for segment in self.segments:
            there = np.isfinite(segment.outputs)
            if segment.excitation == "release":
                there &= segment.time >= segment.at
            self.valid.append(there)
            self.runs.append([runs_of(row) for row in there])
        if not self.noise:
            self.noise = [Noise(np.array([1.0]), scale) for scale in self.output_scales()]

    @property
    def form(self) -> Form:
        """The form that is fitted."""
        return self.trial.form

    @property
    def outputs(self) -> int:
        """Number of outputs."""
        return len(self.form.outputs)

    def output_scales(self) -> list[float]:
        """A size of each output, so that a change of unit changes nothing."""
        out = []
        for i in range(self.outputs):
            values = np.concatenate(
                [s.outputs[i, v[i]] for s, v in zip(self.segments, self.valid, strict=True)]
            )
            spread = float(np.std(values)) if values.size else 0.0
            out.append(spread if spread > 0 else 1.0)
        return out

    @property
    def samples(self) -> int:
        """Number of output samples that are there."""
        return int(sum(v.sum() for v in self.valid))

    def _whitened(self, rows: Array, k: int, i: int) -> Array:
        cleaned = np.where(self.valid[k][i], rows, 0.0)
        white = self.noise[i].whiten(cleaned, self.runs[k][i])
        return white[..., self.valid[k][i]]

    def _basis(self, columns: Array, k: int, i: int) -> tuple[Array, Array]:
        """Orthonormal basis (m, c') of the whitened nuisance columns, and (c, c') that turns weights on it
        into coefficients of the columns; dependent columns share (least norm)."""
        z = self._whitened(columns, k, i)
        size = np.linalg.norm(z, axis=1)
        size = np.where(size > 0, size, 1.0)
        q, upper = np.linalg.qr((z / size[:, None]).T)
        left, singular, right = np.linalg.svd(upper)
        kept = singular > 1e-10 * max(float(singular.max()), 1e-300)
        back = (right[kept].T / singular[kept]) / size[:, None]
        return q @ left[:, kept], back

    def reduced(self, theta: Array) -> tuple[Array, Array, int]:
        """Whitened residual (m,), its Jacobian (m, p), and the number of nuisance parameters spent."""
        residuals, jacobians, spent = [], [], 0
        base = stated_offset(self.trial)
        _, shared, _ = self.form.split(theta)
        _, dden = self.form.denominator(shared)
        first = self.form.numerator_count
        for k, segment in enumerate(self.segments):
            found = responses(self.form, theta, segment, self.trial)
            y, dy = outputs_and_derivatives(self.form, theta, found, segment.count)
            columns = nuisance(self.trial, segment, found.free)
            if not (np.all(np.isfinite(y)) and np.all(np.isfinite(dy)) and np.all(np.isfinite(columns))):
                return np.full(self.samples, np.inf), np.zeros((self.samples, theta.size)), 0
            freely = not self.trial.rest or segment.excitation == "release"
            for i in range(self.outputs):
                r = self._whitened(segment.outputs[i] - base - y[i], k, i)
                moved = dy[:, i]
                if columns.shape[0]:
                    q, back = self._basis(columns, k, i)
                    weight = q.T @ r
                    if freely:
                        c = (back @ weight)[: self.form.degree]
                        by_a = np.tensordot(c, found.free_slopes, axes=(0, 0))
                        moved[first : first + shared.size] += dden[:, :-1] @ by_a[self.form.integrators :]
                    jac = -self._whitened(moved, k, i)
                    r = r - q @ weight
                    jac = jac - (jac @ q) @ q.T
                    spent += q.shape[1]
                else:
                    jac = -self._whitened(moved, k, i)
                residuals.append(r)
                jacobians.append(jac)
        return np.concatenate(residuals), np.concatenate(jacobians, axis=1).T, spent

    def fitted(self, theta: Array) -> tuple[tuple[Array, ...], dict[str, float]]:
        """(q, N) model outputs with their nuisance, one per segment, and the last nuisance values by name."""
        out, values = [], {}
        base = stated_offset(self.trial)
        for k, segment in enumerate(self.segments):
            found = responses(self.form, theta, segment, self.trial)
            y, _ = outputs_and_derivatives(self.form, theta, found, segment.count)
            y = y + base
            columns = nuisance(self.trial, segment, found.free)
            for i in range(self.outputs):
                if columns.shape[0]:
                    r = self._whitened(segment.outputs[i] - y[i], k, i)
                    q, back = self._basis(columns, k, i)
                    c = back @ (q.T @ r)
                    y[i] += c @ columns
                    tail = columns.shape[0] - (1 if self.trial.drift else 0) - 1
                    if self.trial.offset == "free":
                        values[f"offset of {self.form.outputs[i]}"] = float(c[tail])
            if segment.excitation == "release":
                y[:, segment.time < segment.at] = np.nan
            out.append(y)
        return tuple(out), values

    def residuals(self, theta: Array) -> list[list[Array]]:
        """Unwhitened residuals of each output: one array for each run of samples."""
        fitted, _ = self.fitted(theta)
        out: list[list[Array]] = [[] for _ in range(self.outputs)]
        for k, segment in enumerate(self.segments):
            for i in range(self.outputs):
                rest = segment.outputs[i] - fitted[k][i]
                out[i].extend(rest[run] for run in self.runs[k][i])
        return out

    @np.errstate(all="ignore")  # a candidate that overflows is answered with an infinite cost
    def best_numerator(self, shared: Array, dead: float) -> tuple[Array, float]:
        """Parameters with the best numerator for a given denominator, and their cost."""
        form = self.form
        count = form.numerator_count
        theta = form.parameters_from(np.ones(count), shared, dead)
        rows, rests = [], []
        base = stated_offset(self.trial)
        for k, segment in enumerate(self.segments):
            found = responses(form, theta, segment, self.trial, slopes=False)
            columns = nuisance(self.trial, segment, found.free)
            if not (np.all(np.isfinite(found.over_a)) and np.all(np.isfinite(columns))):
                return theta, np.inf
            for i in range(self.outputs):
                slots = np.zeros((count, segment.count))
                for c, (output, j, power) in enumerate(form.numerator_slots):
                    if output == i:
                        slots[c] = found.over_a[j, power]
                white = self._whitened(slots, k, i)
                r = self._whitened(segment.outputs[i] - base, k, i)
                if columns.shape[0]:
                    q, _ = self._basis(columns, k, i)
                    r = r - q @ (q.T @ r)
                    white = white - (white @ q) @ q.T
                rows.append(white)
                rests.append(r)
        table, r = np.concatenate(rows, axis=1), np.concatenate(rests)
        size = np.linalg.norm(table, axis=1)
        size = np.where(size > 0, size, 1.0)
        b = np.linalg.lstsq((table / size[:, None]).T, r, rcond=1e-12)[0] / size
        return form.parameters_from(b, shared, dead), float(np.sum((r - b @ table) ** 2))
