"""Steps, ramps, releases and pulses of one channel: what happens between its levels."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.uncertain import Uncertain
from rigtally.records.event import Event, Kind
from rigtally.records.levels import level
from rigtally.records.onset import onset
from rigtally.records.record import Channel
from rigtally.records.segments import Stretches
from rigtally.records.step_features import step_features

Array = NDArray[np.float64]

UNKNOWN = Uncertain(math.nan, math.nan)
# rms deviation from a straight line, as a share of the amplitude, up to which a movement is a ramp
STRAIGHT = 0.015
# plateau of a pulse, as a share of the rests before and after it
SHORT_PLATEAU = 0.05
# samples of a movement that count as a step whatever its shape
STEP_SAMPLES = 12


def movements(
    time: Array, samples: Array, channel: Channel, parts: Stretches, size: float
) -> tuple[Event, ...]:
    """Events between levels, insignificant ones left out, up-and-down pairs joined to pulses."""
    levels = _merged(parts, samples, size)
    parts = replace(parts, levels=tuple(levels))
    found = []
    for begin, end in _with_short_plateaus(parts, samples, size):
        found.append(_movement(time, samples, channel, parts, begin, end))
    return _numbered([event for event in found if event is not None], time)


def _merged(parts: Stretches, samples: Array, size: float) -> list[tuple[int, int]]:
    """Levels of which no movement of more than the tolerance (or 3 % of the range) parts neighbours."""
    slack = max(parts.tolerance, 0.03 * size)
    out: list[tuple[int, int]] = []
    for begin, end in parts.levels:
        if out:
            before, after = np.median(samples[slice(*out[-1])]), np.median(samples[begin:end])
            between = samples[out[-1][1] : begin]
            reach = slack + 4.0 * parts.sigma
            quiet = between.size == 0 or float(np.abs(between - before).max()) <= reach
            if abs(after - before) <= slack and quiet:
                out[-1] = (out[-1][0], end)
                continue
        out.append((begin, end))
    return out


def _with_short_plateaus(parts: Stretches, samples: Array, size: float) -> list[tuple[int, int]]:
    """Gaps between levels; two that lead away and back over a short plateau are one (a pulse)."""
    levels = list(parts.levels)
    k = 1
    while k + 1 < len(levels):
        before, plateau, after = levels[k - 1], levels[k], levels[k + 1]
        heights = [float(np.median(samples[slice(*part)])) for part in (before, plateau, after)]
        back = abs(heights[2] - heights[0]) < 0.1 * abs(heights[1] - heights[0]) + 0.03 * size
        rest = min(before[1] - before[0], after[1] - after[0])
        if back and plateau[1] - plateau[0] < SHORT_PLATEAU * rest:
            del levels[k]
        else:
            k += 1
    return replace(parts, levels=tuple(levels)).gaps()


def _movement(
    time: Array, samples: Array, channel: Channel, parts: Stretches, begin: int, end: int
) -> Event | None:
    before_range = max((part for part in parts.levels if part[1] <= begin), default=None)
    after_range = min((part for part in parts.levels if part[0] >= end), default=None)
    before = _level_of(channel, before_range, "last")
    after = _level_of(channel, after_range, "first")
    left = before_range[0] if before_range else begin
    right = after_range[1] if after_range else end
    moving = samples[max(begin - 1, 0) : min(end + 1, samples.size)]
    if before_range is None:
        return _started_before(time, channel, samples, left, right, after, parts)
    reference = before.value
    last = (
        after.value
        if after_range
        else float(np.median(samples[-max(min(end - begin, samples.size) // 20, 1) :]))
    )
    amplitude = last - reference
    low, high = min(reference, last), max(reference, last)
    excess = max(float(moving.max()) - high, low - float(moving.min()), 0.0)
    slack = parts.tolerance + 3.0 * parts.sigma
    pulse = excess > 2.0 * abs(amplitude) and excess > slack
    if not pulse and abs(amplitude) <= parts.tolerance:
        return None
    part = slice(left, right)
    window = (float(time[left]), float(time[right - 1]))
    if pulse:
        sign = 1.0 if float(moving.max()) - high >= low - float(moving.min()) else -1.0
        return _pulse(time, samples, channel, part, begin, end, sign * excess, before, after, window, parts)
    start = onset(time[part], samples[part], before, amplitude, parts.sigma)
    features = step_features(
        time[part],
        channel.samples[part],
        before=before,
        after=after if after_range else None,
        start=start,
        unit=channel.unit,
    )
    kind: Kind = "step"
    if _is_ramp(time[part], samples[part], reference, amplitude, parts.sigma):
        kind = "ramp"
        features = _ramp_features(features, channel.unit)
    if after_range is None:
        # without the level after there is no amplitude to take shares of
        features = {}
    return Event(0, kind, channel.name, channel.unit, start, before, after, window, features)


def _level_of(channel: Channel, part: tuple[int, int] | None, side: str) -> Uncertain:
    if part is None:
        return replace(UNKNOWN, unit=channel.unit)
    begin, end = part
    # the foot of a movement is left out of the level
    margin = min((end - begin) // 10, 50)
    samples = channel.samples[
        begin + (margin if side == "first" else 0) : end - (margin if side == "last" else 0)
    ]
    return level(samples, channel.unit, channel.resolution, side)


def _started_before(
    time: Array, channel: Channel, samples: Array, left: int, right: int, after: Uncertain, parts: Stretches
) -> Event | None:
    """A movement that is under way when the record begins: a release where it dies away."""
    first = float(np.median(samples[left : left + 3]))
    settled = math.isfinite(after.value)
    if settled and abs(first - after.value) <= parts.tolerance:
        return None
    kind: Kind = "release" if settled or _dies_away(samples[left:right]) else "broadband"
    start = Uncertain(float(time[left]), math.nan, "s")
    before = Uncertain(first, math.nan, channel.unit)
    window = (float(time[left]), float(time[right - 1]))
    return Event(0, kind, channel.name, channel.unit, start, before, after, window)


def _dies_away(samples: Array) -> bool:
    """Whether the movement slows down towards the record's end: three quarters of it in the first half."""
    length = max(samples.size // 50, 1)
    blocks = samples[: samples.size // length * length].reshape(-1, length).mean(axis=1)
    half = blocks.size // 2
    return float(np.ptp(blocks[half:])) < 0.45 * float(np.ptp(blocks))


def _is_ramp(time: Array, samples: Array, reference: float, amplitude: float, sigma: float) -> bool:
    """Straight from 5 % to 95 % over more samples than a step has."""
    height = (samples - reference) / amplitude
    length = int(np.clip((sigma / abs(amplitude) / 0.02) ** 2, 1, max(height.size // 50, 1)))
    smooth = np.convolve(height, np.full(length, 1.0 / length), mode="same") if length > 1 else height
    passed = np.flatnonzero(smooth >= 0.95)
    if passed.size == 0:
        return False
    top = int(passed[0])
    below = np.flatnonzero(smooth[:top] <= 0.05)
    bottom = int(below[-1]) if below.size else 0
    overshoot = float(smooth.max()) - 1.0 - 5.0 * sigma / abs(amplitude) / math.sqrt(length)
    if top - bottom <= max(STEP_SAMPLES, 2 * length) or overshoot > 0.05:
        return False
    t, y = time[bottom + 1 : top], height[bottom + 1 : top]
    if y.size < 3:
        return False
    slope, constant = np.polyfit(t - t[0], y, 1)
    rest = y - slope * (t - t[0]) - constant
    # noise averages out over tenths of the ramp
    blocks = np.array([part.mean() for part in np.array_split(rest, min(10, y.size))])
    noise = sigma / abs(amplitude) / math.sqrt(max(y.size / 10, 1.0))
    # under noise that hides a bend the shape is not known, and a step is the safer word
    return noise < 0.5 * STRAIGHT and float(np.sqrt(np.mean(blocks**2))) < STRAIGHT + noise


def _ramp_features(features: Mapping[str, Uncertain], unit: str) -> dict[str, Uncertain]:
    """Rate from 10 % to 90 %, and the whole duration that it makes."""
    out = {name: features[name] for name in ("amplitude", "transition_duration") if name in features}
    run, size = out.get("transition_duration"), out["amplitude"]
    if run is not None and run.value > 0:
        share = math.hypot(size.u / size.value, run.u / run.value)
        rate = 0.8 * size.value / run.value
        out["rate"] = Uncertain(rate, abs(rate) * share, f"{unit}/s" if unit else "1/s")
        out["duration"] = Uncertain(run.value / 0.8, run.u / 0.8, "s")
    return out


def _pulse(
    time: Array,
    samples: Array,
    channel: Channel,
    part: slice,
    begin: int,
    end: int,
    height: float,
    before: Uncertain,
    after: Uncertain,
    window: tuple[float, float],
    parts: Stretches,
) -> Event:
    """Height, width at half height and area; the area's u is that of the noise and of both levels."""
    stop = min(end + 1, samples.size)
    first = max(begin - 1, 0)
    base = before.value
    bump = (samples[first:stop] - base) * math.copysign(1.0, height)
    above = np.flatnonzero(bump >= 0.5 * abs(height))
    step = float(np.median(np.diff(time[:4096])))
    width = float(time[first + above[-1]] - time[first + above[0]]) + step
    start = onset(time[part.start : first + above[-1] + 1], samples[part.start : first + above[-1] + 1],
                  before, height, parts.sigma)  # fmt: skip
    unit = channel.unit
    span = float(time[stop - 1] - time[first])
    area = float(np.trapezoid(samples[first:stop] - base, time[first:stop]))
    u_base = before.u if math.isfinite(before.u) else 0.0
    u_area = math.hypot(parts.sigma * math.sqrt(span * step), u_base * span)
    features = {
        "height": Uncertain(height, math.hypot(parts.sigma, u_base), unit),
        "width": Uncertain(width, step / math.sqrt(6.0), "s"),
        "area": Uncertain(area, u_area, f"{unit}*s" if unit else "s"),
    }
    return Event(0, "pulse", channel.name, unit, start, before, after, window, features)


def _numbered(events: list[Event], time: Array) -> tuple[Event, ...]:
    """Numbers in order; a window ends where the next event begins and holds half of the rest before its
    own."""
    out = []
    step = float(np.median(np.diff(time[:4096])))
    for k, event in enumerate(events):
        begin, end = event.window
        if k > 0 and event.kind in ("step", "ramp", "pulse"):
            begin = 0.5 * (begin + event.start.value)
        if k + 1 < len(events):
            following = events[k + 1].start
            slack = 3.0 * following.u if math.isfinite(following.u) else 0.0
            end = min(end, following.value - max(slack, 0.5 * step))
        out.append(replace(event, number=k + 1, window=(begin, end)))
    return tuple(out)
