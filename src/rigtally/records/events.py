"""What was done to the rig: steps, ramps, releases, pulses, sweeps and dwells found in a record."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.dwell import fit_sine
from rigtally.records.event import Event, Kind
from rigtally.records.levels import level
from rigtally.records.onset import onset
from rigtally.records.oscillation import Swing, swings
from rigtally.records.record import Channel, Record
from rigtally.records.segments import Stretches, extent, stretches
from rigtally.records.step_features import step_features

Array = NDArray[np.float64]

UNKNOWN = Uncertain(math.nan, math.nan)
# rms deviation from a straight line, as a share of the amplitude, up to which a movement is a ramp
STRAIGHT = 0.015
# plateau of a pulse, as a share of the rests before and after it
SHORT_PLATEAU = 0.05
# samples of a movement that count as a step whatever its shape
STEP_SAMPLES = 4


def find_events(record: Record, input_name: str | None = None) -> tuple[Event, ...]:
    """Events of a record in the order of time.

    Parameters
    ----------
    record : Record
    input_name : str or None
        The channel that drives. Without it, the channel whose movement is the most abrupt and comes first.

    Returns
    -------
    tuple of Event
        With the features of the driving channel and of all that answer. Empty where nothing moves.
    """
    if input_name is not None:
        return _with_responses(record, _channel_events(record, record.channel(input_name)))
    found = [(channel, _channel_events(record, channel)) for channel in record.channels]
    found = [(channel, events) for channel, events in found if events]
    if not found:
        return ()
    _, events = min(found, key=lambda pair: _rank(pair[1], record))
    return _with_responses(record, events)


def event_window(record: Record, number: int, input_name: str | None = None) -> tuple[float, float]:
    """Begin and end (seconds) of the part that belongs to one event, numbered from 1.

    Raises
    ------
    LogError
        code "no-such-event", with the events there are.
    """
    events = find_events(record, input_name)
    for event in events:
        if event.number == number:
            return event.window
    listing = ", ".join(f"{e.number} ({e.kind} at {e.start.value:.4g} s)" for e in events[:12])
    raise LogError(
        f"the log has no event {number}",
        where=record.provenance.file,
        do=f"it has: {listing}" if listing else "nothing moves in it; leave --event out",
        code="no-such-event",
    )


def _rank(events: Sequence[Event], record: Record) -> tuple[float, float, float]:
    """Drives come before answers: even dwells, short transitions, early starts; a decay or a rush come
    last."""
    first = events[0]
    loose = {"broadband": 1.0, "release": 2.0}.get(first.kind, 0.0)
    if first.kind == "dwell":
        sizes = np.log([max(event.size, 1e-300) for event in events])
        return loose, round(float(np.std(sizes)), 2), first.start.value
    step = record.interval if record.uniform else float(np.median(np.diff(record.time)))
    typical = max(float(np.median([_duration(event) for event in events])), 2.0 * step)
    return loose, round(math.log(typical), 1), first.start.value


def _duration(event: Event) -> float:
    for name in ("transition_duration", "duration", "width"):
        if name in event.features and math.isfinite(event.features[name].value):
            return event.features[name].value
    return event.window[1] - event.window[0]


def _channel_events(record: Record, channel: Channel) -> tuple[Event, ...]:
    samples = _bridged(channel.samples)
    if samples.size < 16:
        return ()
    # single samples that were found to be spikes are no events
    if any(fault.kind == "spikes" for fault in channel.faults):
        samples = _median_of_three(samples)
    time = record.time
    parts = stretches(samples, channel.resolution)
    size = extent(samples, parts.sigma)
    swinging = swings(time, samples, parts.sigma, size) if size > 2.0 * parts.sigma else None
    if swinging is not None:
        return tuple(_swing_event(k + 1, s, time, channel) for k, s in enumerate(swinging))
    return _movements(time, samples, channel, parts, size) if math.isfinite(parts.tolerance) else ()


def _bridged(samples: Array) -> Array:
    """Missing samples bridged by straight lines: to find events, not to measure them."""
    known = np.isfinite(samples)
    if known.all():
        return samples
    if not known.any():
        return np.zeros(0)
    rows = np.arange(samples.size)
    return np.asarray(np.interp(rows, rows[known], samples[known]))


def _median_of_three(samples: Array) -> Array:
    out = samples.copy()
    out[1:-1] = np.median(np.stack([samples[:-2], samples[1:-1], samples[2:]]), axis=0)
    return out


def _swing_event(number: int, swing: Swing, time: Array, channel: Channel) -> Event:
    part = slice(swing.begin, swing.end)
    begin, end = float(time[swing.begin]), float(time[min(swing.end, time.size) - 1])
    middle = level(channel.samples[part], channel.unit)
    features: dict[str, Uncertain] = {}
    if swing.kind == "dwell":
        fitted = fit_sine(time[part], channel.samples[part], 2.0 * math.pi * swing.first_frequency)
        turn = 2.0 * math.pi
        features["frequency"] = Uncertain(
            fitted.frequency / turn, fitted.u_frequency / turn, "Hz", fitted.dof
        )
        features["amplitude"] = replace(fitted.amplitude, unit=channel.unit)
        features["distortion"] = Uncertain(fitted.distortion, math.nan)
        middle = Uncertain(fitted.offset, fitted.sigma / math.sqrt(max(fitted.dof, 1.0)), channel.unit)
    elif swing.kind == "sweep":
        features["frequency_from"] = Uncertain(swing.first_frequency, math.nan, "Hz")
        features["frequency_to"] = Uncertain(swing.last_frequency, math.nan, "Hz")
    start = Uncertain(begin, 0.5 / max(swing.first_frequency, 1e-300) / math.sqrt(12.0), "s")
    kind: Kind = "dwell" if swing.kind == "dwell" else "sweep" if swing.kind == "sweep" else "broadband"
    return Event(number, kind, channel.name, channel.unit, start, middle, middle, (begin, end), features)


def _movements(
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
        after = replace(UNKNOWN, unit=channel.unit)
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
    passed = np.flatnonzero(height >= 0.95)
    if passed.size == 0:
        return False
    top = int(passed[0])
    below = np.flatnonzero(height[:top] <= 0.05)
    bottom = int(below[-1]) if below.size else 0
    if top - bottom <= STEP_SAMPLES or float(height.max()) > 1.1 + 5.0 * sigma / abs(amplitude):
        return False
    t, y = time[bottom + 1 : top], height[bottom + 1 : top]
    if y.size < 3:
        return False
    slope, constant = np.polyfit(t - t[0], y, 1)
    rest = y - slope * (t - t[0]) - constant
    # noise averages out over tenths of the ramp
    blocks = np.array([part.mean() for part in np.array_split(rest, min(10, y.size))])
    noise = sigma / abs(amplitude) / math.sqrt(max(y.size / 10, 1.0))
    return float(np.sqrt(np.mean(blocks**2))) < STRAIGHT + 2.0 * noise


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
    step = float(np.median(np.diff(time)))
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
    step = float(np.median(np.diff(time)))
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


def _with_responses(record: Record, events: tuple[Event, ...]) -> tuple[Event, ...]:
    """Each event with the features of every other channel inside its window."""
    return tuple(replace(event, responses=_responses(record, event)) for event in events)


def _responses(record: Record, event: Event) -> dict[str, dict[str, Uncertain]]:
    time = record.time
    first, last = np.searchsorted(time, event.window[0]), np.searchsorted(time, event.window[1], side="right")
    part = slice(int(first), int(last))
    at = int(np.searchsorted(time, event.start.value))
    out: dict[str, dict[str, Uncertain]] = {}
    for channel in record.channels:
        if channel.name == event.channel:
            continue
        samples = channel.samples[part]
        if np.isfinite(samples).sum() < 16 or np.nanmin(samples) == np.nanmax(samples):
            continue
        if event.kind == "dwell":
            turn = 2.0 * math.pi
            fitted = fit_sine(time[part], samples, turn * event.features["frequency"].value, known=True)
            out[channel.name] = {"amplitude": replace(fitted.amplitude, unit=channel.unit)}
        elif event.kind in ("step", "ramp"):
            features = _step_response(time, channel, part, at, event.start)
            if features:
                out[channel.name] = features
    return out


def _step_response(
    time: Array, channel: Channel, part: slice, at: int, start: Uncertain
) -> dict[str, Uncertain]:
    """Features of an answer: its level before ends at the event's start, its level after is its last
    stretch."""
    samples = channel.samples
    # the last third of the rest before, in which an answer to the event before has died away
    part = slice(at - (at - part.start) // 3, part.stop)
    before = level(samples[part.start : at], channel.unit, channel.resolution, "last")
    window = _bridged(samples[part])
    shown = stretches(window, channel.resolution)
    if not shown.levels or shown.levels[-1][1] < window.size or not math.isfinite(before.u):
        return {}
    settled = max(shown.levels[-1][0] + part.start, at)
    # the foot of the approach is left out
    settled += (part.stop - settled) // 3
    after = level(samples[settled : part.stop], channel.unit, channel.resolution)
    change = abs(after.value - before.value)
    if not change > 5.0 * math.hypot(before.u, after.u) or not change > 0.3 * shown.tolerance:
        return {}
    features = dict(
        step_features(time[part], samples[part], before=before, after=after, start=start, unit=channel.unit)
    )
    features["level_before"], features["level_after"] = before, after
    return features
