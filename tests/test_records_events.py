"""Events in records: kinds, starts, levels, windows, under noise, offset, drift and converter steps."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from scipy.signal import chirp, lsim

from rigtally.errors import LogError
from rigtally.records.events import event_window, find_events
from rigtally.records.faults import find_faults
from rigtally.records.record import Channel, Fault, Record

COUNT, INTERVAL = 20000, 1e-3
T = np.arange(COUNT) * INTERVAL
DWELLS = (1.0, 2.0, 4.0, 8.0, 16.0)


def answer(drive: np.ndarray, zeta: float = 0.4, omega: float = 30.0) -> np.ndarray:
    return np.asarray(lsim(([omega**2], [1, 2 * zeta * omega, omega**2]), drive - drive[0], T)[1])


def record_of(
    drive: np.ndarray, noise: float, seed: int = 0, quantum: float = 0.0, drift: float = 0.0
) -> Record:
    """Drive and answer (gain 2), both with `noise` in shares of the drive's range."""
    rng = np.random.default_rng(seed)
    size = float(np.ptp(drive))
    channels = []
    for name, signal, scale in (("u", drive, 1.0), ("y", 2 * answer(drive), 2.0)):
        samples = 40 + signal + drift * size * T / T[-1] + scale * noise * size * rng.standard_normal(COUNT)
        if quantum:
            samples = np.round(samples / (quantum * size)) * quantum * size
        channels.append(Channel(name, samples, "V"))
    return find_faults(Record(tuple(channels), 100.0, INTERVAL))


DRIVES: dict[str, tuple[np.ndarray, list[str], list[float]]] = {
    "step": (1.0 * (T > 5.0003), ["step"], [5.0005]),
    "up and down": (1.0 * ((T > 3) & (T < 9)), ["step", "step"], [3.0005, 8.9995]),
    "staircase": (np.minimum(np.floor(T / 4), 3), ["step"] * 3, [3.9995, 7.9995, 11.9995]),
    "ramp": (np.clip((T - 5) / 4, 0, 1), ["ramp"], [5.0]),
    "pulse": (1.0 * ((T > 7) & (T < 7.05)), ["pulse"], [7.0005]),
    "square wave": (np.floor(T + 0.5) % 2, ["step"] * 20, [0.4995 + k for k in range(20)]),
    "dwells": (np.concatenate([np.sin(2 * np.pi * f * T[:4000]) for f in DWELLS]), ["dwell"] * 5, []),
    "sweep": (chirp(T, 1, 20, 30, "logarithmic"), ["sweep"], []),
}


@pytest.mark.parametrize("name", list(DRIVES))
@pytest.mark.parametrize(
    ("noise", "quantum", "drift"), [(0.001, 0, 0), (0.01, 0, 0.02), (0.1, 0, 0), (0.001, 0.01, 0)]
)
def test_events_are_found(name: str, noise: float, quantum: float, drift: float) -> None:
    """Number, kind and start (within 4 u and half an interval), with noise, drift and converter steps."""
    drive, kinds, starts = DRIVES[name]
    events = find_events(record_of(drive, noise, 1, quantum, drift), "u")
    assert [event.kind for event in events] == kinds
    assert [event.number for event in events] == list(range(1, len(events) + 1))
    for event, start in zip(events, starts, strict=False):
        slack = 4 * event.start.u + (0.1 if name == "ramp" and quantum else INTERVAL / 2)
        assert abs(event.start.value - 100 - start) < slack


def test_levels_and_size_of_a_step() -> None:
    """Level before, level after and direction, with u that shrinks with the stretch's length."""
    (event,) = find_events(record_of(-1.0 * (T > 5), 0.02, 2), "u")
    assert event.level_before.value == pytest.approx(40.0, abs=5 * event.level_before.u)
    assert event.level_after.value == pytest.approx(39.0, abs=5 * event.level_after.u)
    assert event.level_before.u < 0.02 / math.sqrt(2000)
    assert event.direction == -1
    assert event.size == pytest.approx(-1, abs=0.005)


def test_levels_cover() -> None:
    """95 % intervals of both levels hold them in 90–99 % of 100 steps with 5 % noise."""
    inside = 0
    rng = np.random.default_rng(21)
    for _ in range(100):
        samples = 40 + 1.0 * (T > 5) + 0.05 * rng.standard_normal(COUNT)
        (event,) = find_events(Record((Channel("u", samples),), 100.0, INTERVAL), "u")
        for found, truth in ((event.level_before, 40.0), (event.level_after, 41.0)):
            low, high = found.interval()
            inside += low <= truth <= high
    assert 0.90 * 200 <= inside <= 0.99 * 200


