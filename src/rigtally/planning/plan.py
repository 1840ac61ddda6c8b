"""Which test reaches a wanted uncertainty: `plan`.

The Fisher information of a record with white noise s on the output is F = JᵀJ/s², J the exact derivative
of the sampled response by the parameters (and by an offset); no unbiased fit has a covariance below F⁻¹
(Cramér-Rao), and a least-squares fit reaches it on records of this length.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import UsageError
from rigtally.forms.named import Form
from rigtally.forms.response import gain_with_derivative
from rigtally.physics.prediction_result import Prediction
from rigtally.quantities.coverage import coverage_factor

Array = NDArray[np.float64]
EXCITATIONS = ("step", "staircase", "sweep", "broadband")
LENGTHS = (10.0, 20.0, 40.0, 80.0)  # record, in slowest time constants
DENSITY = 30.0  # samples in the shortest period
SAMPLES = 400_000
CAUTION = (
    "A test that moves pressure, heat or rotating parts is done under the local code and by licensed persons; "
    "the amplitude stated here is the one asked for, not a permitted one."
)


@dataclass(frozen=True)
class Option:
    """One test that would reach what is wanted.

    u : mapping of parameter to the standard uncertainty after all repeats; NaN where it does not show.
    total : seconds of logging.
    """

    excitation: str
    length: float
    interval: float
    samples: int
    repeats: int | None
    total: float
    u: Mapping[str, float]

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "excitation": self.excitation,
            "length": self.length,
            "sampling_rate": 1.0 / self.interval,
            "samples": self.samples,
            "repeats": self.repeats,
            "total": self.total if math.isfinite(self.total) else None,
            "u": {name: x if math.isfinite(x) else None for name, x in self.u.items()},
        }


@dataclass(frozen=True)
class Plan:
    """Options by rising cost; the first is the one to take. `curve` has every option that was looked at."""

    best: Option | None
    options: tuple[Option, ...]
    curve: tuple[Option, ...]
    want: Mapping[str, float]
    noise: float
    amplitude: float
    caution: str = CAUTION

    def to_dict(self) -> dict[str, Any]:
        """For JSON ("rigtally/plan/1")."""
        return {
            "schema": "rigtally/plan/1",
            "best": None if self.best is None else self.best.to_dict(),
            "options": [x.to_dict() for x in self.options],
            "cost_curve": [x.to_dict() for x in self.curve],
            "want": dict(self.want),
            "noise": self.noise,
            "amplitude": self.amplitude,
            "caution": self.caution,
        }


def plan(
    prediction: Prediction,
    noise: float,
    want: Mapping[str, float],
    *,
    amplitude: float = 1.0,
    most_repeats: int = 1000,
) -> Plan:
    """Excitation, sampling rate, length and repeats for a wanted uncertainty.

    Parameters
    ----------
    noise : standard deviation of the output's noise (white), SI
    want : parameter -> relative expanded uncertainty (95 %), such as {"natural_frequency": 0.01}
    amplitude : size of the input's movement, SI; keep it under the rig's validity limits
    most_repeats : more repeats than this are not a plan

    Raises
    ------
    UsageError
        "bad-value", "unknown-parameter", "one-entry" or "integrates".
    """
    form = prediction.form
    if not noise > 0 or not amplitude > 0:
        raise UsageError(f"noise {noise}, amplitude {amplitude}", where="plan", do="state both above 0",
                         code="bad-value")  # fmt: skip
    if not form.single:
        raise UsageError("a plan is made for one output over one input", where="plan",
                         do="name one reading and one drive", code="one-entry")  # fmt: skip
    if form.integrators:
        raise UsageError("the rig integrates: its output does not come to rest", where="plan",
                         do="read the rate of the output instead", code="integrates")  # fmt: skip
    for name, share in want.items():
        if name not in prediction.names:
            raise UsageError(f"{name!r} is not a parameter of the prediction", where="plan",
                             do="choose one of: " + ", ".join(prediction.names), code="unknown-parameter")  # fmt: skip
        if not share > 0:
            raise UsageError(f"want {name} = {share}", where="plan", do="state it above 0", code="bad-value")
    theta = np.array([prediction.parameters[n].value for n in prediction.names])
    poles = prediction.transfer_function.poles
    if np.any(poles.real >= 0):
        raise UsageError("the rig is not stable", where="plan", do="look at the prediction first", code="bad-value")
    slow, fast = 1.0 / np.min(-poles.real), float(np.max(np.abs(poles)))
    interval = 2.0 * math.pi / (DENSITY * fast)
    curve = []
    for excitation in EXCITATIONS:
        for factor in LENGTHS:
            length = factor * slow
            count = math.ceil(length / interval) + 1
            if count > SAMPLES:
                continue
            u_in = excitation_samples(excitation, count, interval, fast, amplitude)
            covariance = record_covariance(form, theta, u_in, interval, noise)
            curve.append(
                _option(excitation, length, interval, count, covariance, theta, prediction, want, most_repeats)
            )
    reached = [x for x in curve if x.repeats is not None]
    ordered = tuple(sorted(reached, key=lambda x: (x.total, x.samples)))
    return Plan(ordered[0] if ordered else None, ordered, tuple(curve), dict(want), noise, amplitude)


def excitation_samples(name: str, count: int, interval: float, fast: float, amplitude: float) -> Array:
    """(n,) input between 0 and `amplitude` (held between samples).

    A step after a tenth of the record; a staircase of four levels up and down; a sweep of frequency from
    `fast`/20 to 3·`fast` (exponential); a two-level pseudo-random signal, the same at every call.
    """
    time = interval * np.arange(count)
    whole = interval * count
    if name == "step":
        return np.where(time < 0.1 * whole, 0.0, amplitude)
    if name == "staircase":
        levels = np.array([0, 1, 2, 3, 4, 3, 2, 1]) / 4.0
        return np.asarray(amplitude * levels[np.minimum((8 * time / whole).astype(int), 7)])
    if name == "sweep":
        low, high = fast / 20.0, 3.0 * fast
        ratio = math.log(high / low)
        phase = low * whole / ratio * (np.exp(ratio * time / whole) - 1.0)
        return np.asarray(0.5 * amplitude * (1.0 - np.cos(phase)))
    hold = max(1, round(math.pi / (3.0 * fast) / interval))
    bits = np.random.default_rng(1).integers(0, 2, count // hold + 1)
    return np.asarray(amplitude * np.repeat(bits, hold)[:count], dtype=float)


def record_covariance(form: Form, theta: Array, u_in: Array, interval: float, noise: float) -> Array:
    """(p, p) least covariance of the parameters from one record that starts at rest, an offset being free.

    The response and its derivatives come from the exact gain at the bins of a record padded with the input's
    last value going back to 0 beyond the record's end; the held input's spectrum takes the hold, and what the
    response has above half the sampling rate is left out (little: `DENSITY` samples in the shortest period).
    """
    n = u_in.size
    total = 1 << math.ceil(math.log2(3 * n))
    padded = np.zeros(total)
    padded[:n] = u_in
    back = np.arange(total - n)
    padded[n:] = u_in[-1] * np.clip(1.0 - back / (0.3 * n), 0.0, 1.0)
    omega: Array = np.asarray(2.0 * math.pi * np.fft.rfftfreq(total, interval), dtype=np.float64)
    _, slope = gain_with_derivative(form, theta, omega)
    hold = np.sinc(omega * interval / (2.0 * math.pi)) * np.exp(-0.5j * omega * interval)
    spectrum = np.fft.rfft(padded) * hold
    j = np.fft.irfft(slope[:, 0, 0] * spectrum[:, None], total, axis=0)[:n]
    size = np.maximum(np.linalg.norm(j, axis=0), 1e-300)
    scaled = np.column_stack([j / size, np.full(n, 1.0 / math.sqrt(n))])
    information = scaled.T @ scaled
    values, vectors = np.linalg.eigh(information)
    if values[0] < 1e-12:
        return np.full((theta.size, theta.size), np.nan)
    inverse = (vectors / values) @ vectors.T
    return np.asarray(noise**2 * inverse[:-1, :-1] / np.outer(size, size), dtype=np.float64)


def _option(
    excitation: str, length: float, interval: float, count: int, covariance: Array, theta: Array,
    prediction: Prediction, want: Mapping[str, float], most: int,
) -> Option:  # fmt: skip
    one = np.sqrt(np.diag(covariance))
    factor = coverage_factor(0.95)
    needed = 1.0
    for name, share in want.items():
        k = prediction.names.index(name)
        ratio = factor * one[k] / (share * abs(theta[k]))
        needed = max(needed, ratio**2 if np.isfinite(ratio) else math.inf)
    repeats = math.ceil(needed - 1e-9) if needed <= most else None
    u = one / math.sqrt(repeats or 1)
    return Option(
        excitation, length, interval, count, repeats, length * repeats if repeats else math.inf,
        {name: float(x) for name, x in zip(prediction.names, u, strict=True)},
    )  # fmt: skip
