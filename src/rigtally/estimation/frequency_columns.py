"""The least squares' columns on the bins: one per numerator coefficient, end term, drift and offset.

For given poles and dead time the output's spectrum is linear in everything else. Time runs in units of `scale`
seconds throughout, so that poles are near one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.frequency_model import Resolvent, horner, one_interval, resolvent
from rigtally.estimation.spectrum import Bins, SpectralSegment
from rigtally.forms.named import Form

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

BAND_LIMITED_EXTRA = 4  # end terms beyond the state's, where the input between samples is not exact


@dataclass(frozen=True)
class Problem:
    """What is fitted on which bins, in time units of `scale` seconds.

    Attributes
    ----------
    sigma : (q,) array
        Standard deviation by which each output's rows are divided.
    free_input : bool
        False for a release: there is no input, and so no numerator.
    hum : angular frequencies (rad/s) of lines that are fitted as sine and cosine
    """

    form: Form
    segments: tuple[SpectralSegment, ...]
    bins: tuple[Bins, ...]
    sigma: Array
    drift: bool = False
    free_input: bool = True
    scale: float = 1.0
    hum: tuple[float, ...] = ()
    offset_free: bool = True

    @property
    def slots(self) -> tuple[tuple[int, int, int], ...]:
        """Free numerator coefficients (output, input, power)."""
        return self.form.numerator_slots if self.free_input else ()

    @property
    def numbers(self) -> float:
        """Real numbers in all rows of all outputs."""
        return len(self.form.outputs) * sum(b.numbers for b in self.bins)

    def nuisances(self, segment: SpectralSegment, bins: Bins) -> int:
        """Nuisance columns of one output in one segment."""
        ends = self.form.degree + (BAND_LIMITED_EXTRA if segment.hold == "band-limited" else 0)
        ends -= 1 if self.form.integrators and self.free_input else 0
        return ends + int(self.drift) + 2 * len(self.hum) + int(self.constant(bins))

    def constant(self, bins: Bins) -> bool:
        """Whether a constant has a column (where bin 0 is used and the offset or an integrator is free)."""
        return bool(bins.index[0] == 0) and (self.offset_free or self.form.integrators > 0)


@dataclass(frozen=True)
class Columns:
    """Spectra of one segment's columns with derivatives by denominator parameters (and L).

    `driven` (slots, m), `ends` (e, m) with leading derivative axes in `ddriven`, `dends`; `fixed` (g, m) has
    none: drift, hum, offset.
    """

    driven: ComplexArray
    ddriven: ComplexArray
    ends: ComplexArray
    dends: ComplexArray
    fixed: ComplexArray


def columns(
    problem: Problem, segment: SpectralSegment, bins: Bins, shared: Array, dead_time: float
) -> Columns:
    """All columns of one segment (driven: for the slots of all outputs, in their order)."""
    form = problem.form
    interval = segment.interval / problem.scale
    own, down = form.denominator(shared)
    pad = form.integrators
    den = np.concatenate([np.zeros(pad), own])
    dden = np.concatenate([np.zeros((down.shape[0], pad)), down], axis=1)
    angle = segment.angle(bins.index)
    z = np.exp(1j * angle)
    delta = np.expm1(1j * angle) / interval
    lag = (dead_time + segment.delay / problem.scale) / interval
    whole = int(np.floor(lag + 1e-12))
    fraction = max(0.0, lag - whole)
    hold = "held" if segment.hold == "band-limited" else segment.hold
    found = resolvent(one_interval(den, dden, interval, fraction, hold))
    kept = dden.shape[0] + int(form.dead_time)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        inverse = 1.0 / horner(found.alpha, delta)
        slope = horner(found.dalpha[:kept], delta) * inverse  # d ln α
        at_zero = bins.index == 0
        if pad:
            inverse[at_zero], slope[:, at_zero] = 0.0, 0.0
        first = 1 if pad and problem.free_input else 0
        extra = BAND_LIMITED_EXTRA if segment.hold == "band-limited" else 0
        powers = np.arange(first, form.degree + extra)
        ends = z * inverse * delta ** powers[:, None]
        dends = -ends * slope[:, None, :]
        slots = problem.slots
        m = bins.index.size
        driven, ddriven = np.zeros((len(slots), m), complex), np.zeros((kept, len(slots), m), complex)
        if slots:
            make = _smooth_input if segment.hold == "band-limited" else _sampled_input
            driven, ddriven = make(
                problem,
                segment,
                bins,
                den,
                dden,
                found,
                (whole, fraction, interval),
                (z, delta, inverse, slope),
            )
            ddriven = ddriven[:kept]
    return Columns(driven, ddriven, ends, dends, _fixed(problem, segment, bins, z))


def _sampled_input(
    problem: Problem,
    segment: SpectralSegment,
    bins: Bins,
    den: Array,
    dden: Array,
    found: Resolvent,
    lag: tuple[int, float, float],
    grid: tuple[ComplexArray, ComplexArray, ComplexArray, ComplexArray],
) -> tuple[ComplexArray, ComplexArray]:
    """Held and ramped inputs and pulses: s^p/den between samples exactly."""
    whole, fraction, interval = lag
    z, delta, inverse, slope = grid
    n, k = den.size - 1, slope.shape[0]
    pairs = sorted({(j, p) for _, j, p in problem.slots})
    through = any(p == n for _, p in pairs)
    states = list(range(n)) if through else sorted({p for _, p in pairs})
    inputs = segment.inputs.shape[0]
    x = np.zeros((inputs, len(states), z.size), complex)
    dx = np.zeros((k, inputs, len(states), z.size), complex)
    taken = {}
    for tap, shift in ((0, whole + 1), (1, whole), (2, whole - 1)):
        moves = found.dnumerators[:k, tap]
        if not found.numerators[tap].any() and not moves.any():
            continue
        spectrum = segment.input_spectrum(shift)
        v = spectrum[:, bins.index]
        taken[tap] = v
        x += horner(found.numerators[tap][states], delta) * v[:, None, :]
        dx += horner(moves[:, states], delta)[:, None] * v[:, None, :]
        if problem.form.integrators:
            # bin 0 of the state equation: the integrator's end term is what the input's mean leaves
            level = spectrum[:, 0].real
            x -= (found.numerators[tap][states, 0] * level[:, None])[:, :, None] * z
            dx -= (moves[:, states, 0][:, None] * level[:, None])[..., None] * z
    x *= inverse
    dx *= inverse
    dx -= slope[:, None, None, :] * x
    if through:
        first, second = (taken.get(t, segment.input_spectrum(s)[:, bins.index])
                         for t, s in ((0, whole + 1), (1, whole)))  # fmt: skip
        if segment.hold == "ramped":
            direct, moved = fraction * first + (1.0 - fraction) * second, (first - second) / interval
        else:
            late = fraction > 0.0 or segment.output_first
            direct, moved = (first if late else second), np.zeros_like(first)
        top = direct - np.einsum("p,jpm->jm", den[:n], x)
        dtop = -np.einsum("p,kjpm->kjm", den[:n], dx)
        shared = dden.shape[0]
        dtop[:shared] -= np.einsum("kp,jpm->kjm", dden[:, :n], x)
        dtop[shared:] += moved
        x = np.concatenate([x, top[:, None]], axis=1)
        dx = np.concatenate([dx, dtop[:, :, None]], axis=2)
        states.append(n)
    where = [(j, states.index(p)) for _, j, p in problem.slots]
    rows, place = [j for j, _ in where], [p for _, p in where]
    return x[rows, place], dx[:, rows, place]


def _smooth_input(
    problem: Problem,
    segment: SpectralSegment,
    bins: Bins,
    den: Array,
    dden: Array,
    found: Resolvent,
    lag: tuple[int, float, float],
    grid: tuple[ComplexArray, ComplexArray, ComplexArray, ComplexArray],
) -> tuple[ComplexArray, ComplexArray]:
    """Band-limited inputs: s^p/den·exp(−sL) at s = jω, exact but for the record's ends."""
    whole, fraction, interval = lag
    s: ComplexArray = (1j * segment.angle(bins.index) / interval).astype(np.complex128)
    with np.errstate(divide="ignore", invalid="ignore"):
        inverse = 1.0 / horner(den, s)
    if problem.form.integrators:
        inverse[bins.index == 0] = 0.0
    slope = horner(dden, s) * inverse
    # the whole samples are shifted (steady before the record), the fraction is a phase
    v = segment.input_spectrum(whole)[:, bins.index] * np.exp(-s * fraction * interval)
    driven = np.array([v[j] * s**p * inverse for _, j, p in problem.slots])
    by_den = -driven[None] * slope[:, None, :]
    return driven, np.concatenate([by_den, (-s * driven)[None]])


def _fixed(problem: Problem, segment: SpectralSegment, bins: Bins, z: ComplexArray) -> ComplexArray:
    """Drift (a ramp over the record, about its middle), hum lines, and a constant where bin 0 is used."""
    out: list[ComplexArray] = []
    at_zero = bins.index == 0
    if problem.drift:
        with np.errstate(divide="ignore", invalid="ignore"):
            ramp = 1.0 / (1.0 / z - 1.0)  # Σ k z^{-k} / N, since z^N = 1
        ramp[at_zero] = 0.0
        out.append(ramp)
    time = segment.interval * np.arange(segment.count)
    for line in problem.hum:
        for wave in (np.cos(line * time), np.sin(line * time)):
            out.append(np.fft.rfft(wave)[bins.index])
    if problem.constant(bins):
        out.append(np.where(at_zero, float(segment.count), 0.0).astype(complex))
    return np.array(out).reshape(len(out), z.size)
