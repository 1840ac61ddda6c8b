"""Faults of a channel: found where they are, and not found on clean Gaussian records."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest

from rigtally.records.faults import clipped_mask, find_faults
from rigtally.records.record import Channel, Fault, Record
from rigtally.records.sample_noise import noise_sigma, smallest_step

INTERVAL = 1e-3


def examined(samples: np.ndarray, **keywords: object) -> Channel:
    channel = Channel("p", samples, "Pa", **keywords)  # type: ignore[arg-type]
    return find_faults(Record((channel,), 0.0, INTERVAL)).channels[0]


def faults(samples: np.ndarray, **keywords: object) -> dict[str, Fault]:
    return {fault.kind: fault for fault in examined(samples, **keywords).faults}


def step_response(count: int, overshoot: float = 0.25) -> np.ndarray:
    t = np.arange(count) * INTERVAL - 0.25 * count * INTERVAL
    return np.where(t > 0, 1 - (1 - 0.0) * np.exp(-8 * t.clip(0)) * np.cos(20 * t.clip(0)), 0.0)


@pytest.mark.parametrize("places", [None, 3, 2, 1])
def test_clean_gaussian_records_raise_no_alarm(places: int | None) -> None:
    """400 clean records of 2000 samples: each finder alarms on at most 1 % (+ binomial 3 σ: 10 of 400)."""
    rng = np.random.default_rng(10)
    alarms: Counter[str] = Counter()
    for _ in range(400):
        samples = rng.normal(10, 1, 2000)
        alarms.update(faults(samples if places is None else np.round(samples, places)).keys())
    assert all(count <= 10 for count in alarms.values()), alarms


def test_noisy_step_responses_raise_no_alarm() -> None:
    """200 noisy step responses, noise of 0.1 % to 10 %, converter steps of up to 3 σ: at most 2 %."""
    rng = np.random.default_rng(11)
    alarms: Counter[str] = Counter()
    for k in range(200):
        noise = [0.001, 0.01, 0.1][k % 3]
        samples = step_response(2000) + noise * rng.standard_normal(2000)
        quantum = [0.0, 0.1, 0.5, 3.0][k % 4] * noise
        alarms.update(faults(np.round(samples / quantum) * quantum if quantum else samples).keys())
    del alarms["coarse-steps"]
    assert sum(alarms.values()) <= 4, alarms


@pytest.mark.parametrize("quantum", [0.0, 0.004])
@pytest.mark.parametrize("edge", [1.15, 1.02])
def test_clipping_is_found_on_a_noisy_response(quantum: float, edge: float) -> None:
    """An overshoot cut off, and a level that settles 2 σ below full scale: found, with its samples masked."""
    rng = np.random.default_rng(12)
    for _ in range(50):
        samples = step_response(4000) + 0.01 * rng.standard_normal(4000)
        if quantum:
            samples = np.round(samples / quantum) * quantum
            edge = round(edge / quantum) * quantum
        channel = examined(np.minimum(samples, edge))
        low, high = clipped_mask(channel)
        assert channel.full_scale is not None
        assert channel.full_scale[0] == -np.inf
        assert channel.full_scale[1] == pytest.approx(edge)
        assert not low.any()
        assert np.array_equal(high, samples >= edge - 0.5 * quantum - 1e-12)


@pytest.mark.parametrize("quantum", [0.0, 0.002])
def test_clipping_is_found_without_noise(quantum: float) -> None:
    """Crests cut off from a clean ring and a clean sine, as a converter coarser than the noise records them."""
    t = np.arange(4000) * INTERVAL
    for signal, edge in ((step_response(4000), 1.15), (np.sin(2 * np.pi * 1.7 * t), 0.8)):
        samples = np.round(signal / quantum) * quantum if quantum else signal
        channel = examined(np.minimum(samples, edge))
        assert channel.full_scale == (-np.inf, edge)
        assert examined(samples).full_scale is None


def test_clipping_at_the_lower_end_is_found() -> None:
    """The mirror of the upper end."""
    rng = np.random.default_rng(13)
    channel = examined(np.maximum(rng.standard_normal(3000), -1.5))
    assert channel.full_scale == (-1.5, np.inf)
    assert clipped_mask(channel)[0].sum() > 100


def test_a_stated_full_scale_needs_no_pile() -> None:
    """A stated full scale is kept, and one sample that reaches it is reported."""
    samples = np.linspace(0, 1, 100)
    channel = examined(samples, full_scale=(-1.0, 1.0))
    assert channel.full_scale == (-1.0, 1.0)
    assert clipped_mask(channel)[1].sum() == 1
    assert "clipped" in {fault.kind for fault in channel.faults}


def test_a_command_without_noise_is_not_clipped_nor_stuck() -> None:
    """A switched or ramped command holds its values by nature."""
    t = np.arange(3000) * INTERVAL
    assert not faults(np.where(t > 1, 5.0, 0.0))
    assert not faults(np.clip(t - 1, 0, 1))


def test_no_full_scale_means_no_clipped_samples() -> None:
    """The mask of a channel without a full scale is empty."""
    low, high = clipped_mask(Channel("p", np.arange(5.0)))
    assert not low.any() and not high.any()


def test_a_stuck_stretch_is_found_with_its_length() -> None:
    """Forty equal samples in noise: rows and length."""
    samples = np.random.default_rng(14).standard_normal(5000)
    samples[1000:1040] = 0.3
    fault = faults(samples)["stuck"]
    assert fault.rows == (1000,) and fault.count == 40 and fault.size == 40


def test_a_constant_channel_is_said_to_be_constant() -> None:
    """Nothing else is said about it."""
    assert set(faults(np.full(1000, 3.0))) == {"constant"}


def test_spikes_are_found_and_edges_are_not() -> None:
    """Ten single samples 12 σ off are found at their rows; a step of 100 σ is no spike."""
    rng = np.random.default_rng(15)
    samples = rng.standard_normal(5000) + np.where(np.arange(5000) > 2500, 100.0, 0.0)
    rows = np.array([100, 900, 1500, 2000, 2300, 2700, 3000, 3500, 4000, 4500])
    samples[rows] += 12.0
    fault = faults(samples)["spikes"]
    assert fault.count == 10
    assert fault.rows == tuple(rows[:8])


def test_a_fast_ring_is_no_spike() -> None:
    """A resonance with five samples a period swings, it does not spike."""
    t = np.arange(4000) * INTERVAL
    ring = np.exp(-((t - 1).clip(0)) * 20) * np.sin(2 * np.pi * 200 * (t - 1)) * (t > 1)
    assert "spikes" not in faults(ring + 1e-3 * np.random.default_rng(16).standard_normal(4000))


@pytest.mark.parametrize("hertz", [50.0, 60.0, 49.93])
def test_mains_hum_is_found_with_its_amplitude(hertz: float) -> None:
    """A tenth of the noise is found in 20 000 samples: size within 25 %, frequency to a bin."""
    t = np.arange(20000) * INTERVAL
    samples = np.random.default_rng(17).standard_normal(20000) + 0.1 * np.sin(2 * np.pi * hertz * t)
    fault = faults(samples)["mains-hum"]
    assert fault.size == pytest.approx(0.1, rel=0.25)
    found = float(fault.text.split(" at ")[1].split(" Hz")[0])
    assert found == pytest.approx(hertz, abs=1 / 20)


def test_excitation_near_the_mains_is_no_hum() -> None:
    """A dwell at 50 Hz, and a multisine with a line there, are what was done, not what crept in."""
    t = np.arange(20000) * INTERVAL
    noise = 0.01 * np.random.default_rng(18).standard_normal(20000)
    assert "mains-hum" not in faults(np.sin(2 * np.pi * 50 * t) + noise)
    lines = sum(np.sin(2 * np.pi * f * t + f * f) for f in range(10, 90, 5))
    assert "mains-hum" not in faults(lines + noise)


def test_content_that_rises_towards_half_the_sampling_rate_is_named() -> None:
    """A tone at 0.95 of half the rate, as one folded down would stand there."""
    t = np.arange(8000) * INTERVAL
    samples = np.random.default_rng(19).standard_normal(8000) + 2 * np.sin(2 * np.pi * 475 * t)
    assert faults(samples)["no-anti-alias"].size > 2


def test_a_resolution_coarse_against_the_noise_is_named() -> None:
    """One step of three σ is coarse, a third of σ is not."""
    rng = np.random.default_rng(20)
    samples = 10 * step_response(4000) + 0.01 * rng.standard_normal(4000)
    assert "coarse-steps" in faults(np.round(samples / 0.03) * 0.03)
    assert "coarse-steps" not in faults(np.round(samples / 0.003) * 0.003)


def test_missing_samples_are_counted_and_do_not_disturb() -> None:
    """NaN rows are one fault with their rows; the other finders see the rest."""
    samples = np.random.default_rng(21).standard_normal(3000)
    samples[[5, 6, 2000]] = np.nan
    assert set(faults(samples)) == {"missing"}
    assert faults(samples)["missing"].rows == (5, 6, 2000)


@pytest.mark.parametrize(
    ("step", "printed"), [(0.01, 2), (0.0030517578125, 6), (10 / 4096, 8), (0.25, 2), (1.0, 0), (5.0, 0)]
)
def test_the_resolution_is_found_behind_the_print(step: float, printed: int) -> None:
    """Codes of a converter, scaled and printed, give the converter's step within 1 %."""
    codes = np.round(np.random.default_rng(22).normal(0, 40, 3000))
    assert smallest_step(np.round(codes * step, printed)) == pytest.approx(step, rel=1e-2)