def test_starts_of_steps_cover() -> None:
    """95 % intervals of the start hold it in at least 90 % of 100 steps at instants between samples."""
    rng = np.random.default_rng(3)
    inside = 0
    for _ in range(100):
        truth = 5 + 0.001 * rng.random()
        samples = 1.0 * (truth < T) + 0.03 * rng.standard_normal(COUNT)
        (event,) = find_events(Record((Channel("u", samples),), 100.0, INTERVAL), "u")
        low, high = event.start.interval()
        inside += low <= 100 + truth <= high
    assert inside >= 90


def test_the_answer_carries_its_step_features() -> None:
    """ζ = 0.4, ωn = 30: overshoot exp(−πζ/√(1−ζ²)) = 0.2538, and the gain from the amplitudes."""
    (event,) = find_events(record_of(1.0 * (T > 5), 0.005, 4), "u")
    features = event.responses["y"]
    assert features["overshoot"].value == pytest.approx(0.2538, abs=4 * features["overshoot"].u)
    assert features["overshoot"].u < 0.005
    assert features["amplitude"].value / event.size == pytest.approx(2.0, rel=2e-3)
    assert features["transition_duration"].value * 30 == pytest.approx(1.463, abs=0.02)


def test_features_of_ramp_and_pulse() -> None:
    """Rate and duration of a ramp; height, width and area of a pulse."""
    (ramp,) = find_events(record_of(DRIVES["ramp"][0], 0.01, 5), "u")
    assert ramp.features["rate"].value == pytest.approx(0.25, rel=0.01)
    assert ramp.features["duration"].value == pytest.approx(4.0, rel=0.01)
    (pulse,) = find_events(record_of(DRIVES["pulse"][0], 0.002, 6), "u")
    assert pulse.features["width"].value == pytest.approx(0.05, abs=0.0021)
    assert pulse.features["area"].value == pytest.approx(0.049, rel=0.03)
    assert pulse.features["height"].value == pytest.approx(1.0, abs=0.03)


def test_dwells_have_their_frequencies() -> None:
    """Each dwell's frequency lies within 4 u, its amplitude within 1 %."""
    for event, hertz in zip(find_events(record_of(DRIVES["dwells"][0], 0.02, 7), "u"), DWELLS, strict=True):
        frequency = event.features["frequency"]
        assert frequency.value == pytest.approx(hertz, abs=4 * frequency.u + 1e-4)
        assert event.features["amplitude"].value == pytest.approx(1.0, rel=0.01)


def test_sweep_names_both_ends() -> None:
    """1 Hz to 30 Hz within a third."""
    (event,) = find_events(record_of(DRIVES["sweep"][0], 0.02, 8), "u")
    assert event.features["frequency_from"].value == pytest.approx(1.0, rel=0.35)
    assert event.features["frequency_to"].value == pytest.approx(30.0, rel=0.05)


@pytest.mark.parametrize("name", ["step", "up and down", "staircase", "pulse", "square wave", "dwells"])
def test_the_drive_is_found_without_its_name(name: str) -> None:
    """The channel that moves abruptly (or evenly) is the drive, the other one answers."""
    record = record_of(DRIVES[name][0], 0.01, 9)
    swapped = Record(record.channels[::-1], record.start, record.interval)
    for one in (record, swapped):
        assert {event.channel for event in find_events(one)} == {"u"}


@pytest.mark.parametrize(("noise", "quantum"), [(0.0005, 0.0), (0.005, 0.01), (0.05, 0.0)])
def test_answers_alone_show_their_start_and_overshoot(noise: float, quantum: float) -> None:
    """Sixty second-order steps of any damping and speed: each one step, its 95 % intervals hold in 87 %.

    0.95 less 2.8 σ of the binomial, for start and overshoot each.
    """
    rng = np.random.default_rng(22)
    t = np.arange(8000) * INTERVAL
    starts = overshoots = 0
    for _ in range(60):
        zeta, omega, at = rng.uniform(0.15, 0.9), 10 ** rng.uniform(0.9, 2.2), rng.uniform(1, 3)
        x, damped = (t - at).clip(0), omega * math.sqrt(1 - zeta**2)
        ring = np.cos(damped * x) + zeta * omega / damped * np.sin(damped * x)
        samples = (
            5
            + np.where(t > at, 1 - np.exp(-zeta * omega * x) * ring, 0.0)
            + noise * rng.standard_normal(8000)
        )
        if quantum:
            samples = np.round(samples / quantum) * quantum
        (event,) = find_events(find_faults(Record((Channel("y", samples),), 0.0, INTERVAL)))
        assert event.kind == "step"
        low, high = event.start.interval()
        starts += low <= at <= high
        low, high = event.features["overshoot"].interval()
        overshoots += low <= math.exp(-math.pi * zeta / math.sqrt(1 - zeta**2)) <= high
    assert min(starts, overshoots) >= 52, (starts, overshoots)


