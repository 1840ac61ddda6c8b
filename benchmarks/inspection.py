"""Time of the first look at a long record: clock, faults, events. Prints seconds and what was found.

python benchmarks/inspection.py [samples]
"""

from __future__ import annotations

import platform
import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np

from rigtally.records.clock import make_record
from rigtally.records.events import find_events
from rigtally.records.faults import find_faults
from rigtally.records.record import Channel, Provenance, Record


def timed(label: str, work: Callable[[], Any]) -> Any:
    begin = time.perf_counter()
    result = work()
    print(f"{label:28s} {time.perf_counter() - begin:7.3f} s")
    return result


def long_record(samples: int) -> tuple[list[Channel], np.ndarray]:
    """A square wave of twenty half-periods, its slow answer, 1 % noise, stamps printed to 1 µs, 0.1 % rows
    lost."""
    rng = np.random.default_rng(0)
    t = np.arange(samples) * 1e-3
    drive = np.floor(t / (t[-1] / 20)) % 2
    width = samples // 2000
    answer = np.convolve(drive, np.full(width, 1.0 / width))[:samples]
    keep = np.ones(samples, dtype=bool)
    keep[rng.choice(np.arange(1, samples - 1), samples // 1000, replace=False)] = False
    channels = [
        Channel(name, (signal + 0.01 * rng.standard_normal(samples))[keep])
        for name, signal in (("u", drive), ("y", answer))
    ]
    return channels, np.round(t, 6)[keep]


def main() -> None:
    samples = int(float(sys.argv[1])) if len(sys.argv) > 1 else 1_000_000
    print(
        f"{samples} samples, 2 channels; {platform.processor() or platform.machine()}, numpy {np.__version__}"
    )
    channels, stamps = long_record(samples)
    record: Record = timed("clock", lambda: make_record(channels, stamps, None, Provenance()))
    examined: Record = timed("faults", lambda: find_faults(record))
    events = timed("events", lambda: find_events(examined))
    print("clock faults:", [fault.kind for fault in record.clock_faults])
    print("channel faults:", [[fault.kind for fault in channel.faults] for channel in examined.channels])
    print("events:", len(events), "in", events[0].channel if events else None)


if __name__ == "__main__":
    main()
