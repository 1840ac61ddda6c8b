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
from numpy.typing import ArrayLike, NDArray

from rigtally.errors import LogError
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


def response(input: ArrayLike, output: ArrayLike, interval: float, segments: int = 32) -> MeasuredResponse:
    """The frequency response of a long, steadily moving record without any form: H1 by averaged windows.

    The record is cut into half-overlapping Hann windows (Welch, IEEE Trans. Audio Electroacoust. 15 (1967) 70, from
    memory), cross-spectra are averaged over windows and over bands of neighbouring bins. For a single step use
    `fit`, whose `response` takes the record's ends into account.

    Parameters
    ----------
    input, output : (n,) or (channels, n) arrays, SI, without gaps
    interval : float, s
    segments : int
        Length of a window = n / segments.

    Returns
    -------
    MeasuredResponse
        frequency (m,) rad/s, gain and u (m, outputs, inputs), coherence (m,)

    Raises
    ------
    LogError
        code "no-response": too short, with gaps, or an input that does not move.
    """
    u = np.atleast_2d(np.asarray(input, dtype=float))
    y = np.atleast_2d(np.asarray(output, dtype=float))
    length = u.shape[1] // max(segments, 1)
    complete = u.shape[1] == y.shape[1] and np.all(np.isfinite(u)) and np.all(np.isfinite(y))
    if not complete or length < 64 or np.any(np.ptp(u, axis=1) == 0.0):
        raise LogError(
            "no frequency response can be measured from this record",
            do=f"use complete channels of at least {64 * segments} samples, and inputs that move",
            code="no-response",
        )
    window = np.hanning(length)
    starts = range(0, u.shape[1] - length + 1, length // 2)

    def spectra(rows: Array) -> NDArray[np.complex128]:
        cut = np.array([rows[:, k : k + length] for k in starts])
        cut = cut - cut.mean(axis=2, keepdims=True)
        return np.fft.rfft(cut * window, axis=2)[:, :, 1:]

    su, sy = spectra(u), spectra(y)
    # of windows that overlap by half, 0.95 are independent; of a Hann window's bins, two thirds
    worth = 0.95 * 2.0 / 3.0
    rows = []
    for begin, end in pairwise(_bands(su.shape[2] + 1, 3)):
        found = _band_response(su[:, :, begin - 1 : end - 1], sy[:, :, begin - 1 : end - 1], worth)
        if found is not None:
            rows.append((2 * np.pi * 0.5 * (begin + end - 1) / (length * interval), *found))
    frequency, gain, size, coherence = zip(*rows, strict=True)
    return MeasuredResponse(np.array(frequency), np.array(gain), np.array(size), np.array(coherence))


def _band_response(
    su: NDArray[np.complex128], sy: NDArray[np.complex128], worth: float
) -> tuple[NDArray[np.complex128], Array, float] | None:
    """Gain (q, r), its u, and the least coherence of one band; None where the inputs move together."""
    r, q = su.shape[1], sy.shape[1]
    x = su.transpose(1, 0, 2).reshape(r, -1)
    z = sy.transpose(1, 0, 2).reshape(q, -1)
    power = x @ x.conj().T
    scale = np.sqrt(np.real(np.diag(power)))
    if np.any(scale == 0) or np.linalg.cond(power / np.outer(scale, scale)) > 1e8:
        return None
    inverse = np.linalg.inv(power)
    gain = z @ x.conj().T @ inverse
    left = np.sum(np.abs(z - gain @ x) ** 2, axis=1)
    total = np.sum(np.abs(z) ** 2, axis=1)
    free = max(worth * x.shape[1] - r, 1.0)
    noise = left / x.shape[1] * (worth * x.shape[1] / free)
    spread = np.real(np.diag(inverse)) / worth
    share = np.where(total > 0, left / np.where(total > 0, total, 1.0), 1.0)
    return gain, np.sqrt(0.5 * np.outer(noise, spread)), float(np.min(1.0 - share))
