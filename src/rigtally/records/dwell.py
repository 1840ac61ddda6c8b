"""Sine fits to dwells: each becomes one line of a frequency response with its uncertainty.

Model: x(t) = A cos ωt + B sin ωt + C. Three parameters with known ω are linear; with ω free they are iterated
(IEEE Std 1057, three- and four-parameter sine fit; the standard's formulas from memory, here by
Gauss-Newton).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.event import Event
from rigtally.records.levels import correlation_length
from rigtally.records.record import Record, Response

Array = NDArray[np.float64]


@dataclass(frozen=True)
class SineFit:
    """A fitted sine.

    Attributes
    ----------
    frequency, u_frequency : float
        ω in rad/s (u is 0 where ω was given).
    phasor : complex
        A − jB: x = Re(phasor · exp(jωt)) + C.
    covariance : (2, 2) array
        Of real and imaginary part.
    offset : float
    sigma : float
        Standard deviation of the residual.
    dof : float
        Independent samples less parameters.
    distortion : float
        Root of the power at 2ω and 3ω over the power at ω.
    """

    frequency: float
    u_frequency: float
    phasor: complex
    covariance: Array
    offset: float
    sigma: float
    dof: float
    distortion: float

    @property
    def amplitude(self) -> Uncertain:
        """|phasor| with its u along its own direction."""
        size = abs(self.phasor)
        direction = np.array([self.phasor.real, self.phasor.imag]) / max(size, 1e-300)
        return Uncertain(size, math.sqrt(float(direction @ self.covariance @ direction)), dof=self.dof)


def fit_sine(time: Array, samples: Array, frequency: float, *, known: bool = False) -> SineFit:
    """Least squares of a sine near (or at) `frequency`.

    The residual's own correlation goes into u, harmonics are taken out of the residual first.

    Parameters
    ----------
    time, samples : (n,) arrays
        Seconds and SI; NaN is left out.
    frequency : float
        rad/s, within half a cycle over the record of the truth.
    known : bool
        Three parameters only.

    Raises
    ------
    LogError
        code "too-short": fewer than eight samples.
    """
    seen = np.isfinite(samples)
    t, x = time[seen], samples[seen]
    if t.size < 8:
        raise LogError("a sine fit needs eight samples", do="take a longer stretch", code="too-short")
    origin = 0.5 * (t[0] + t[-1])
    t = t - origin
    omega = float(frequency)
    ones = np.ones_like(t)
    for _ in range(1 if known else 30):
        c, s = np.cos(omega * t), np.sin(omega * t)
        linear = np.stack([c, s, ones], axis=1)
        (a, b, _), *_ = np.linalg.lstsq(linear, x, rcond=None)
        if known:
            break
        # derivative to ω at the present A and B: the fourth column
        design = np.column_stack([linear, t * (b * c - a * s)])
        solved, *_ = np.linalg.lstsq(design, x, rcond=None)
        change = float(solved[3])
        span = t[-1] - t[0]
        omega += float(np.clip(change, -0.5 * math.pi / span, 0.5 * math.pi / span))
        if abs(change) * span < 1e-10:
            break
    c, s = np.cos(omega * t), np.sin(omega * t)
    linear = np.stack([c, s, ones], axis=1)
    (a, b, offset), *_ = np.linalg.lstsq(linear, x, rcond=None)
    design = linear if known else np.column_stack([linear, t * (b * c - a * s)])
    residual = x - linear @ np.array([a, b, offset])
    harmonics = np.stack([f(k * omega * t) for k in (2, 3) for f in (np.cos, np.sin)], axis=1)
    higher, *_ = np.linalg.lstsq(harmonics, residual, rcond=None)
    clean = residual - harmonics @ higher
    parameters = design.shape[1] + 4
    variance = float(clean @ clean) / max(t.size - parameters, 1)
    length = correlation_length(clean)
    covariance = variance * _local_colour(clean, omega, t) * np.linalg.inv(design.T @ design)
    # back to the record's own zero of time
    phasor = complex(a, -b) * np.exp(-1j * omega * origin)
    turn = np.array([[math.cos(omega * origin), math.sin(omega * origin)],
                     [-math.sin(omega * origin), math.cos(omega * origin)]])  # fmt: skip
    flip = np.diag([1.0, -1.0])
    rotated = turn @ flip @ covariance[:2, :2] @ flip @ turn.T
    return SineFit(
        omega,
        0.0 if known else math.sqrt(float(covariance[3, 3])),
        complex(phasor),
        rotated,
        float(offset),
        math.sqrt(variance),
        max(t.size / length - parameters, 1.0),
        float(np.hypot.reduce(higher) / max(abs(phasor), 1e-300)),
    )


def _local_colour(residual: Array, omega: float, t: Array) -> float:
    """Density of the residual around ω over its mean: what coloured noise is there that the sine fit sees.

    Mean periodogram ordinate of 24 bins on both sides of ω over the residual's variance.
    """
    power = np.abs(np.fft.rfft(residual)) ** 2 / residual.size
    step = float(t[-1] - t[0]) / (t.size - 1)
    centre = omega * step * residual.size / (2.0 * np.pi)
    bins = np.arange(power.size)
    near = (
        (np.abs(bins - centre) <= 14.0) & (np.abs(bins - centre) > 1.5) & (bins > 0) & (bins < power.size - 1)
    )
    variance = float(np.mean(residual**2))
    if near.sum() < 8 or variance <= 0.0:
        return 1.0
    return float(np.mean(power[near]) / variance)


def dwell_response(record: Record, dwells: Sequence[Event], inputs: str, outputs: Sequence[str]) -> Response:
    """One line of a frequency response for each dwell.

    ω is fitted to the input, whose phasor divides the outputs'; covariances of both go into that of the gain
    (to first order, input and output noise independent).

    Raises
    ------
    LogError
        code "no-dwells".
    """
    dwells = [event for event in dwells if event.kind == "dwell"]
    if not dwells:
        raise LogError(
            "the record has no sine dwell",
            where=record.provenance.file,
            do="see rigtally inspect",
            code="no-dwells",
        )
    lines = sorted((_line(record, event, inputs, outputs) for event in dwells), key=lambda line: line[0])
    return Response(
        frequency=np.array([line[0] for line in lines]),
        gain=np.stack([line[1] for line in lines])[:, :, None],
        covariance=np.stack([line[2] for line in lines])[:, :, None],
        outputs=tuple(outputs),
        inputs=(inputs,),
        output_units=tuple(record.channel(name).unit for name in outputs),
        input_units=(record.channel(inputs).unit,),
        provenance=record.provenance,
    )


def _line(
    record: Record, event: Event, inputs: str, outputs: Sequence[str]
) -> tuple[float, NDArray[np.complex128], Array]:
    part = record.window(*event.window)
    time = part.time
    start = 2.0 * math.pi * event.features["frequency"].value
    drive = fit_sine(time, part.channel(inputs).samples, start)
    gains, covariances = [], []
    for name in outputs:
        reading = fit_sine(time, part.channel(name).samples, drive.frequency, known=True)
        gain = reading.phasor / drive.phasor
        gains.append(gain)
        covariances.append(
            _through(1.0 / drive.phasor, reading.covariance)
            + _through(-gain / drive.phasor, drive.covariance)
        )
    return drive.frequency, np.array(gains, dtype=np.complex128), np.stack(covariances)


def _through(factor: complex, covariance: Array) -> Array:
    """Covariance of factor · z for complex z."""
    turn = np.array([[factor.real, -factor.imag], [factor.imag, factor.real]])
    return np.asarray(turn @ covariance @ turn.T)
