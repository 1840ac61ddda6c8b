"""A segment on its spectrum: bins, weights, shifted inputs, and the rows that the least squares sees.

A row map takes complex spectra on the bins to real rows whose noise has, for white noise of standard deviation
one in each sample, standard deviation one: the real and imaginary parts scaled by √(2/N) (√(1/N) at bin 0 and at
half the sampling rate). With a noise filter the rows are the samples, whitened.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from rigtally.estimation.trial import Segment, Trial

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
# whitens (rows, n) time series: (output, series) -> series
Whitener = Callable[[Array], Array]


@dataclass(frozen=True)
class SpectralSegment:
    """One segment's spectra.

    Attributes
    ----------
    inputs : (r, n) array; spectra are made of it shifted by whole samples
    outputs : (q, n) array
    spectrum : (q, n//2 + 1) rfft of the outputs
    interval : seconds
    hold : "held", "ramped", "band-limited" or "pulse"
    delay : seconds of delay that is known (a step between samples)
    """

    inputs: Array
    outputs: Array
    spectrum: ComplexArray
    interval: float
    hold: str
    delay: float = 0.0
    output_first: bool = False
    shifted: dict[int, ComplexArray] = field(default_factory=dict, repr=False, compare=False)

    @property
    def count(self) -> int:
        """Samples."""
        return int(self.outputs.shape[1])

    def angle(self, bins: NDArray[np.intp]) -> Array:
        """ωT of the bins."""
        return 2.0 * np.pi * bins / self.count

    def input_spectrum(self, shift: int) -> ComplexArray:
        """(r, n//2 + 1) spectrum of u[k − shift]; before the record the input is steady at its first value.

        A shift of −1 takes the record as a ring: what it puts in place of the sample after the last goes into
        the free end term.
        """
        found = self.shifted.get(shift)
        if found is None:
            if shift >= 0:
                n = self.count
                moved = np.empty_like(self.inputs)
                cut = min(shift, n)
                moved[:, :cut] = self.inputs[:, :1]
                moved[:, cut:] = self.inputs[:, : n - cut]
            else:
                moved = np.roll(self.inputs, shift, axis=1)
            found = np.fft.rfft(moved, axis=1)
            if len(self.shifted) > 12:
                self.shifted.clear()
            self.shifted[shift] = found
        return found


def spectral_segment(segment: Segment, trial: Trial, offset: float) -> SpectralSegment:
    """Spectra of a segment (NaN-free, uniform), a stated offset taken off.

    An unlogged step or pulse at a time between samples is a sample's step or pulse that acts a known fraction of
    an interval later. A release is a free decay: the part from the release on, without input.
    """
    y = np.asarray(segment.outputs, dtype=float) - offset
    u = np.asarray(segment.inputs, dtype=float)
    t = segment.interval
    hold: str = trial.between
    delay = 0.0
    if segment.excitation != "logged":
        at = (segment.at - segment.start) / t
        first = int(np.floor(at + 1e-9))
        delay = max(0.0, (at - first) * t)
        if segment.excitation == "release":
            y = y[:, max(0, int(np.ceil(at - 1e-9))) :]
            u, hold, delay = np.zeros((1, y.shape[1])), "held", 0.0
        else:
            u = np.zeros((1, y.shape[1]))
            if segment.excitation == "step":
                u[0, first:] = segment.size
                hold = "held"
            else:
                u[0, first] = segment.size
                hold = "pulse"
    return SpectralSegment(u, y, np.fft.rfft(y, axis=1), t, hold, delay, trial.output_first)


@dataclass(frozen=True)
class Bins:
    """Which bins of a segment are used, and how they become rows.

    `filters` (one per output, or None) whiten time series; then all bins are used and the rows are samples.
    `weight` (m,) scales the rows of each bin.
    """

    index: NDArray[np.intp]
    weight: Array
    count: int
    filters: tuple[Whitener, ...] | None = None

    def rows(self, spectra: ComplexArray, output: int) -> Array:
        """(…, m) complex spectra to (…, rows) real rows."""
        if self.filters is not None:
            return self.filters[output](np.fft.irfft(spectra, n=self.count, axis=-1))
        scaled = spectra * self.weight
        return np.concatenate([scaled.real, scaled.imag], axis=-1)

    @property
    def numbers(self) -> float:
        """How many real numbers the rows hold."""
        if self.filters is not None:
            return float(self.count)
        edge = np.count_nonzero((self.index == 0) | (2 * self.index == self.count))
        return float(2 * self.index.size - edge)


def all_bins(count: int, *, with_zero: bool, highest: int | None = None) -> Bins:
    """Every bin (up to `highest`)."""
    top = count // 2 if highest is None else min(highest, count // 2)
    index = np.arange(0 if with_zero else 1, top + 1)
    return Bins(index, row_weight(index, count), count)


def thinned_bins(count: int, *, with_zero: bool, wanted: int = 320) -> Bins:
    """Low bins all, higher ones ever more sparsely, each weighted for those that it stands for."""
    top = count // 2
    index = np.arange(0 if with_zero else 1, top + 1)
    if index.size > wanted:
        dense = wanted // 3
        high = np.geomspace(dense + 1, top, wanted - dense).round().astype(np.intp)
        index = np.unique(np.concatenate([index[:dense], high]))
    gaps = np.ones(index.size)
    gaps[1:-1] = 0.5 * (index[2:] - index[:-2])
    return Bins(index, row_weight(index, count) * np.sqrt(gaps), count)


def row_weight(index: NDArray[np.intp], count: int) -> Array:
    """√(2/N), and √(1/N) where the spectrum is real."""
    edge = (index == 0) | (2 * index == count)
    return np.sqrt(np.where(edge, 1.0, 2.0) / count)
