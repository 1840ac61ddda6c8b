"""Two loggers joined by a shared channel."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from rigtally.errors import LogError
from rigtally.records.join import fit_clocks, join_records
from rigtally.records.join_events import fit_clocks_by_events, join_by_events
from rigtally.records.record import Channel, Provenance, Record


def shared_signal(kind: str, rng: np.random.Generator) -> CubicSpline:
    t = np.arange(30000) * 1e-3 - 5
    if kind == "step":
        return CubicSpline(t, 1 / (1 + np.exp(-(t - 8) / 0.02)))
    return CubicSpline(t, np.convolve(rng.standard_normal(t.size), np.hanning(41) / 5, "same"))


def pair(
    kind: str, noise: float, rng: np.random.Generator, offset: float, rate: float
) -> tuple[Record, Record, CubicSpline]:
    """t₁ = offset + (1 + rate)·t₂; the second logger has another interval, gain and constant."""
    signal = shared_signal(kind, rng)
    t1, t2 = np.arange(15000) * 1e-3, np.arange(9000) * 1.7e-3
    one = signal(t1) + noise * rng.standard_normal(t1.size)
    there = offset + (1 + rate) * t2
    two = 3 * signal(there) + 1 + 3 * noise * rng.standard_normal(t2.size)
    first = Record((Channel("p", one, "Pa"),), 0.0, 1e-3, provenance=Provenance(file="a.csv"))
    second = Record(
        (Channel("p", two, "V"), Channel("q", np.sin(there), "m")),
        0.0,
        1.7e-3,
        provenance=Provenance(file="b.csv"),
    )
    return first, second, signal


@pytest.mark.parametrize("kind", ["step", "noise"])
@pytest.mark.parametrize("noise", [0.01, 0.1])
def test_offset_and_rate_lie_within_their_u(kind: str, noise: float) -> None:
    """The alignment in the middle of the record and the rate lie within 1.96 u in at least 88 % of 40
    pairs."""
    rng = np.random.default_rng(50)
    aligned = rated = 0
    for _ in range(25):
        offset, rate = rng.uniform(-2, 2), 1e-4 * rng.standard_normal()
        first, second, _ = pair(kind, noise, rng, offset, rate)
        fit = fit_clocks(first, second, "p", "p")
        middle = 7.5
        off = fit.offset.value + (1 + fit.rate.value) * middle - offset - (1 + rate) * middle
        aligned += abs(off) < 1.96 * fit.alignment.u
        rated += abs(fit.rate.value - rate) < 1.96 * fit.rate.u
    assert min(aligned, rated) >= 22
    assert fit.alignment.u < (0.004 if noise == 0.1 else 5e-4)


def test_channels_are_read_on_the_first_clock() -> None:
    """The other logger's channel stands at the right instants, NaN outside its time, and says what was
    done."""
    first, second, _ = pair("noise", 0.01, np.random.default_rng(51), 1.3, 5e-5)
    joined = join_records(first, second, "p")
    assert joined.names == ("p", "p_2", "q")
    channel = joined.channel("q")
    outside = joined.time < 1.3
    assert np.isnan(channel.samples[outside]).all()
    known = np.isfinite(channel.samples)
    assert known.sum() > 13000
    assert channel.samples[known] == pytest.approx(np.sin(joined.time[known]), abs=2e-4)
    (fault,) = channel.faults
    assert fault.kind == "joined" and "interpolated" in fault.text
    assert 0 < channel.u_skew < 1e-4
    assert channel.skew == 0.0
    assert "b.csv" in joined.provenance.how_read[-1]


def test_missing_samples_are_not_bridged() -> None:
    """Where the other logger lost samples, the joined channel has none."""
    first, second, _ = pair("noise", 0.01, np.random.default_rng(52), 0.0, 0.0)
    samples = second.channels[1].samples.copy()
    samples[3000:3100] = np.nan
    holed = Record((second.channels[0], Channel("q", samples)), 0.0, 1.7e-3)
    joined = join_records(first, holed, "p")
    inside = (joined.time > 3000 * 1.7e-3 + 0.01) & (joined.time < 3099 * 1.7e-3 - 0.01)
    assert np.isnan(joined.channel("q").samples[inside]).all()


def switched(t: np.ndarray, scale: float, rng: np.random.Generator) -> np.ndarray:
    on = ((t > 3.0) & (t < 6.5)) | ((t > 8.0) & (t < 13.0))
    return scale * (on + 0.01 * rng.standard_normal(t.size))


def test_loggers_without_a_shared_channel_are_joined_by_events() -> None:
    """Four switchings that both saw: offset and rate within 1.96 u in at least 88 % of 25 pairs."""
    rng = np.random.default_rng(54)
    inside = 0
    for _ in range(25):
        offset, rate = rng.uniform(-1, 1), 1e-4 * rng.standard_normal()
        t1, t2 = np.arange(15000) * 1e-3, np.arange(9000) * 1.7e-3
        first = Record((Channel("valve", switched(t1, 24.0, rng)),), 0.0, 1e-3)
        second = Record((Channel("p", switched(offset + (1 + rate) * t2, 5.0, rng)),), 0.0, 1.7e-3)
        fit = fit_clocks_by_events(first, second, "valve", "p")
        off = fit.offset.value + fit.rate.value * 7.5 - offset - rate * 7.5
        inside += abs(off) < 1.96 * fit.alignment.u and abs(fit.rate.value - rate) < 1.96 * fit.rate.u
        assert fit.alignment.u < 1e-3
    assert inside >= 22
    assert join_by_events(first, second, "valve", "p").names == ("valve", "p")


def test_other_events_are_refused() -> None:
    """One switching more in one of the logs: which is which is not guessed."""
    rng = np.random.default_rng(55)
    t = np.arange(15000) * 1e-3
    first = Record((Channel("u", switched(t, 1.0, rng)),), 0.0, 1e-3)
    second = Record((Channel("u", (t > 4) + 0.01 * rng.standard_normal(t.size)),), 0.0, 1e-3)
    with pytest.raises(LogError) as caught:
        join_by_events(first, second, "u", "u")
    assert caught.value.code == "not-shared"


def test_a_joined_step_gets_no_overshoot() -> None:
    """Interpolation between the other logger's samples stays between them."""
    first, second, _ = pair("noise", 0.01, np.random.default_rng(56), 0.0, 0.0)
    step = Channel("q", (second.time > 7.0) * 1.0)
    joined = join_records(first, Record((second.channels[0], step), 0.0, 1.7e-3), "p").channel("q").samples
    assert np.nanmin(joined) == 0.0 and np.nanmax(joined) == 1.0


def test_readings_that_do_not_agree_are_refused() -> None:
    """Two unrelated noises are no shared channel."""
    rng = np.random.default_rng(53)
    first = Record((Channel("p", rng.standard_normal(5000)),), 0.0, 1e-3)
    second = Record((Channel("p", rng.standard_normal(5000)),), 0.0, 1e-3)
    with pytest.raises(LogError) as caught:
        join_records(first, second, "p")
    assert caught.value.code == "not-shared"
