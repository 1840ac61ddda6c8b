"""What is in a log: channels, clock, faults, events, and what to run next."""

from __future__ import annotations

import math
import shlex
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from rigtally.records.event import Event
from rigtally.records.events import find_events
from rigtally.records.faults import find_faults
from rigtally.records.linearity import Linearity, compare_amplitudes
from rigtally.records.record import Channel, Fault, Record, Response

# clock faults after which a fit takes another road or a wider u
GAPS = ("gap", "lost-rows")
FEW_SAMPLES = 50


@dataclass(frozen=True)
class Inspection:
    """A log looked at, before any fit.

    Attributes
    ----------
    record : Record or Response
        With the faults of its channels found.
    drive : str
        The channel in which the events were found ("" where nothing moves).
    events : tuple of Event
    linearity : tuple of Linearity
        One for each channel that answers to several steps.
    warnings : tuple of (code, text)
    next_commands : tuple of str
        Lines to type.
    """

    record: Record | Response
    drive: str
    events: tuple[Event, ...]
    linearity: tuple[Linearity, ...]
    warnings: tuple[tuple[str, str], ...]
    next_commands: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """The inspection as the JSON contract states it."""
        record = self.record
        out: dict[str, Any] = {"schema": "rigtally/inspection/1", "log": record.provenance.to_dict()}
        if isinstance(record, Record):
            out["channels"] = [_channel_dict(channel) for channel in record.channels]
            out["clock"] = _clock_dict(record)
            out["samples"] = record.count
        else:
            out["channels"], out["clock"] = [], None
            out["response"] = _response_dict(record)
        out["drive"] = self.drive
        out["events"] = [event.to_dict() for event in self.events]
        out["linearity"] = [one.to_dict() for one in self.linearity]
        out["warnings"] = [{"code": code, "text": text} for code, text in self.warnings]
        out["next_commands"] = list(self.next_commands)
        return out


def inspect(
    record: Record | Response, *, inputs: Sequence[str] = (), outputs: Sequence[str] = ()
) -> Inspection:
    """Look at a log.

    Parameters
    ----------
    record : Record or Response
    inputs, outputs : sequence of str
        Channels as the user names them; events are looked for in the first input.

    Raises
    ------
    LogError
        code "no-such-channel".
    """
    if isinstance(record, Response):
        command = _command("fit", record.provenance.file, (), ())
        return Inspection(record, "", (), (), tuple(_response_warnings(record)), (command,))
    for name in (*inputs, *outputs):
        record.channel(name)
    record = find_faults(record)
    events = find_events(record, inputs[0] if inputs else None)
    drive = events[0].channel if events else (inputs[0] if inputs else "")
    linearity = compare_amplitudes(events)
    warnings = _warnings(record, events, linearity)
    return Inspection(
        record,
        drive,
        events,
        linearity,
        tuple(warnings),
        tuple(_next(record, events, drive, inputs, outputs)),
    )


def _channel_dict(channel: Channel) -> dict[str, Any]:
    known = channel.samples[np.isfinite(channel.samples)]
    low, high = (float(known.min()), float(known.max())) if known.size else (None, None)
    ends = None
    if channel.full_scale is not None:
        ends = [end if math.isfinite(end) else None for end in channel.full_scale]
    return {
        "name": channel.name,
        "unit": channel.unit if channel.unit_known else None,
        "written_unit": channel.written_unit if channel.unit_known else None,
        "min": low,
        "max": high,
        "missing": int(channel.samples.size - known.size),
        "resolution": channel.resolution if math.isfinite(channel.resolution) else None,
        "full_scale": ends,
        "skew": channel.skew,
        "faults": [fault.to_dict() for fault in channel.faults],
    }


