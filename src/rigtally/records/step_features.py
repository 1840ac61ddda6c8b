"""Features of one step-like transition in the terms of IEEE Std 181 and IEC 60469, each with its uncertainty.

State levels s₁ (before) and s₂ (after), amplitude A = s₂ − s₁, the x % reference level s₁ + x/100·A.
Transition duration: from the 10 % to the 90 % reference level instant. Overshoot and undershoot are shares
of the amplitude. Settling duration: from the start to the last instant outside the band of ±2 % (or 5 %) of
A about s₂. Terms and definitions: scope of IEC 60469:2013 opened, definitions from memory.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.uncertain import Uncertain
from rigtally.records.levels import histogram_levels, level
from rigtally.records.sample_noise import noise_sigma

Array = NDArray[np.float64]

# samples within these shares of the transition before and after a reference level instant carry its
# polynomial; the 10 % instant of a first-order step lies close to the kink where it starts
REACH = {0.1: (0.04, 0.12), 0.5: (0.12, 0.12), 0.9: (0.12, 0.12)}

# samples in the transition below which the interpolation between them is doubtful
SAMPLED_WELL = 20
# transition durations after the 90 % instant within which the overshoot is looked for
LATEST_PEAK = 20.0


def step_features(
    time: Array,
    samples: Array,
    *,
    before: Uncertain | None = None,
    after: Uncertain | None = None,
    start: Uncertain | None = None,
    unit: str = "",
) -> Mapping[str, Uncertain]:
    """Features of the one transition that `samples` show.

    Parameters
    ----------
    time, samples : (n,) arrays
        Seconds and SI; rows with NaN are left out.
    before, after : Uncertain or None
        State levels where they are known from longer stretches; else the modes of the histogram.
    start : Uncertain or None
        Instant from which settling counts; else the 10 % reference level instant.

    Returns
    -------
    mapping of name to Uncertain
        amplitude, transition_duration, reference_instant_10/50/90, overshoot, undershoot, peak_time (from the
        start, where there is an overshoot), settling_2, settling_5. A feature that the samples do not
        determine has the value NaN.
    """
    known = np.isfinite(samples)
    time, samples = time[known], samples[known]
    sigma = noise_sigma(samples)
    sigma = sigma if math.isfinite(sigma) else 0.0
    first, last = before or _state(samples, sigma, 0, unit), after or _state(samples, sigma, -1, unit)
    amplitude = last.value - first.value
    u_amplitude = math.hypot(_zero(first.u), _zero(last.u))
    features = {"amplitude": Uncertain(amplitude, u_amplitude, unit)}
    if samples.size < 8 or not abs(amplitude) > 3.0 * sigma / math.sqrt(samples.size):
        return features
    # normalised: 0 before, 1 after
    wave = _Wave(
        time,
        (samples - first.value) / amplitude,
        sigma / abs(amplitude),
        _zero(first.u) / abs(amplitude),
        _zero(last.u) / abs(amplitude),
    )
    instants = {share: wave.instant(share) for share in (0.1, 0.5, 0.9)}
    for share, instant in instants.items():
        features[f"reference_instant_{100 * share:.0f}"] = instant
    ten, ninety = instants[0.1], instants[0.9]
    features["transition_duration"] = Uncertain(ninety.value - ten.value, math.hypot(ten.u, ninety.u), "s")
    origin = start or ten
    if math.isfinite(ten.value) and math.isfinite(ninety.value):
        features |= wave.excursions(ten.value, ninety.value, origin)
        features["settling_2"] = wave.settling(0.02, origin)
        features["settling_5"] = wave.settling(0.05, origin)
    return features


def _zero(u: float) -> float:
    return u if math.isfinite(u) else 0.0


def _state(samples: Array, sigma: float, end: int, unit: str) -> Uncertain:
    """The histogram's state level that the record's first (or last) samples stand nearer to."""
    levels = histogram_levels(samples, sigma)
    tenth = max(samples.size // 20, 1)
    edge = float(np.median(samples[:tenth] if end == 0 else samples[-tenth:]))
    value = min(levels, key=lambda state: abs(state - edge))
    near = samples[np.abs(samples - value) <= max(3.0 * sigma, 0.005 * abs(levels[1] - levels[0]))]
    return Uncertain(value, level(near).u, unit)


class _Wave:
    """A normalised transition from 0 to 1 with the noise of one sample and the u of both levels."""

    def __init__(self, time: Array, height: Array, sigma: float, u_first: float, u_last: float) -> None:
        self.time = time
        self.height = height
        self.sigma = sigma
        self.u_first = u_first
        self.u_last = u_last
        self.step = float(np.median(np.diff(time[:4096])))
        self.fast, self.run = self._transition()
        # a crest is several runs wide: a sixth of one flattens it by less than a thousandth
        self.window = max(self.run // 6, 1) | 1
        self.tops = _smoothed(height, self.window)

    def _transition(self) -> tuple[Array, int]:
        """The wave smoothed by no more than a sixth of its 10-90 % run, and that run in samples.

        Smoothing longer than the transition would stretch it: the length is cut until the two agree.
        """
        length = _smoothing(self.sigma, self.height.size)
        for _ in range(4):
            fast = _smoothed(self.height, length)
            middle = _rises_through(fast, 0.5, 0)
            if middle is None:
                return fast, 0
            low, high = _last_below(fast, 0.1, middle), _rises_through(fast, 0.9, middle)
            if low is None or high is None:
                return fast, 0
            run = high - low
            if length <= max(run // 6, 1):
                break
            length = max(run // 6, 1) | 1
        return fast, run

    def instant(self, share: float) -> Uncertain:
        """Where the transition passes a reference level."""
        crossing = self._crossing(share)
        if crossing is None:
            return Uncertain(math.nan, math.nan, "s")
        value, u_noise, slope = crossing
        u_level = math.hypot((1.0 - share) * self.u_first, share * self.u_last) / slope
        return Uncertain(value, math.hypot(u_noise, u_level), "s")

    def _crossing(self, share: float) -> tuple[float, float, float] | None:
        """Instant, its u from noise, and |slope| there, by a local polynomial."""
        middle = _rises_through(self.fast, 0.5, 0)
        if middle is None or self.run == 0:
            return None
        upper = middle if share == 0.5 else _rises_through(self.fast, share, middle)
        row = _last_below(self.fast, share, middle) if share < 0.5 else None if upper is None else upper - 1
        if row is None or row < 0:
            return None
        if self.height[row + 1] - self.height[row] > 0.3:
            return self._between(row, share)
        # noise asks for more samples than the bare reach holds, a clean wave for fewer
        least = 0.3 if self.sigma < 1e-4 else 1.0
        widened = float(np.clip(self.sigma / 0.005 * math.sqrt(30.0 / self.run), least, 2.5))
        back, ahead = widened * REACH[share][0], widened * REACH[share][1]
        if share < 0.5:
            back = min(back, REACH[share][0])
        step = self.step
        middle_time = 0.5 * float(self.time[row] + self.time[row + 1])
        found = None
        # noise chose the first window: its middle is moved to the root found in it
        for _ in range(3):
            left = middle_time - max(back * self.run, 2.0) * step
            right = middle_time + max(ahead * self.run, 2.0) * step
            begin, end = (int(k) for k in np.searchsorted(self.time, [left, right]))
            found = self._root(begin, end, share, 3) if end - begin >= 4 else None
            if found is None:
                return self._between(row, share)
            middle_time = found[0]
        if found is None or self.run >= SAMPLED_WELL:
            return found
        # between few samples a cubic is a guess: half its distance from the straight line goes into u
        straight = self._between(row, share)[0]
        return found[0], math.hypot(found[1], 0.5 * (found[0] - straight)), found[2]

    def _root(self, begin: int, end: int, share: float, degree: int) -> tuple[float, float, float] | None:
        """Where a polynomial through rows [begin, end) takes the value `share`."""
        centre = 0.5 * (self.time[begin] + self.time[end - 1])
        scale = 0.5 * (self.time[end - 1] - self.time[begin])
        basis = np.vander((self.time[begin:end] - centre) / scale, degree + 1, increasing=True)
        coefficients, *_ = np.linalg.lstsq(basis, self.height[begin:end], rcond=None)
        roots = np.roots((coefficients - share * (np.arange(degree + 1) == 0))[::-1])
        real = roots[np.abs(roots.imag) < 1e-9].real
        real = real[np.abs(real) <= 1.5]
        if real.size == 0:
            return None
        root = float(real[np.argmin(np.abs(real))])
        powers = root ** np.arange(degree + 1)
        slope = abs(float(np.arange(1, degree + 1) * powers[:-1] @ coefficients[1:])) / scale
        if slope <= 0.0:
            return None
        spread = float(powers @ np.linalg.pinv(basis.T @ basis) @ powers)
        u = self.sigma * math.sqrt(max(spread, 0.0)) / slope
        # the slope is uncertain, too: where it barely shows, the root scatters by the window's width
        moves = np.arange(degree + 1) * np.concatenate([[0.0], powers[:-1]]) / scale
        u_slope = self.sigma * math.sqrt(max(float(moves @ np.linalg.pinv(basis.T @ basis) @ moves), 0.0))
        u *= 1.0 + (u_slope / slope) ** 2
        return float(centre + root * scale), u, slope

    def _between(self, row: int, share: float) -> tuple[float, float, float]:
        """Straight line between two samples; where it passed between them is not known better than evenly."""
        step = float(self.time[row + 1] - self.time[row])
        rise = float(self.fast[row + 1] - self.fast[row])
        part = float(np.clip((share - self.fast[row]) / rise, 0.0, 1.0)) if rise > 0 else 0.5
        slope = max(abs(rise), self.sigma, 1e-12) / step
        u = math.hypot(step / math.sqrt(12.0), self.sigma / slope)
        return float(self.time[row]) + part * step, u, slope

    def excursions(self, ten: float, ninety: float, origin: Uncertain) -> dict[str, Uncertain]:
        """Overshoot past the level after, undershoot before the level before; shares of the amplitude."""
        duration = max(ninety - ten, self.step)
        later = np.flatnonzero((self.time >= ninety) & (self.time <= ninety + LATEST_PEAK * duration))
        earlier = np.flatnonzero((self.time <= ten) & (self.time >= ten - 3.0 * duration))
        over, at = self._peak(later, self.height - 1.0, self.tops - 1.0, self.u_last)
        under, _ = self._peak(earlier, -self.height, -self.tops, self.u_first)
        out = {"overshoot": over, "undershoot": under}
        if over.value > 0.0 and math.isfinite(at.value):
            out["peak_time"] = Uncertain(at.value - origin.value, math.hypot(at.u, _zero(origin.u)), "s")
        return out

    def _peak(
        self, rows: NDArray[np.intp], excess: Array, smooth: Array, u_level: float
    ) -> tuple[Uncertain, Uncertain]:
        """Height and instant of the largest lobe by a quartic through its top; without one 0, and a limit."""
        nowhere = Uncertain(math.nan, math.nan, "s")
        if rows.size < 3:
            return Uncertain(math.nan, math.nan), nowhere
        top = int(rows[np.argmax(smooth[rows])])
        if smooth[top] <= 0.0:
            u = math.hypot(self._u_smooth(), u_level)
            return Uncertain(0.0, u, limits95=(0.0, 2.0 * u)), nowhere
        begin, end = _lobe(smooth, top, int(rows[0]), int(rows[-1]) + 1)
        # the middle of the lobe, where a cubic follows a decaying cosine
        left, right = top - (top - begin) * 45 // 100, top + (end - top) * 45 // 100
        left, right = max(min(left, top - 2), int(rows[0])), min(max(right, top + 2), int(rows[-1])) + 1
        x = self.time[left:right] - self.time[top]
        scale = max(float(np.abs(x).max()), 1e-300)
        degree = min(4 if x.size > 8 else 2, x.size - 1)
        basis = np.vander(x / scale, degree + 1, increasing=True)
        coefficients, *_ = np.linalg.lstsq(basis, excess[left:right], rcond=None)
        fine = np.linspace(x[0] / scale, x[-1] / scale, 2001)
        values = np.vander(fine, degree + 1, increasing=True) @ coefficients
        best = int(np.argmax(values))
        powers = fine[best] ** np.arange(degree + 1)
        inverse = np.linalg.pinv(basis.T @ basis)
        u = math.hypot(self.sigma * math.sqrt(float(powers @ inverse @ powers)), u_level)
        height = float(values[best])
        if right - left < 10:
            # few samples carry the lobe: what lies between them is a guess
            u = math.hypot(u, 0.3 * (height - float(excess[left:right].max())))
        if height < 4.0 * u or height < 4.0 * self._u_smooth():
            # the largest of many noisy values lies above zero of itself
            return Uncertain(0.0, u, limits95=(0.0, max(height, 0.0) + 2.0 * u)), nowhere
        bend = 2.0 * abs(float(coefficients[2])) if degree >= 2 else 0.0
        slopes = np.arange(degree + 1) * np.concatenate([[0.0], powers[:-1]])
        u_slope = self.sigma * math.sqrt(float(slopes @ inverse @ slopes))
        u_at = scale * u_slope / bend if bend > 0 else math.nan
        return Uncertain(height, u), Uncertain(self.time[top] + float(fine[best]) * scale, u_at, "s")

    def _u_smooth(self) -> float:
        return self.sigma / math.sqrt(self.window)

    def settling(self, band: float, origin: Uncertain) -> Uncertain:
        """From the start to the last instant outside the band; NaN where noise or the level's u hide the
        band."""
        unknown = Uncertain(math.nan, math.nan, "s")
        length = max(1, math.ceil((6.0 * self.sigma / band) ** 2)) | 1
        if length > max(self.run // 3, 1) or 3.0 * self.u_last > band:
            return unknown
        smooth = _smoothed(self.height, length)
        outside = np.flatnonzero(np.abs(smooth - 1.0) > band)
        if outside.size == 0 or outside[-1] + 1 >= self.time.size:
            return unknown
        row = int(outside[-1])
        edge = 1.0 + band if smooth[row] > 1.0 else 1.0 - band
        if self.sigma < 1e-4 * band or smooth[row + 1] - 1.0 > band or smooth[row] - 1.0 < -band - 0.3:
            rise = float(smooth[row + 1] - smooth[row])
            step = float(self.time[row + 1] - self.time[row])
            instant, slope = float(self.time[row] + step * (edge - smooth[row]) / rise), abs(rise) / step
            u_noise = step / math.sqrt(12.0) if abs(rise) > band else 0.0
        else:
            reach = max(length, self.run // 8, 2)
            begin, end = max(row - reach, 0), min(row + reach + 2, self.time.size)
            found = self._root(begin, end, edge, 1 if end - begin < 12 else 2)
            if found is None:
                return unknown
            instant, u_noise, slope = found
        if self.run < SAMPLED_WELL:
            u_noise = math.hypot(u_noise, float(self.time[row + 1] - self.time[row]) / math.sqrt(12.0))
        u = math.hypot(self.u_last / slope, u_noise)
        return Uncertain(instant - origin.value, math.hypot(u, _zero(origin.u)), "s")


def _smoothing(sigma: float, count: int) -> int:
    """Length of the moving mean that brings the noise to 0.5 % of the amplitude, at most 1/40 of the
    record."""
    wanted = math.ceil((sigma / 0.005) ** 2)
    return max(1, min(wanted, count // 40) | 1)


def _smoothed(height: Array, length: int) -> Array:
    """Moving mean of odd length, the ends held."""
    if length <= 1:
        return height
    half = length // 2
    ends = np.full(half, height[:length].mean()), np.full(half, height[-length:].mean())
    total = np.concatenate([[0.0], np.cumsum(np.concatenate([ends[0], height, ends[1]]))])
    return np.asarray((total[length:] - total[:-length]) / length)


def _rises_through(height: Array, share: float, begin: int) -> int | None:
    """First row from `begin` on at or above the share."""
    rows = np.flatnonzero(height[begin:] >= share)
    return begin + int(rows[0]) if rows.size else None


def _last_below(height: Array, share: float, end: int) -> int | None:
    """Last row before `end` below the share."""
    rows = np.flatnonzero(height[:end] < share)
    return int(rows[-1]) if rows.size else None


def _lobe(smooth: Array, top: int, begin: int, end: int) -> tuple[int, int]:
    """Rows around `top` where the excess stays positive."""
    left = np.flatnonzero(smooth[begin:top] <= 0.0)
    right = np.flatnonzero(smooth[top:end] <= 0.0)
    return (begin + int(left[-1]) if left.size else begin), (top + int(right[0]) if right.size else end - 1)
