"""Every channel of a log over time, with its events."""

from __future__ import annotations

from collections.abc import Sequence

from rigtally.records.event import Event
from rigtally.records.record import Record
from rigtally.reporting.plots import FITTED, MEASURED, _figure, envelope, svg

MOST_CHANNELS = 8


def channels_plot(record: Record, events: Sequence[Event]) -> str:
    """SVG: one row a channel, a dashed line at the start of each event."""
    channels = record.channels[:MOST_CHANNELS]
    figure, axes = _figure(len(channels), 1, 8.6, 0.6 + 1.5 * len(channels), sharex=True)
    for axis, channel in zip(axes[:, 0], channels, strict=True):
        axis.plot(*envelope(record.time, channel.samples), color=FITTED, linewidth=0.8)
        axis.set_ylabel(f"{channel.name}\n({channel.unit or 'no unit'})")
        for event in events:
            axis.axvline(event.start.value, color=MEASURED, linestyle="--", linewidth=0.7)
    for event in events:
        axes[0, 0].annotate(
            str(event.number),
            (event.start.value, 1.0),
            xycoords=("data", "axes fraction"),
            fontsize=8,
            va="bottom",
        )
    axes[-1, 0].set_xlabel("time (s)")
    return svg(figure)
