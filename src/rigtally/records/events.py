"""What was done to the rig: steps, ramps, releases, pulses, sweeps and dwells found in a record."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.dwell import fit_sine
from rigtally.records.event import Event, Kind
from rigtally.records.faults import find_faults
from rigtally.records.levels import level
from rigtally.records.movements import movements
from rigtally.records.oscillation import Swing, swings
from rigtally.records.record import Channel, Record
from rigtally.records.segments import extent, stretches
from rigtally.records.step_features import step_features

Array = NDArray[np.float64]


def find_events(record: Record, input_name: str | None = None) -> tuple[Event, ...]:
    """Events of a record in the order of time.

    Parameters
    ----------
    record : Record
        Examined by `find_faults`, so that spikes are known from pulses and steps of a converter from levels.
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
    events = find_events(find_faults(record), input_name)
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
    return movements(time, samples, channel, parts, size) if math.isfinite(parts.tolerance) else ()


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
