"""From records or arrays to a `Trial`: which channels, which stretch, what drives the output."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from rigtally.errors import LogError, UsageError
from rigtally.estimation.trial import Segment
from rigtally.quantities.units import unit
from rigtally.records.record import Record

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Arranged:
    """Segments with what the result needs to say of them."""

    segments: tuple[Segment, ...]
    input_names: tuple[str, ...]
    output_names: tuple[str, ...]
    input_units: tuple[str, ...]
    output_units: tuple[str, ...]
    log: Mapping[str, Any]
    notes: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True)
class Unlogged:
    """A test whose input is stated: "step", "release" or "pulse" at a time, of a size in SI."""

    kind: str
    at: float
    size: float = 1.0
    unit: str = ""


def unlogged_test(
    step_at: float | None,
    step_size: str | float | None,
    release_at: float | None,
    pulse_at: float | None,
    pulse_area: str | float | None,
) -> Unlogged | None:
    """The stated test, or None where the input is logged.

    Raises
    ------
    UsageError
        code "bad-option": more than one test, or a size without its test.
    """
    given = [("step", step_at), ("release", release_at), ("pulse", pulse_at)]
    chosen = [(kind, at) for kind, at in given if at is not None]
    if len(chosen) > 1:
        raise UsageError(
            "more than one of step, release and pulse is stated", do="state one", code="bad-option"
        )
    for size, at, name in ((step_size, step_at, "step"), (pulse_area, pulse_at, "pulse")):
        if size is not None and at is None:
            raise UsageError(
                f"a {name}'s size is stated, but not its time", do=f"state {name}_at too", code="bad-option"
            )
    if not chosen:
        return None
    kind, at = chosen[0]
    written = step_size if kind == "step" else pulse_area if kind == "pulse" else None
    if written is None:
        return Unlogged(kind, float(at))
    size, word = _amount(written)
    if size == 0.0:
        raise UsageError(f"the {kind}'s size is 0", do="state its size with its unit", code="bad-option")
    return Unlogged(kind, float(at), size, word)


def _amount(written: str | float) -> tuple[float, str]:
    """A size such as "20 kPa" in SI with its SI unit."""
    if not isinstance(written, str):
        return float(written), ""
    found = re.match(r"^\s*([+-]?[\d.]+(?:[eE][+-]?\d+)?)\s*(.*)$", written)
    if not found:
        raise UsageError(
            f"{written!r} is not a size", do='write it with its unit, as "20 kPa"', code="bad-option"
        )
    size = unit(found.group(2))
    return float(found.group(1)) * size.factor, size.si


def from_arrays(
    input: ArrayLike | None, output: ArrayLike, interval: float | None, test: Unlogged | None
) -> Arranged:
    """Plain arrays: (n,) or (channels, n)."""
    y = np.atleast_2d(np.asarray(output, dtype=float))
    if interval is None or not np.isfinite(interval) or interval <= 0:
        raise UsageError(
            f"interval = {interval!r} is not above 0", do="give interval in seconds", code="bad-interval"
        )
    if test is None:
        if input is None:
            raise UsageError("there is no input", do="give input=… (or step_at=…)", code="no-input")
        u = np.atleast_2d(np.asarray(input, dtype=float))
        if u.shape[1] != y.shape[1]:
            raise UsageError(
                f"input has {u.shape[1]} samples, output {y.shape[1]}",
                do="give the same number",
                code="bad-shape",
            )
        segment = Segment("arrays", u, y, float(interval))
        in_names = _numbered("input", u.shape[0])
        in_units: tuple[str, ...] = ("",) * u.shape[0]
    else:
        segment = _unlogged_segment("arrays", y, float(interval), 0.0, None, test)
        in_names, in_units = (test.kind,), (test.unit,)
    out_names = _numbered("output", y.shape[0])
    log = {"file": None, "sha256": None, "samples": y.shape[1], "interval": float(interval)}
    return _checked(
        Arranged(
            (segment,), in_names, out_names, in_units, ("",) * y.shape[0], _named(log, in_names, out_names)
        )
    )


def _numbered(word: str, count: int) -> tuple[str, ...]:
    return (word,) if count == 1 else tuple(f"{word} {k + 1}" for k in range(count))


def _named(log: dict[str, Any], inputs: Sequence[str], outputs: Sequence[str]) -> dict[str, Any]:
    return {**log, "inputs": list(inputs), "outputs": list(outputs)}


def from_records(
    records: Sequence[Record], inputs: Sequence[str], outputs: Sequence[str], test: Unlogged | None
) -> Arranged:
    """One or several logs with the same channels (repeats of one test)."""
    segments, notes = [], []
    shared = set(inputs) & set(outputs)
    if shared:
        raise LogError(
            f"channel {sorted(shared)[0]!r} is named as input and as output",
            where=records[0].provenance.file, do="name two different channels", code="same-channel",
        )  # fmt: skip
    for record in records:
        out = np.array([record.channel(name).samples for name in outputs])
        label = record.provenance.file or "record"
        stamps = None if record.uniform else record.time
        if test is not None:
            segments.append(_unlogged_segment(label, out, record.interval, record.start, stamps, test))
            continue
        drive = np.array([record.channel(name).samples for name in inputs])
        drive, filled = _complete_inputs(drive, record, label)
        if filled:
            notes.append(
                ("input-gaps", f"{label}: {filled} input samples are missing; a straight line is taken")
            )
        segments.append(Segment(label, drive, out, record.interval, record.start, stamps))
    first = records[0]
    in_units = tuple(first.channel(name).unit for name in inputs) if test is None else (test.unit,)
    out_units = tuple(first.channel(name).unit for name in outputs)
    for record in records[1:]:
        for name, word in zip((*inputs, *outputs), (*in_units, *out_units), strict=False):
            if test is None and record.channel(name).unit != word:
                raise LogError(
                    f"channel {name!r} is in {record.channel(name).unit or '1'}, but in {word or '1'} in the first log",
                    where=record.provenance.file, do="state its unit with --unit", code="unit-mismatch",
                )  # fmt: skip
    names = tuple(inputs) if test is None else (test.kind,)
    log: dict[str, Any] = {
        "file": first.provenance.file or None,
        "sha256": first.provenance.sha256 or None,
        "samples": int(sum(s.count for s in segments)),
        "interval": first.interval if np.isfinite(first.interval) else None,
        "how_read": list(first.provenance.how_read),
    }
    if len(records) > 1:
        log["repeats"] = [
            {"file": r.provenance.file, "sha256": r.provenance.sha256, "samples": r.count} for r in records
        ]
    return _checked(
        Arranged(
            tuple(segments),
            names,
            tuple(outputs),
            in_units,
            out_units,
            _named(log, names, outputs),
            tuple(notes),
        )
    )


def _complete_inputs(drive: Array, record: Record, label: str) -> tuple[Array, int]:
    """An input has to be known at every row: a few lost rows are bridged and told, many are refused."""
    lost = ~np.isfinite(drive)
    count = int(lost.any(axis=0).sum())
    if not count:
        return drive, 0
    if count > 0.1 * drive.shape[1]:
        raise LogError(
            f"the input is missing in {count} of {drive.shape[1]} rows",
            where=label, do="choose a stretch with --from and --to", code="input-missing",
        )  # fmt: skip
    out = drive.copy()
    time = record.time
    for row, gone in zip(out, lost, strict=True):
        if gone.any():
            row[gone] = np.interp(time[gone], time[~gone], row[~gone])
    return out, count


def _unlogged_segment(
    label: str, y: Array, interval: float, start: float, stamps: Array | None, test: Unlogged
) -> Segment:
    """A segment of a stated test."""
    time = stamps if stamps is not None else start + interval * np.arange(y.shape[1])
    if not time[0] - 1e-9 <= test.at < time[-1] and not (test.kind != "release" and test.at <= time[0]):
        raise LogError(
            f"the {test.kind} at {test.at:g} s lies outside the record ({time[0]:g} s to {time[-1]:g} s)",
            where=label, do="state the time on the log's own scale", code="event-outside",
        )  # fmt: skip
    ideal = (
        np.where(time >= test.at, test.size, 0.0)[None] if test.kind == "step" else np.zeros((1, time.size))
    )
    return Segment(label, ideal, y, interval, start, stamps, test.kind, test.at, test.size)  # type: ignore[arg-type]


def _checked(found: Arranged) -> Arranged:
    """Refuse what no fit can use.

    Raises
    ------
    LogError
        Codes "too-short", "constant-input", "constant-output", "no-samples".
    """
    where = str(found.log.get("file") or "")
    for segment in found.segments:
        if segment.count < 4:
            raise LogError(
                f"{segment.label}: {segment.count} samples are too few",
                where=where, do="use a longer stretch of the log", code="too-short",
            )  # fmt: skip
        for name, row in zip(found.output_names, segment.outputs, strict=True):
            there = row[np.isfinite(row)]
            if there.size < 4:
                raise LogError(
                    f"channel {name!r} has {there.size} values", where=where,
                    do="choose another channel or a longer stretch", code="no-samples",
                )  # fmt: skip
    for k, name in enumerate(found.input_names):
        if found.segments[0].excitation != "logged":
            break
        rows = [segment.inputs[k] for segment in found.segments]
        if all(float(np.ptp(row)) == 0.0 for row in rows):
            raise LogError(
                f"the input channel {name!r} is constant", where=where,
                do="choose the channel that moves, or state the test with --step-at", code="constant-input",
            )  # fmt: skip
    for k, name in enumerate(found.output_names):
        if all(float(np.ptp(s.outputs[k][np.isfinite(s.outputs[k])])) == 0.0 for s in found.segments):
            raise LogError(
                f"the output channel {name!r} is constant", where=where, do="choose the channel that moves",
                code="constant-output",
            )  # fmt: skip
    return found
