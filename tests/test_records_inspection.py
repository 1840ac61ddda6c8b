"""Inspection and linearity: what a person learns of a log before any fit."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from scipy.signal import lsim

from rigtally.errors import LogError
from rigtally.records.clock import make_record
from rigtally.records.events import find_events
from rigtally.records.inspection import inspect
from rigtally.records.linearity import Linearity, compare_amplitudes
from rigtally.records.record import Channel, Provenance, Record, Response

T = np.arange(40000) * 1e-3
SIZES = np.array([0, 1, 0, 0.5, 0, 1, 0, 0.5, 1, 0.0])


def staircase() -> np.ndarray:
    return SIZES[(T // 4).astype(int)]


def answer(drive: np.ndarray, zeta: float = 0.4) -> np.ndarray:
    return np.asarray(lsim(([900], [1, 60 * zeta, 900]), drive, T)[1])


def record_of(drive: np.ndarray, reading: np.ndarray, seed: int = 0, noise: float = 0.002) -> Record:
    rng = np.random.default_rng(seed)
    channels = (
        Channel("p line", drive + noise * rng.standard_normal(T.size), "Pa", "Pa", unit_known=True),
        Channel("y", reading + 2 * noise * rng.standard_normal(T.size), "V", "V", unit_known=True),
    )
    return Record(channels, 0.0, 1e-3, provenance=Provenance(file="log.csv", sha256="ab"))


def linearity_of(reading: np.ndarray, seed: int) -> Linearity:
    (one,) = compare_amplitudes(find_events(record_of(staircase(), reading, seed), "p line"))
    return one


def plain(thing: object) -> object:
    """As the command line writes it: what is not finite is null."""
    if isinstance(thing, dict):
        return {key: plain(value) for key, value in thing.items()}
    if isinstance(thing, list | tuple):
        return [plain(value) for value in thing]
    if isinstance(thing, float) and not math.isfinite(thing):
        return None
    return thing


def test_the_document_follows_the_contract() -> None:
    """Schema, channels, clock, events and warnings stand under their promised names."""
    found = inspect(record_of(staircase(), 2 * answer(staircase())))
    document = json.loads(json.dumps(plain(found.to_dict()), allow_nan=False))
    assert document["schema"] == "rigtally/inspection/1"
    assert [channel["name"] for channel in document["channels"]] == ["p line", "y"]
    assert {"name", "unit", "min", "max", "resolution", "faults"} <= set(document["channels"][0])
    assert {"interval", "jitter", "gaps"} <= set(document["clock"])
    assert document["clock"]["interval"] == 1e-3
    assert len(document["events"]) == 9
    event = document["events"][0]
    assert {"start", "channel", "level_before", "level_after", "features"} <= set(event)
    assert event["channel"] == "p line" and event["kind"] == "step"
    assert set(event["start"]) == {"value", "unit", "u", "interval95", "dof"}
    assert document["warnings"] == []


def test_next_commands_can_be_typed() -> None:
    """The driving channel is the input, quoted where it must be, and the main job is among the lines."""
    found = inspect(record_of(staircase(), 2 * answer(staircase())))
    assert found.drive == "p line"
    assert found.next_commands[0] == "rigtally fit log.csv --input 'p line' --output y"
    assert any(line.startswith("rigtally tally log.csv RIG.toml") for line in found.next_commands)


def test_a_lone_answer_is_offered_with_its_step_stated() -> None:
    """With one channel the input was not logged: --step-at with the start that was found."""
    reading = answer(1.0 * (T > 5))
    record = record_of(staircase(), reading)
    found = inspect(Record((record.channels[1],), 0.0, 1e-3, provenance=record.provenance))
    (line,) = found.next_commands
    head, at = line.rsplit(" ", 1)
    assert head == "rigtally fit log.csv --output y --step-at"
    assert float(at) == pytest.approx(5.0, abs=0.01)


def test_warnings_name_channel_and_clock() -> None:
    """A channel without a unit, clipping and a record that ends too early are all said."""
    drive = 1.0 * (T > 39.9)
    record = record_of(drive, np.minimum(2 * answer(drive) + 0.3 * np.sin(T), 0.25))
    nameless = Channel("y", np.minimum(record.channels[1].samples, 0.25))
    codes = {code for code, _ in inspect(Record((record.channels[0], nameless), 0.0, 1e-3)).warnings}
    assert {"no-unit", "clipped"} <= codes


def test_unknown_channels_are_refused() -> None:
    """With the names there are."""
    with pytest.raises(LogError, match="p line, y"):
        inspect(record_of(staircase(), staircase()), inputs=["q"])


def test_a_response_table_is_inspected_too() -> None:
    """No clock and no events, but lines, range and what is missing."""
    response = Response(np.array([1.0, 2.0]), np.ones((2, 1, 1), complex), magnitude_only=True)
    found = inspect(response)
    assert found.to_dict()["response"]["lines"] == 2
    assert {code for code, _ in found.warnings} == {"magnitude-only", "no-uncertainty"}


def test_a_linear_rig_shows_no_movement() -> None:
    """Two tests of four features, 15 linear rigs: at most one finding (1 % each would be 0.15)."""
    reading = 2 * answer(staircase())
    findings = [text for seed in range(15) for text in linearity_of(reading, seed).findings]
    assert len(findings) <= 1, findings


def test_a_gain_that_falls_with_size_is_found_with_its_amount() -> None:
    """y − 0.025 y² of y = 2x: gain 1.9 for steps of 1 and 1.95 for steps of 0.5, a change of −0.05."""
    drive = np.array([0, 1, 0, 0.5, 0, 1, 0, 0.5, 0, 0.5])[(T // 4).astype(int)]
    swing = 2 * answer(drive)
    (one,) = compare_amplitudes(find_events(record_of(drive, swing - 0.025 * swing**2, 60), "p line"))
    (gain,) = [movement for movement in one.movements if movement.feature == "gain"]
    assert gain.size_matters and not gain.direction_matters
    assert gain.with_size.value == pytest.approx(-0.05, abs=0.005)
    assert one.sizes == pytest.approx((0.5, 1.0), abs=0.01)
    assert any("gain changes by -0.05" in text for text in one.findings)


def test_a_direction_that_matters_is_found() -> None:
    """Damping 0.4 upwards and 0.55 downwards: overshoot 0.254 against 0.126, a finding with its amount."""
    drive = staircase()
    up, down = 2 * answer(drive, 0.4), 2 * answer(drive, 0.55)
    rising = np.diff(np.concatenate([[0.0], SIZES])) > 0
    reading = np.where(rising[(T // 4).astype(int)], up, down)
    one = linearity_of(reading, 62)
    (overshoot,) = [movement for movement in one.movements if movement.feature == "overshoot"]
    assert overshoot.direction_matters
    assert overshoot.with_direction.value == pytest.approx(0.254 - 0.126, abs=0.02)
    assert any("upward" in text and "overshoot" in text for text in one.findings)


def test_hysteresis_is_stated_with_its_width() -> None:
    """An answer that stops 0.03 short of each new level: the half level is reached from both sides."""
    drive = np.array([0, 0.5, 1, 0.5, 0, 0.5, 1, 0.5, 0, 0.5])[(T // 4).astype(int)]
    moved = np.zeros_like(drive)
    held = 0.0
    for k in range(0, T.size, 4000):
        target = drive[k]
        held = min(max(held, target - 0.015), target + 0.015)
        moved[k : k + 4000] = held
    (one,) = compare_amplitudes(find_events(record_of(drive, 2 * answer(moved), 63), "p line"))
    # gain 2 and a dead band of ±0.015 in the drive: −0.06 between rise and fall
    assert one.hysteresis.value == pytest.approx(-0.06, abs=0.004)
    assert abs(one.hysteresis.value) > 5 * one.hysteresis.u
    assert any("dead band" in text for text in one.findings)


def odd_samples(rng: np.random.Generator, count: int) -> np.ndarray:
    """Records that no bench should make, and some that it does."""
    t = np.arange(count)
    kinds = (
        rng.standard_normal(count),
        np.zeros(count),
        (t > count * rng.random()) * 1.0,
        np.full(count, np.nan),
        np.sin(3 * t * rng.random()),
        np.cumsum(rng.standard_normal(count)),
        np.round(rng.standard_normal(count)),
        (t % rng.integers(2, 30) < 3) * 1.0,
        np.exp(-t / (1 + count / 5)) * np.cos(0.2 * t),
        rng.standard_cauchy(count),
        (t == count // 2) * 1.0,
        np.where(rng.random(count) < 0.5, np.nan, rng.standard_normal(count)),
    )
    scale, offset = 10.0 ** rng.choice([-80, -3, 0, 3, 70]), rng.choice([0.0, 1.0, 1e9])
    return np.asarray(kinds[rng.integers(len(kinds))] * scale + offset)


def test_anything_is_inspected_or_refused() -> None:
    """300 odd records on odd clocks: an inspection that can be written, or a refusal; no warning, no
    traceback."""
    rng = np.random.default_rng(64)
    looked = 0
    for _ in range(300):
        count = int(rng.choice([0, 1, 2, 3, 9, 17, 40, 120, 700]))
        channels = [Channel(f"c{k}", odd_samples(rng, count)) for k in range(rng.integers(1, 4))]
        stamps = (
            None,
            0.1 * np.arange(count),
            np.cumsum(rng.random(count)),
            np.round(0.0013 * np.arange(count), 3),
            np.sort(rng.integers(0, max(count, 1), count)).astype(float),
        )[rng.integers(5)]
        try:
            record = make_record(channels, stamps, 10.0 if stamps is None else None, Provenance("f"))
        except LogError as refusal:
            assert refusal.code in {"too-short", "clock-stands"}
            continue
        json.dumps(plain(inspect(record).to_dict()), allow_nan=False)
        looked += 1
    assert looked > 180
