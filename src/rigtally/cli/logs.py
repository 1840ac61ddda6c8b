"""From the command line's log options to records, and from fit options to keywords."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from rigtally.cli.options import held_values, noise_value, offset_value, pairs, range_values
from rigtally.errors import LogError, UsageError

if TYPE_CHECKING:
    from rigtally.physics.rig import Rig
    from rigtally.records.record import Record

# options of the log that are handed to the reader under the same name
_LAYOUT = ("separator", "decimal", "thousands", "encoding")


def read_logs(files: Sequence[str], options: Mapping[str, Any], rig: Rig | None = None) -> list[Any]:
    """Read each file as the options (and the rig's [log] table) say."""
    from rigtally.records.read import read

    stated = dict(rig.log) if rig is not None else {}
    units = {**stated.get("units", {}), **pairs(options["units"], "--unit")}
    keywords = {key: options[key] for key in _LAYOUT if options.get(key)}
    records = []
    for file in files:
        record = read(
            file,
            time=options["time_name"] or stated.get("time"),
            rate=options["rate"] or stated.get("rate"),
            units=units,
            **keywords,
        )
        records.append(_chosen_part(record, options))
    return records


def _chosen_part(record: Any, options: Mapping[str, Any]) -> Any:
    """The window that --from, --to or --event name."""
    from rigtally.records.record import Record

    if not isinstance(record, Record):
        return record
    begin, end = options.get("begin"), options.get("end")
    if options.get("event") is not None:
        from rigtally.records.events import event_window

        inputs = options.get("inputs") or ()
        begin, end = event_window(record, options["event"], inputs[0] if inputs else None)
    if begin is not None or end is not None:
        return record.window(begin, end)
    return record


def fit_keywords(options: Mapping[str, Any]) -> dict[str, Any]:
    """Keywords of `rigtally.fit` from the command line's options."""
    out: dict[str, Any] = {
        "road": options["road"],
        "offset": offset_value(options["offset"]),
        "start": options["start"],
        "noise": noise_value(options["noise"]),
        "set": held_values(options["held"]),
        "range": range_values(options["ranges"]),
        "tie": pairs(options["ties"], "--tie"),
        "seed": options["seed"],
    }
    for name in ("form", "between", "drift"):
        if options[name] is not None:
            out[name] = options[name]
    for name in ("dead_time", "output_first"):
        if options[name]:
            out[name] = True
    for name in ("step_at", "step_size", "release_at", "pulse_at", "pulse_area"):
        if options[name] is not None:
            out[name] = options[name]
    return out


def unlogged(options: Mapping[str, Any]) -> bool:
    """Whether the test's input is stated instead of logged."""
    return any(options[name] is not None for name in ("step_at", "release_at", "pulse_at"))


def choose_channels(
    record: Record, inputs: Sequence[str], outputs: Sequence[str], *, input_is_logged: bool
) -> tuple[list[str], list[str]]:
    """The channels to fit: as named, or the one obvious choice.

    Raises
    ------
    LogError
        code "which-channel": more than one choice, with the names there are.
    """
    names = [name for name in record.names if name not in (*inputs, *outputs)]
    chosen_in, chosen_out = list(inputs), list(outputs)
    listing = "the log has: " + ", ".join(record.names)
    if not input_is_logged:
        if chosen_in:
            raise UsageError(
                "an input channel was named for a test whose input is stated",
                do="leave --input out, or leave --step-at, --release-at or --pulse-at out",
                code="bad-option",
            )
        if not chosen_out:
            if len(names) != 1:
                raise LogError(
                    "which channel is the output is not clear",
                    where=record.provenance.file,
                    do=f"name it with --output; {listing}",
                    code="which-channel",
                )
            chosen_out = names
        return chosen_in, chosen_out
    if chosen_in and chosen_out:
        return chosen_in, chosen_out
    missing = (
        "--input and --output" if not (chosen_in or chosen_out) else "--input" if chosen_out else "--output"
    )
    if len(record.names) == 2 and (chosen_in or chosen_out):
        return (chosen_in or names), (chosen_out or names)
    raise LogError(
        "which channels are input and output is not clear",
        where=record.provenance.file,
        do=f"name them with {missing}; {listing}",
        code="which-channel",
    )


def rig_channels(rig: Rig, record: Record) -> tuple[list[str], list[str]]:
    """Channels of the rig's drives and readings, checked against the log and its units."""
    from rigtally.quantities.units import dimension, same_dimension

    def of(things: Any, kind: str) -> list[str]:
        out = []
        for thing in things:
            name = thing.channel
            if not name:
                raise LogError(
                    f"{kind} {thing.name!r} has no channel",
                    where=rig.file,
                    do=f'add channel = "…" to [[{kind}]] {thing.name!r}',
                    code="no-channel",
                )
            channel = record.channel(name)
            if thing.unit and not channel.unit_known:
                raise LogError(
                    f"channel {name!r} has no unit",
                    where=record.provenance.file,
                    do=f"state it, as --unit {name}={thing.unit}, or in [log] units of the rig file",
                    code="no-unit",
                )
            if channel.unit_known and not same_dimension(channel.unit, thing.unit):
                raise LogError(
                    f"channel {name!r} is in {channel.written_unit or '1'} ({dimension(channel.unit)}), but "
                    f"{kind} {thing.name!r} is {dimension(thing.unit)}",
                    where=record.provenance.file,
                    do=f"name the right channel in [[{kind}]], or state the unit with --unit {name}=…",
                    code="unit-mismatch",
                )
            out.append(name)
        return out

    return of(rig.drives, "drive"), of(rig.readings, "reading")
