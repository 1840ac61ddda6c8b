"""Step features in the terms of IEEE Std 181 / IEC 60469, against closed forms and by Monte Carlo."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from rigtally.quantities.uncertain import Uncertain
from rigtally.records.levels import correlation_length, histogram_levels, level
from rigtally.records.onset import onset
from rigtally.records.step_features import step_features

START = Uncertain(0.0, 0.0, "s")


def first_order(t: np.ndarray, tau: float = 2e-3) -> np.ndarray:
    return np.where(t > 0, 1 - np.exp(-t.clip(0) / tau), 0.0)


def second_order(t: np.ndarray, zeta: float = 0.5, omega: float = 1000.0, zero: float = 0.0) -> np.ndarray:
    damped = omega * math.sqrt(1 - zeta * zeta)
    x = t.clip(0)
    sine = (zeta * omega - zero * omega**2) / damped
    return np.where(
        t > 0, 1 - np.exp(-zeta * omega * x) * (np.cos(damped * x) + sine * np.sin(damped * x)), 0.0
    )


def of(wave: np.ndarray, t: np.ndarray, low: float = 1.0, size: float = 5.0) -> dict[str, Uncertain]:
    return dict(
        step_features(
            t,
            low + size * wave,
            before=Uncertain(low, 0.0),
            after=Uncertain(low + size, 0.0),
            start=START,
        )
    )


T = np.arange(-0.02, 0.06, 1e-5)


def test_reference_levels_and_duration_of_a_first_order_step() -> None:
    """Levels 1.5, 3.5, 5.5 between states 1 and 6, and a 10-90 % duration of 4.3944492 ms at τ = 2 ms.

    Source: reference B01, definitions of IEC 60469:2013 from memory, value ln 9·τ; the same as A10.
    """
    features = of(first_order(T), T)
    for share in (10, 50, 90):
        at = features[f"reference_instant_{share}"].value
        assert 1 + 5 * float(first_order(np.array([at]))[0]) == pytest.approx(1 + 0.05 * share, rel=1e-5)
    assert features["transition_duration"].value == pytest.approx(4.3944492e-3, rel=1e-5)
    assert features["overshoot"].value == 0.0
    assert "peak_time" not in features


def test_first_order_settles_at_minus_ln_of_the_band() -> None:
    """2 % settle/τ = 3.912023 (A10, derived)."""
    assert of(first_order(T), T)["settling_2"].value == pytest.approx(2e-3 * 3.912023, rel=1e-5)


def test_features_of_a_second_order_step() -> None:
    """ζ = 0.5, ωn = 1000: overshoot 16.30335 %, duration 1.6375729 ms (B01), peak time 3.627599 ms (A01)."""
    features = of(second_order(T), T)
    assert features["overshoot"].value == pytest.approx(0.1630335, rel=1e-4)
    assert features["transition_duration"].value == pytest.approx(1.6375729e-3, rel=1e-5)
    assert features["peak_time"].value == pytest.approx(3.627599e-3, rel=1e-3)


@pytest.mark.parametrize(
    ("zeta", "rise"),
    [(0.1, 1.104), (0.2, 1.203), (0.3, 1.321), (0.4, 1.463), (0.5, 1.638), (0.6, 1.854), (0.7, 2.126),
     (0.8, 2.467), (0.9, 2.883)],
)  # fmt: skip
def test_rise_times_of_second_order_steps(zeta: float, rise: float) -> None:
    """10-90 % rise time · ωn within 0.0006 (A02, derived from the exact step response)."""
    assert of(second_order(T, zeta), T)["transition_duration"].value * 1000 == pytest.approx(rise, abs=6e-4)


@pytest.mark.parametrize(
    ("zeta", "band", "settling"),
    [(0.1, 2, 38.3833), (0.1, 5, 28.9678), (0.3, 2, 11.2301), (0.5, 2, 8.0763), (0.5, 5, 5.2891),
     (0.7, 2, 5.9788), (0.7, 5, 2.8998), (0.8, 2, 3.7558)],
)  # fmt: skip
def test_settling_of_second_order_steps(zeta: float, band: int, settling: float) -> None:
    """Last exit from the band · ωn within 0.002 (A03, computed from the exact step response)."""
    assert of(second_order(T, zeta), T)[f"settling_{band}"].value * 1000 == pytest.approx(settling, abs=2e-3)


def test_overshoot_with_a_zero() -> None:
    """(1 + Ts)/(s² + 2ζs + 1), ζ = 0.5, T = 1: overshoot 0.2984361 at 2.4183992 (A11, derived)."""
    t = np.arange(-10.0, 40.0, 5e-3)
    features = of(second_order(t, 0.5, 1.0, 1.0), t)
    assert features["overshoot"].value == pytest.approx(0.2984361, rel=2e-4)
    assert features["peak_time"].value == pytest.approx(2.4183992, rel=1e-3)


def test_a_falling_step_has_the_features_of_a_rising_one() -> None:
    """Overshoot is a share of the amplitude, whatever its sign."""
    up, down = of(second_order(T), T), of(second_order(T), T, 3.0, -2.0)
    for name in ("overshoot", "transition_duration", "settling_2"):
        assert down[name].value == pytest.approx(up[name].value, rel=1e-9)


def test_levels_are_found_by_the_histogram() -> None:
    """Without given levels: 1.0 and 6.0 within 0.1 % of the amplitude (B01)."""
    low, high = histogram_levels(1 + 5 * second_order(T), 0.0)
    assert low == pytest.approx(1.0, abs=5e-3)
    assert high == pytest.approx(6.0, abs=5e-3)


CASES: tuple[tuple[str, Callable[[np.ndarray], np.ndarray], float, float, int], ...] = (
    ("first-order", first_order, 4.3944492e-3, 0.0, 5),
    ("second-order", second_order, 1.6375729e-3, 0.1630335, 5),
    ("second-order, 8 samples in the transition", second_order, 1.6375729e-3, 0.1630335, 20),
)


@pytest.mark.parametrize(
    ("label", "wave", "duration", "overshoot", "stride"), CASES, ids=[c[0] for c in CASES]
)
@pytest.mark.parametrize("noise", [0.003, 0.02])
def test_intervals_of_features_cover(
    label: str,
    wave: Callable[[np.ndarray], np.ndarray],
    duration: float,
    overshoot: float,
    stride: int,
    noise: float,
) -> None:
    """The 95 % intervals of duration and overshoot hold the truth in at least 88 % of 150 noisy waves.

    The bound leaves room for the binomial scatter (3 σ: 5 %) and for intervals at coarse sampling, which are
    stated as approximate; they may cover too much.
    """
    rng = np.random.default_rng(30)
    t = T[::stride]
    inside = Covered()
    for _ in range(150):
        features = of(wave(t) + noise * rng.standard_normal(t.size), t)
        inside.add("duration", features["transition_duration"], duration)
        inside.add("overshoot", features["overshoot"], overshoot)
    assert min(inside.counts.values()) >= 0.88 * 150, (label, inside.counts)


class Covered:
    """How often an interval held the truth."""

    def __init__(self) -> None:
        self.counts: dict[str, int] = {}

    def add(self, name: str, found: Uncertain, truth: float) -> None:
        low, high = found.interval()
        self.counts[name] = self.counts.get(name, 0) + (low <= truth <= high)


def test_a_feature_hidden_by_noise_is_unknown() -> None:
    """Settling to 2 % is not claimed under 10 % noise on few samples: NaN, not a number."""
    t = T[::20]
    rng = np.random.default_rng(31)
    features = of(second_order(t) + 0.1 * rng.standard_normal(t.size), t)
    assert math.isnan(features["settling_2"].value)


@pytest.mark.parametrize("colour", [0.0, 0.8])
def test_levels_cover(colour: float) -> None:
    """The 95 % interval of a level holds it in 92–98 % (white) or 88–98 % (autoregressive, 0.8) of 600."""
    rng = np.random.default_rng(32)
    inside = Covered()
    for _ in range(600):
        noise = rng.standard_normal(400)
        for k in range(1, 400):
            noise[k] += colour * noise[k - 1]
        inside.add("level", level(7.0 + noise), 7.0)
    assert (0.92 if colour == 0.0 else 0.88) * 600 <= inside.counts["level"] <= 0.98 * 600


def test_a_drifting_level_is_taken_at_its_end() -> None:
    """A drift of 50 u over the stretch: the level is that of the line at the asked end."""
    rng = np.random.default_rng(33)
    inside = Covered()
    for _ in range(200):
        inside.add("last", level(np.linspace(0, 1, 400) + 0.1 * rng.standard_normal(400), side="last"), 1.0)
    assert 0.9 * 200 <= inside.counts["last"] <= 0.99 * 200


def test_a_level_below_the_resolution_is_no_better_than_it() -> None:
    """All samples equal: u is q/√12, not 0."""
    assert level(np.full(1000, 3.0), resolution=0.1).u == pytest.approx(0.1 / math.sqrt(12))
    dithered = level(
        np.round(3.03 + 0.2 * np.random.default_rng(34).standard_normal(10000), 1), resolution=0.1
    )
    assert dithered.u < 0.004


def test_correlation_length_of_an_autoregressive_series() -> None:
    """(1 + a)/(1 − a) = 9 for a = 0.8 (closed form), within 15 % on 20 000 samples."""
    rng = np.random.default_rng(35)
    noise = rng.standard_normal(20000)
    for k in range(1, noise.size):
        noise[k] += 0.8 * noise[k - 1]
    assert correlation_length(noise) == pytest.approx(9.0, rel=0.15)


RISES: dict[str, Callable[[np.ndarray], np.ndarray]] = {
    "jump": lambda t: (t > 0).astype(float),
    "ramp": lambda t: np.clip(t / 2, 0, 1),
    "first order": lambda t: first_order(t, 1.0),
    "second order": lambda t: second_order(t, 0.5, 5.0),
}


@pytest.mark.parametrize("shape", list(RISES))
@pytest.mark.parametrize("noise", [0.001, 0.01, 0.1])
def test_the_start_of_an_event_covers(shape: str, noise: float) -> None:
    """The 95 % interval of the start holds the true instant, between samples, in at least 90 % of 100."""
    rng = np.random.default_rng(36)
    t = np.arange(600) * 0.01
    inside = Covered()
    for _ in range(100):
        truth = 2.0 + 0.01 * rng.random()
        samples = RISES[shape](t - truth) + noise * rng.standard_normal(600)
        inside.add("start", onset(t, samples, Uncertain(0.0, noise / 14), 1.0, noise), truth)
    assert inside.counts["start"] >= 90


def test_a_jump_starts_between_two_samples() -> None:
    """Rectangular between the last sample before and the first after: u = interval/√12."""
    t = np.arange(100) * 0.1
    start = onset(t, (t > 5.01).astype(float), Uncertain(0.0, 0.0), 1.0, 0.0)
    assert start.value == pytest.approx(5.05)
    assert start.u == pytest.approx(0.1 / math.sqrt(12))
    assert start.distribution == "rectangular"