def _clock_dict(record: Record) -> dict[str, Any]:
    steps = np.diff(record.time)
    interval = record.interval if record.uniform else float(np.median(steps)) if steps.size else math.nan
    return {
        "start": record.start,
        "interval": interval,
        "uniform": record.uniform,
        "u_interval": record.u_interval,
        "jitter": record.jitter,
        "gaps": [fault.to_dict() for fault in record.clock_faults if fault.kind in GAPS],
        "faults": [fault.to_dict() for fault in record.clock_faults],
    }


def _response_dict(response: Response) -> dict[str, Any]:
    return {
        "lines": int(response.frequency.size),
        "from": float(response.frequency.min()) if response.frequency.size else None,
        "to": float(response.frequency.max()) if response.frequency.size else None,
        "unit": "rad/s",
        "outputs": list(response.outputs),
        "inputs": list(response.inputs),
        "magnitude_only": response.magnitude_only,
        "uncertainty": response.covariance is not None,
    }


def _response_warnings(response: Response) -> list[tuple[str, str]]:
    out = []
    if response.magnitude_only:
        out.append(("magnitude-only", "the table has no phase: dead time and the sign of zeros stay unknown"))
    if response.covariance is None:
        out.append(
            ("no-uncertainty", "the table states no uncertainty: it is taken from the fit's own scatter")
        )
    return out


def _warnings(
    record: Record, events: tuple[Event, ...], linearity: tuple[Linearity, ...]
) -> list[tuple[str, str]]:
    out = [(f"clock-{fault.kind}", fault.text) for fault in record.clock_faults]
    for channel in record.channels:
        out += [(fault.kind, f"channel {channel.name!r}: {fault.text}") for fault in channel.faults]
        if not channel.unit_known:
            text = f"channel {channel.name!r} has no unit: state it with --unit {channel.name}=…"
            out.append(("no-unit", text))
    if record.count < FEW_SAMPLES:
        out.append(("short-record", f"the record has only {record.count} samples"))
    if not events and not all(_constant(channel.faults) for channel in record.channels):
        out.append(("no-events", "no step, ramp, pulse, sweep or dwell stands out of the noise"))
    last = events[-1] if events else None
    if last is not None and last.kind in ("step", "ramp") and not math.isfinite(last.level_after.value):
        out.append(("not-settled", f"event {last.number} has not settled when the record ends"))
    for one in linearity:
        out += [("not-linear", finding) for finding in one.findings]
    return out


def _constant(faults: tuple[Fault, ...]) -> bool:
    return any(fault.kind == "constant" for fault in faults)


def _next(
    record: Record, events: tuple[Event, ...], drive: str, inputs: Sequence[str], outputs: Sequence[str]
) -> list[str]:
    """Commands that fit this log: with the driving channel as input, or with the step or release stated."""
    file = record.provenance.file
    moving = [c.name for c in record.channels if not _constant(c.faults)]
    if not moving:
        return []
    readings = list(outputs) or [name for name in moving if name != drive][:1]
    if readings and (drive or inputs):
        chosen = list(inputs) or [drive]
        lines = [_command("fit", file, chosen, readings), _command("tally", file, chosen, readings, rig=True)]
        if len(events) > 1 and all(event.kind in ("step", "ramp", "pulse") for event in events):
            lines.insert(1, _command("fit", file, chosen, readings) + " --event 1")
        return lines
    if not events:
        return []
    first = events[0]
    option = {"step": "--step-at", "release": "--release-at", "pulse": "--pulse-at"}.get(first.kind)
    if option is None:
        return []
    stated = f" {option} {first.start.value:.6g}"
    return [_command("fit", file, (), list(outputs) or [drive]) + stated]


def _command(
    verb: str, file: str, inputs: Sequence[str], outputs: Sequence[str], *, rig: bool = False
) -> str:
    words = ["rigtally", verb, shlex.quote(file or "LOG")]
    if rig:
        words.append("RIG.toml")
    for option, names in (("--input", inputs), ("--output", outputs)):
        for name in names:
            words += [option, shlex.quote(name)]
    return " ".join(words)
