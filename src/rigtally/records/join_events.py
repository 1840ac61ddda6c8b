"""Two loggers joined by events that both saw, where they share no channel."""

from __future__ import annotations

import math

import numpy as np

from rigtally.errors import LogError
from rigtally.quantities.uncertain import Uncertain
from rigtally.records.event import Event
from rigtally.records.events import find_events
from rigtally.records.faults import find_faults
from rigtally.records.join import RATE_PRIOR, ClockFit, joined
from rigtally.records.record import Record


def join_by_events(first: Record, second: Record, channel: str, channel_second: str) -> Record:
    """The first record with the second's channels, by the starts of the same events in one channel of each.

    Both channels have to move at the same instants: what travels from one to the other is taken as offset.

    Raises
    ------
    LogError
        codes "no-such-channel", "not-shared" (no events, or other events).
    """
    fit = fit_clocks_by_events(first, second, channel, channel_second)
    return joined(first, second, fit, f"the events in {channel!r} and {channel_second!r}")


def fit_clocks_by_events(first: Record, second: Record, channel: str, channel_second: str) -> ClockFit:
    """Offset and rate of the second clock against the first from the starts of events.

    start₁ = offset + (1 + rate)·start₂ by weighted least squares, with u of both starts and the prior that
    two crystal clocks differ by 1e-4 or so; scatter beyond those u widens the result.

    Raises
    ------
    LogError
        code "not-shared": no events, other numbers or kinds, or instants that do not fit two steady clocks.
    """
    ours = _timed(find_events(find_faults(first), channel))
    theirs = _timed(find_events(find_faults(second), channel_second))
    if not ours or [event.kind for event in ours] != [event.kind for event in theirs]:
        raise LogError(
            f"the two logs do not show the same events ({_listing(ours)} against {_listing(theirs)})",
            where=second.provenance.file,
            do="choose the stretch that both saw with --from and --to, or name a channel that both recorded",
            code="not-shared",
        )
    t1 = np.array([event.start.value for event in ours])
    t2 = np.array([event.start.value for event in theirs])
    u = np.array([math.hypot(a.start.u, b.start.u) for a, b in zip(ours, theirs, strict=True)])
    weights = u**-2.0
    centre = float(weights @ t2 / weights.sum())
    # unknowns: the shift at the weighted mean of t₂, and the rate, which has a prior observation of 0
    design = np.vstack(
        [np.stack([np.ones_like(t2), t2 - centre], axis=1) / u[:, None], [[0.0, 1.0 / RATE_PRIOR]]]
    )
    observed = np.append((t1 - t2) / u, 0.0)
    covariance = np.linalg.inv(design.T @ design)
    shift, rate = covariance @ (design.T @ observed)
    misfit = float(np.sum((observed - design @ np.array([shift, rate])) ** 2))
    widening = max(misfit / t1.size, 1.0)
    if widening > 25.0 or abs(rate) > 50.0 * RATE_PRIOR:
        raise LogError(
            "the events of the two logs do not keep one distance: no two steady clocks read them so",
            where=second.provenance.file,
            do="choose the stretch that both saw with --from and --to",
            code="not-shared",
        )
    covariance = covariance * widening
    far = np.array([1.0, -centre])
    dof = max(t1.size - 1.0, 1.0) if widening > 1.0 else math.inf
    return ClockFit(
        Uncertain(float(shift - rate * centre), math.sqrt(float(far @ covariance @ far)), "s", dof),
        Uncertain(float(rate), math.sqrt(float(covariance[1, 1])), "", dof),
        Uncertain(0.0, math.sqrt(float(covariance[0, 0])), "s", dof),
        math.nan,
    )


def _timed(events: tuple[Event, ...]) -> list[Event]:
    """Events whose start is an instant: steps, ramps and pulses with a u."""
    return [
        event for event in events if event.kind in ("step", "ramp", "pulse") and math.isfinite(event.start.u)
    ]


def _listing(events: list[Event]) -> str:
    return ", ".join(event.kind for event in events[:6]) or "none"