def test_without_a_level_after_there_is_no_overshoot() -> None:
    """A ring that has not died away when the record ends: start, but neither level after nor features."""
    t = np.arange(5000) * INTERVAL
    x = (t - 2).clip(0)
    samples = np.where(t > 2, 1 - np.exp(-0.2 * x) * np.cos(5 * x), 0.0)
    noise = 0.005 * np.random.default_rng(23).standard_normal(5000)
    (event,) = find_events(Record((Channel("y", samples + noise),), 0.0, INTERVAL))
    assert event.start.value == pytest.approx(2.0, abs=0.03)
    assert math.isnan(event.level_after.value) and not event.features


def test_a_free_decay_is_a_release() -> None:
    """A record that begins displaced and dies away: one release at its first sample, start's u unknown."""
    samples = np.exp(-0.5 * T) * np.cos(6 * T) + 0.002 * np.random.default_rng(10).standard_normal(COUNT)
    (event,) = find_events(Record((Channel("y", samples),), 0.0, INTERVAL))
    assert event.kind == "release"
    assert event.start.value == 0.0 and math.isnan(event.start.u)
    slow = 20 + 60 * np.exp(-T / 8) + 0.1 * np.random.default_rng(11).standard_normal(COUNT)
    (event,) = find_events(Record((Channel("y", slow),), 0.0, INTERVAL))
    assert event.kind == "release"


def test_noise_alone_is_no_event() -> None:
    """At most 1 of 100 records of white noise, and none that stands still, show an event."""
    rng = np.random.default_rng(12)
    found = [
        event
        for _ in range(100)
        for event in find_events(Record((Channel("u", rng.standard_normal(5000)),), 0.0, INTERVAL))
        if event.kind != "broadband"
    ]
    assert len(found) <= 1
    assert not find_events(Record((Channel("u", np.ones(5000)),), 0.0, INTERVAL))


def test_broadband_excitation_is_one_event() -> None:
    """Filtered noise is a stretch to be fitted as a whole."""
    drive = answer(np.random.default_rng(13).standard_normal(COUNT), 0.7, 60)
    (event,) = find_events(record_of(drive, 0.001, 14), "u")
    assert event.kind == "broadband"


def test_a_spike_is_no_pulse() -> None:
    """A sample that was found to be a spike makes no event, and moves no start."""
    record = record_of(1.0 * (T > 5), 0.01, 15)
    samples = record.channels[0].samples.copy()
    samples[12000] += 4.0
    channel = Channel("u", samples, faults=(Fault("spikes", "", 1, (12000,)),))
    (event,) = find_events(Record((channel, record.channels[1]), 100.0, INTERVAL), "u")
    assert event.kind == "step"


def test_missing_samples_do_not_disturb() -> None:
    """5 % NaN, in both channels: the same event, and no NaN in its features."""
    record = record_of(1.0 * (T > 5), 0.01, 16)
    rng = np.random.default_rng(17)
    holed = []
    for channel in record.channels:
        samples = channel.samples.copy()
        samples[rng.choice(COUNT, 1000, replace=False)] = np.nan
        holed.append(Channel(channel.name, samples, "V"))
    (event,) = find_events(Record(tuple(holed), 100.0, INTERVAL), "u")
    assert event.start.value == pytest.approx(105.0, abs=0.003)
    assert math.isfinite(event.responses["y"]["overshoot"].value)


def test_true_stamps_are_used() -> None:
    """On an irregular clock the start is that of the stamps, not of the row numbers."""
    rng = np.random.default_rng(18)
    stamps = np.cumsum(rng.uniform(0.2e-3, 1.8e-3, COUNT))
    samples = 1.0 * (stamps > 7.0) + 0.01 * rng.standard_normal(COUNT)
    (event,) = find_events(Record((Channel("u", samples),), stamps=stamps), "u")
    assert event.start.value == pytest.approx(7.0, abs=2e-3)


def test_windows_part_the_record() -> None:
    """Each window holds its own start and no other's; numbers outside are refused with what there is."""
    record = record_of(DRIVES["staircase"][0], 0.01, 19)
    starts = [event.start.value for event in find_events(record, "u")]
    for k, start in enumerate(starts):
        begin, end = event_window(record, k + 1, "u")
        assert [other for other in starts if begin <= other <= end] == [start]
        assert record.window(begin, end).count > 1000
    with pytest.raises(LogError, match=r"1 \(step at 10") as caught:
        event_window(record, 4, "u")
    assert caught.value.code == "no-such-event"


def test_a_million_samples_take_about_a_second() -> None:
    """Two channels of 10⁶ samples with twenty steps; a bound several times the usual, for a busy machine."""
    t = np.arange(1_000_000) * 1e-3
    rng = np.random.default_rng(20)
    drive = np.floor(t / 50) % 2
    record = Record(
        (
            Channel("u", drive + 0.01 * rng.standard_normal(t.size)),
            Channel(
                "y", np.convolve(drive, np.full(500, 0.002))[: t.size] + 0.01 * rng.standard_normal(t.size)
            ),
        ),
        0.0,
        1e-3,
    )
    begin = time.process_time()
    assert len(find_events(record)) == 19
    assert time.process_time() - begin < 6.0