def test_full_doubles_have_no_resolution() -> None:
    """Nothing is printed as a resolution where there is none."""
    assert np.isnan(smallest_step(np.random.default_rng(23).standard_normal(3000)))


def test_resolution_is_si_and_stated_ones_stay() -> None:
    """kPa printed with one decimal are steps of 100 Pa; a stated resolution is not overwritten."""
    written = np.round(np.random.default_rng(24).normal(0, 4, 3000), 1)
    assert examined(1000 * written, factor=1000.0).resolution == pytest.approx(100.0)
    assert examined(1000 * written, factor=1000.0, resolution=7.0).resolution == 7.0


def test_noise_is_that_of_the_samples_on_a_moving_signal() -> None:
    """White noise on a swinging, stepping signal: σ within 5 %."""
    t = np.arange(20000) * INTERVAL
    signal = 5 * np.sin(2 * np.pi * t) + np.floor(t)
    samples = signal + 0.02 * np.random.default_rng(25).standard_normal(20000)
    assert noise_sigma(samples) == pytest.approx(0.02, rel=0.05)


def test_looking_twice_changes_nothing() -> None:
    """Faults are not reported twice when an examined record is examined again."""
    samples = np.random.default_rng(26).standard_normal(3000)
    samples[100] = 30.0
    once = find_faults(Record((Channel("p", np.minimum(samples, 1.5)),), 0.0, INTERVAL))
    assert find_faults(once).channels[0].faults == once.channels[0].faults


def test_texts_are_in_the_unit_that_the_log_wrote() -> None:
    """A channel in °C is clipped at a temperature in °C, and its hum is in kelvins of the same size."""
    rng = np.random.default_rng(27)
    celsius = np.minimum(20 + rng.standard_normal(3000), 21.5)
    channel = examined(celsius + 273.15, written_unit="degC", offset=273.15)
    (fault,) = [fault for fault in channel.faults if fault.kind == "clipped"]
    assert "21.5 degC" in fault.text
    assert fault.size == pytest.approx(294.65)
    kilo = examined(np.minimum(1000 * rng.standard_normal(3000), 1500.0), written_unit="kPa", factor=1000.0)
    assert "1.5 kPa" in kilo.faults[0].text
