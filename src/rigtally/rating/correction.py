"""The signal with the sensor's dynamics taken out, with the uncertainty of each sample: `correct`.

The inverse of the fitted transfer function is cut off smoothly where it would amplify the noise more than
`guard` times, and applied as a two-sided filter of finite length: stable whatever the zeros, dead time and
right-half-plane zeros are met by looking ahead. Source of the frame: JCGM 101 propagation through a filter,
first order in the fitted parameters.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import signal

from rigtally.errors import FitError, LogError, UsageError
from rigtally.estimation.result import Fit
from rigtally.forms.response import gain_with_derivative

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
ROLL = 1.5  # the filter falls from 1 to 0 between the cut-off and this multiple of it
LONG = 8.0  # taps reach this many periods of the fall to each side
LONGEST = 200_001


@dataclass(frozen=True)
class Correction:
    """A corrected signal.

    Attributes
    ----------
    value : (n,) array, unit of the fit's input (of its rate, for a rate sensor)
    u : (n,) array
        Standard uncertainty: noise, the fit's covariance, and the cut-off's bias; NaN within `reach`
        of the ends.
    u_noise : float; u_fit, u_bias : (n,) arrays
        Its parts.
    uncorrected : (n,) array
        The output over K, for comparison.
    determined : (n,) bool
        False at the ends and where what lies beyond the cut-off could be more than the uncertainty says.
    cutoff : float, rad/s
        Up to here the signal is corrected in full.
    reach : float
        Seconds of signal before and after a sample that its value rests on.
    """

    value: Array
    u: Array
    u_noise: float
    u_fit: Array
    u_bias: Array
    uncorrected: Array
    determined: NDArray[np.bool_]
    interval: float
    cutoff: float
    reach: float
    unit: str

    def band(self) -> tuple[Array, Array]:
        """Pointwise 95 % limits."""
        return self.value - 1.959963984540054 * self.u, self.value + 1.959963984540054 * self.u

    def to_dict(self) -> dict[str, Any]:
        """For JSON: how it was corrected, and how well, without the samples."""
        good = self.determined
        return {
            "schema": "rigtally/correction/1",
            "samples": int(self.value.size),
            "interval": self.interval,
            "unit": self.unit,
            "cutoff": {"value": self.cutoff, "unit": "rad/s"},
            "reach": self.reach,
            "determined": float(np.mean(good)) if good.size else None,
            "u_median": float(np.median(self.u[good])) if good.any() else None,
            "largest_correction": float(np.max(np.abs(self.value - self.uncorrected)[good]))
            if good.any()
            else None,
        }


class Corrector:
    """The filters of a correction: one for the value, one for each fitted parameter, one for the bias.

    Parameters
    ----------
    guard : float
        Largest amplification of the noise's spectrum over 1/|K|.
    noise : float, optional
        Standard deviation of the output's noise (white); the fit's residual unless stated.
    cutoff : float, optional
        rad/s; by `guard` unless stated.
    """

    def __init__(
        self, fit: Fit, interval: float, *, guard: float = 10.0, noise: float | None = None,
        cutoff: float | None = None,
    ) -> None:  # fmt: skip
        form = fit.form
        if not form.single or form.is_highpass(0, 0) or form.powers[0][0][0] > 1 or form.integrators:
            raise UsageError(
                f"a signal cannot be recovered through the form {form.name!r}", where="correct",
                do="take one output over one input whose gain at low frequency (or of the rate) is not 0",
                code="not-correctable",
            )  # fmt: skip
        if not interval > 0 or not guard >= 1:
            raise UsageError(f"interval {interval}, guard {guard}", where="correct",
                             do="take an interval above 0 and a guard of at least 1", code="bad-value")  # fmt: skip
        free = [k for k, n in enumerate(fit.names) if n not in fit.held]
        covariance = np.asarray(fit.covariance, dtype=float)[np.ix_(free, free)]
        if not np.all(np.isfinite(covariance)):
            raise FitError("the fit leaves a parameter undetermined", where="correct",
                           do="hold it, or fit a log that shows it", code="not-determined")  # fmt: skip
        if noise is None and not fit.residual:
            raise UsageError("the noise is not known", where="correct", do="state noise=", code="no-noise")
        self.noise = float(fit.residual[0].rms if noise is None else noise)
        self.interval = float(interval)
        self.rate = form.powers[0][0][0] == 1
        theta = np.array([fit.parameters[n].value for n in fit.names])
        self.gain = _low_gain(fit, self.rate)
        self.cutoff = self._cut(fit, theta, guard) if cutoff is None else float(cutoff)
        if not 0 < ROLL * self.cutoff < math.pi / interval:
            raise UsageError(
                f"a cut-off of {self.cutoff:.4g} rad/s does not lie below half the sampling rate",
                where="correct", do="state a lower cutoff", code="bad-value",
            )  # fmt: skip
        fall = (ROLL - 1.0) * self.cutoff / (2.0 * math.pi)
        self.half = math.ceil(LONG / fall / interval)
        taps = 2 * self.half + 1
        if taps > LONGEST:
            raise UsageError(f"the filter would have {taps} taps", where="correct",
                             do="thin the log out first, or state a higher cutoff", code="too-long")  # fmt: skip
        inverse, by = self._spectra(fit, theta, self.cutoff, taps)
        self.kernel = self._taps(inverse, taps)
        root = _root(covariance)
        self.by_fit = [self._taps(column, taps) for column in (by[:, free] @ root).T]
        narrow, _ = self._spectra(fit, theta, self.cutoff / ROLL, taps)
        self.narrow = self._taps(narrow, taps)
        self.u_noise = self.noise * float(np.linalg.norm(self.kernel))
        self.u_noise_bias = self.noise * float(np.linalg.norm(self.kernel - self.narrow))
        self.unit = (fit.input_units[0] if fit.input_units else "") + ("/s" if self.rate else "")

    def _response(self, fit: Fit, theta: Array, omega: Array) -> tuple[ComplexArray, ComplexArray]:
        """Gain from the corrected quantity (the rate, for a rate sensor) to the output; its derivative."""
        gain, slope = gain_with_derivative(fit.form, theta, omega)
        over = 1j * omega if self.rate else np.ones_like(omega)
        return gain[:, 0, 0] / over, slope[:, 0, 0] / over[:, None]

    def _cut(self, fit: Fit, theta: Array, guard: float) -> float:
        top = math.pi / self.interval / (1.05 * ROLL)
        omega = np.geomspace(1e-6 * top, top, 4000)
        size = np.abs(self._response(fit, theta, omega)[0]) / abs(self.gain)
        below = np.flatnonzero(size < 1.0 / guard)
        return float(omega[below[0]]) / ROLL if below.size else top

    def _spectra(
        self, fit: Fit, theta: Array, cutoff: float, taps: int
    ) -> tuple[ComplexArray, ComplexArray]:
        omega: Array = np.asarray(2.0 * math.pi * np.fft.rfftfreq(_length(taps), self.interval), dtype=np.float64)
        window = _fall(omega, cutoff)
        at = np.maximum(omega, 1e-9 / self.interval)
        gain, slope = self._response(fit, theta, at)
        safe = np.where(window > 0, gain, 1.0)
        inverse: ComplexArray = np.asarray(window / safe, dtype=np.complex128)
        inverse[0] = inverse[0].real
        by: ComplexArray = -(window / safe**2)[:, None] * slope
        by[0] = by[0].real
        return inverse, by

    def _taps(self, spectrum: ComplexArray, taps: int) -> Array:
        """Two-sided taps, centred; their sum keeps the gain at rest."""
        full = np.fft.irfft(spectrum, _length(taps))
        out = np.concatenate([full[-self.half :], full[: self.half + 1]])
        return np.asarray(out + (spectrum[0].real - out.sum()) / taps, dtype=np.float64)

    def apply(self, samples: Array) -> tuple[Array, Array, Array]:
        """(value, u_fit, u_bias) for (n,) samples, 'same' length; the ends lack their neighbours."""

        def run(taps: Array) -> Array:
            # about the mean, so that the ends are not a step from zero
            out = signal.oaconvolve(samples - middle, taps, mode="full")[self.half : self.half + samples.size]
            return np.asarray(out + middle * taps.sum())

        middle = float(np.mean(samples))
        value = run(self.kernel)
        u_fit = np.sqrt(sum((run(taps) ** 2 for taps in self.by_fit), np.zeros(samples.size)))
        # what the last part of the band holds hints at what lies beyond it; noise alone is taken out
        hint = value - run(self.narrow)
        u_bias = np.sqrt(np.maximum(hint**2 - self.u_noise_bias**2, 0.0) / 3.0)
        wide = min(2 * max(1, self.half // 8) + 1, samples.size)
        smooth = np.sqrt(np.maximum(signal.oaconvolve(u_bias**2, np.full(wide, 1.0 / wide), mode="same"), 0.0))
        quiet = smooth < 3.0 * self.u_noise_bias  # no more than the scatter of the noise in that part
        return value, u_fit, np.where(quiet, 0.0, smooth)

    def stream(self, blocks: Iterable[Array]) -> Iterator[tuple[Array, Array]]:
        """(value, u) block by block for logs that do not fit in memory.

        Each block comes out later by `half` samples; the first and last `half` samples have u NaN. The
        parts of u that depend on the signal are those of `apply` on the block with its neighbours.
        """
        first, done = True, False
        waiting = np.zeros(0)
        source = iter(blocks)
        while not done:
            block = next(source, None)
            done = block is None
            if block is not None:
                waiting = np.concatenate([waiting, np.asarray(block, dtype=float)])
                if waiting.size < 6 * self.half + 1:
                    continue
            if waiting.size == 0:
                return
            value, u_fit, u_bias = self.apply(waiting)
            u = np.sqrt(self.u_noise**2 + u_fit**2 + u_bias**2)
            margin = 2 * self.half  # the smoothed bias reaches beyond the filter itself
            if first:
                u[: self.half] = np.nan
            if done:
                u[max(0, u.size - self.half) :] = np.nan
            start = 0 if first else margin
            stop = waiting.size if done else waiting.size - margin
            yield value[start:stop], u[start:stop]
            waiting = waiting[max(0, stop - margin) :] if not done else waiting
            first = False


def correct(
    samples: ArrayLike, interval: float, fit: Fit, *, guard: float = 10.0, noise: float | None = None,
    cutoff: float | None = None,
) -> Correction:
    """The input of a fitted sensor from its output.

    Parameters
    ----------
    samples : (n,) output of the sensor, SI
    interval : float, s
    guard, noise, cutoff : see `Corrector`

    Raises
    ------
    UsageError, FitError
        The form or the fit does not allow it.
    LogError
        "not-finite" or "too-short".
    """  # fmt: skip
    y = np.asarray(samples, dtype=float)
    if y.ndim != 1 or not np.all(np.isfinite(y)):
        raise LogError("the signal has missing or non-finite samples", where="correct",
                       do="correct a stretch without gaps", code="not-finite")  # fmt: skip
    filters = Corrector(fit, interval, guard=guard, noise=noise, cutoff=cutoff)
    if y.size <= 2 * filters.half:
        raise LogError(
            f"the signal has {y.size} samples; a correction up to {filters.cutoff:.3g} rad/s rests on "
            f"{2 * filters.half + 1}", where="correct", do="take a longer record, or state a higher cutoff",
            code="too-short",
        )  # fmt: skip
    value, u_fit, u_bias = filters.apply(y)
    u = np.sqrt(filters.u_noise**2 + u_fit**2 + u_bias**2)
    inside = np.zeros(y.size, dtype=bool)
    inside[filters.half : y.size - filters.half] = True
    u[~inside] = np.nan
    return Correction(
        value=value,
        u=u,
        u_noise=filters.u_noise,
        u_fit=u_fit,
        u_bias=u_bias,
        uncorrected=y / filters.gain,
        determined=inside & (u_bias == 0.0),
        interval=float(interval),
        cutoff=filters.cutoff,
        reach=filters.half * float(interval),
        unit=filters.unit,
    )


def _fall(omega: Array, cutoff: float) -> Array:
    """1 up to the cut-off, 0 from ROLL times it, smooth in all derivatives between."""
    x = np.clip((omega / cutoff - 1.0) / (ROLL - 1.0), 0.0, 1.0)
    inner = np.clip(x, 1e-3, 1.0 - 1e-3)
    between = 1.0 / (1.0 + np.exp(np.clip(1.0 / (1.0 - inner) - 1.0 / inner, -700.0, 700.0)))
    return np.where(x <= 1e-3, 1.0, np.where(x >= 1.0 - 1e-3, 0.0, between))


def _low_gain(fit: Fit, rate: bool) -> float:
    """K: the gain of the corrected quantity at rest."""
    numerators, denominator = fit.transfer_function.numerators, fit.transfer_function.denominator
    return float(numerators[0, 0, 1 if rate else 0] / denominator[0])


def _length(taps: int) -> int:
    return 1 << math.ceil(math.log2(4 * taps))


def _root(covariance: Array) -> Array:
    size = np.sqrt(np.clip(np.diag(covariance), 0.0, None))
    unit = np.where(size > 0, size, 1.0)
    values, vectors = np.linalg.eigh(covariance / np.outer(unit, unit))
    out: Array = unit[:, None] * vectors * np.sqrt(np.clip(values, 0.0, None))
    return out
