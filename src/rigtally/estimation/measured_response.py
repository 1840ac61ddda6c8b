"""The record's own frequency response, whatever the form says, for plots and for comparison.

H1 estimator with frequency smoothing: cross-spectra are averaged over bands of neighbouring bins and over the
segments; the record's ends are taken out with the fitted end terms, so that a step test leaks nothing:

    Ĝ(band) = Ĝ_model + <R U*> <U U*>⁻¹,

R the spectrum of the fit's residual. What the model lacks stands in R, so the estimate does not lean on the form.
Standard uncertainty of |Ĝ|: |Ĝ| √((1-γ²)/(2 n γ²)) for n averaged bins, Bendat & Piersol, Random Data (formula
opened in a secondary source).
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.result import MeasuredResponse
from rigtally.estimation.trial import Segment
from rigtally.forms.transfer_matrix import TransferMatrix

Array = NDArray[np.float64]
BANDS = 200


def measured_response(
    segments: Sequence[Segment], fitted: Sequence[Array], model: TransferMatrix
) -> MeasuredResponse | None:
    """Response of evenly sampled, complete segments; None where there is none to give.

    Parameters
    ----------
    segments, fitted : the records and the model's outputs (q, n) with their nuisance
    model : the fitted transfer matrix
    """
    usable = [
        (s, f)
        for s, f in zip(segments, fitted, strict=True)
        if s.stamps is None and s.excitation == "logged" and np.all(np.isfinite(s.outputs)) and s.count >= 64
    ]
    if not usable:
        return None
    count = min(s.count for s, _ in usable)
    interval = usable[0][0].interval
    u = np.array(
        [
            np.fft.rfft(s.inputs[:, :count] - s.inputs[:, :count].mean(axis=1, keepdims=True))
            for s, _ in usable
        ]
    )
    y = np.array([np.fft.rfft(s.outputs[:, :count] - f[:, :count]) for s, f in usable])
    edges = _bands(u.shape[2], max(5, 3 * u.shape[1] + 2))
    frequency, gain, size, coherence = [], [], [], []
    q, r = y.shape[1], u.shape[1]
    for begin, end in pairwise(edges):
        w = 2 * np.pi * 0.5 * (begin + end - 1) / (count * interval)
        rows_u = u[:, :, begin:end].transpose(1, 0, 2).reshape(r, -1)
        rest = y[:, :, begin:end].transpose(1, 0, 2).reshape(q, -1)
        bins = 2 * np.pi * np.arange(begin, end) / (count * interval)
        within = np.tile(model(bins).reshape(-1, q, r).transpose(1, 2, 0), (1, 1, len(usable)))
        rows_y = rest + np.einsum("qrm,rm->qm", within, rows_u)
        power = rows_u @ rows_u.conj().T
        if np.linalg.cond(power) > 1e10:
            continue
        found = rows_y @ rows_u.conj().T @ np.linalg.inv(power)
        left = rows_y - found @ rows_u
        n = rows_u.shape[1]
        noise = np.sum(np.abs(left) ** 2, axis=1) / max(n - r, 1)
        total = np.sum(np.abs(rows_y) ** 2, axis=1)
        spread = np.real(np.diag(np.linalg.inv(power)))
        frequency.append(w)
        gain.append(found)
        size.append(np.sqrt(0.5 * np.outer(noise, spread)))
        coherence.append(float(np.min(1.0 - noise * max(n - r, 1) / np.where(total > 0, total, 1.0))))
    if not frequency:
        return None
    return MeasuredResponse(np.array(frequency), np.array(gain), np.array(size), np.array(coherence))


def _bands(bins: int, narrowest: int) -> list[int]:
    """Edges of about BANDS bands, evenly spaced on a logarithmic scale, none narrower than `narrowest` bins."""
    edges = [1]
    ratio = (bins / 1.0) ** (1.0 / BANDS)
    while edges[-1] < bins - 1:
        edges.append(min(max(round(edges[-1] * ratio), edges[-1] + narrowest), bins))
    return edges
