"""Closed forms of a sensor's rating against published and independently computed figures."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import integrate, optimize, signal

from rigtally.errors import FitError, UsageError
from rigtally.forms.named import form
from rigtally.rating import features
from rigtally.rating.rating import rate
from tally_cases import fit_of

ONE = np.ones(1)


def test_overshoot_and_peak_time() -> None:
    """ζ 0.5, ωn 10: overshoot 0.1630335, peak at 0.3627599 s, 2 % settling 0.807634 s (closed form)."""
    assert features.overshoot(np.array(0.5)) == pytest.approx(0.1630335, rel=2e-5)
    assert features.peak_time(10.0, 0.5) == pytest.approx(0.3627599, rel=2e-5)
    assert features.settling(10.0 * ONE, 0.5 * ONE, 0.02)[0] == pytest.approx(0.807634, rel=2e-5)


def test_rise_time() -> None:
    """10–90 % rise time·ωn for ζ 0.1 to 0.9 (exact step response); 3.357909 at ζ = 1."""
    table = [1.104, 1.203, 1.321, 1.463, 1.638, 1.854, 2.126, 2.467, 2.883]
    found = features.rise_time(np.ones(9), np.arange(1, 10) / 10)
    assert found == pytest.approx(table, abs=6e-4)
    assert features.rise_time(ONE, ONE)[0] == pytest.approx(3.357909, rel=1e-5)


@pytest.mark.parametrize("zeta, band, expected", [
    (0.1, 0.02, 38.3833), (0.1, 0.05, 28.9678), (0.3, 0.02, 11.2301), (0.5, 0.05, 5.2891),
    (0.7, 0.02, 5.9788), (0.7, 0.05, 2.8998), (0.8, 0.02, 3.7558),
])  # fmt: skip
def test_settling(zeta: float, band: float, expected: float) -> None:
    """Settling time·ωn, last exit from the band (computed from the exact step response)."""
    assert features.settling(ONE, zeta * ONE, band)[0] == pytest.approx(expected, abs=0.002)


@pytest.mark.parametrize("zeta", [0.02, 0.3, 0.6, 0.707, 1.0, 1.5])
def test_settling_against_a_simulation(zeta: float) -> None:
    """The last exit from ±5 % agrees with a step simulated by state space on a dense grid."""
    time = np.linspace(0.0, 250.0 if zeta < 0.1 else 40.0, 400_001)
    _, y = signal.step((np.array([1.0]), np.array([1.0, 2 * zeta, 1.0])), T=time)
    last = time[np.flatnonzero(np.abs(y - 1.0) > 0.05)[-1]]
    assert features.settling(ONE, zeta * ONE, 0.05)[0] == pytest.approx(last, abs=2e-3)


def test_bandwidth_and_resonance() -> None:
    """−3 dB at 1.5427712, 1.2720196, 1, 0.7460598 ωn; resonance 2.5515518 at 0.9591663 ωn (textbooks)."""
    found = features.bandwidth_3db(np.ones(4), np.array([0.1, 0.5, math.sqrt(0.5), 0.9]))
    assert found == pytest.approx([1.5427712, 1.2720196, 1.0, 0.7460598], rel=1e-6)
    peak, where = features.resonance(np.array(1.0), np.array(0.2))
    assert (float(peak), float(where)) == pytest.approx((2.5515518, 0.9591663), rel=1e-6)
    assert np.isnan(features.resonance(np.array(1.0), np.array(0.8))[0])


@pytest.mark.parametrize("zeta", [0.02, 0.3, 0.55, 0.6, 0.66, 0.707, 1.0, 1.5])
@pytest.mark.parametrize("limit", [0.01, 0.05])
def test_band_edge_by_root_finding(zeta: float, limit: float) -> None:
    """The first ω at which |G| leaves 1 ± limit, found on a grid and refined, is the closed form."""

    def out(w: float) -> float:
        return abs(abs(1.0 / (1.0 - w * w + 2j * zeta * w)) - 1.0) - limit

    grid = np.linspace(1e-4, 3.0, 60_000)
    first = int(np.argmax(np.array([out(w) for w in grid]) > 0))
    exact = optimize.brentq(out, grid[first - 1], grid[first])
    assert float(features.band_edge(ONE, zeta * ONE, limit)[0][0]) == pytest.approx(exact, rel=1e-6)


def test_accelerometer_usable_band() -> None:
    """f0 30 kHz, δ 0.02: |H(10 kHz)|/S0 = 1.1248734, 5 % up to 0.218 f0 (ISO 16063-43 model; derived)."""
    gain = form("second-order").transfer_matrix(np.array([1.0, 2 * math.pi * 30e3, 0.02]))
    assert abs(complex(gain(2 * math.pi * 10e3))) == pytest.approx(1.1248734, rel=1e-6)
    edge, up = features.band_edge(30e3 * ONE, 0.02 * ONE, 0.05)
    assert up[0] and edge[0] / 30e3 == pytest.approx(math.sqrt(1 - 1 / 1.05), abs=1e-3)


def test_noise_bandwidth() -> None:
    """∫|H|²dω = π/(4ζ) = 7.8539816 at ζ 0.1, by quadrature too; 200 Hz with Q 20: 6283.1853 Hz."""
    found = integrate.quad(lambda w: 1 / ((1 - w * w) ** 2 + 0.04 * w * w), 0, np.inf, limit=500)[0]
    assert found == pytest.approx(7.8539816, rel=1e-6)
    assert float(features.noise_bandwidth(ONE, 0.1 * ONE)[0]) * 2 * math.pi == pytest.approx(found, rel=1e-6)
    assert float(features.noise_bandwidth(2 * math.pi * 200 * ONE, ONE / 40)[0]) == pytest.approx(6283.1853, rel=1e-7)


def test_derivative_numerator() -> None:
    """ωn 1, ζ 0.5, T 1: overshoot 0.2984361, peak at 2.4183992 (derived, verified by simulation)."""
    assert features.overshoot_with_zero(1.0, 0.5, 1.0) == pytest.approx(0.2984361, abs=2e-7)
    assert features.peak_time(1.0, 0.5, 1.0) == pytest.approx(2.4183992, abs=2e-7)


def test_first_order() -> None:
    """10–90 % 2.1972246 τ, 2 % settling 3.912023 τ, −3 dB·t_r 0.34969915 (closed forms)."""
    found = rate(fit_of(form("first-order"), np.array([1.0, 0.5]), np.diag([1e-6, 1e-6]), ("", "s")))
    assert found.rise_time.value / 0.5 == pytest.approx(2.1972246, rel=1e-7)
    assert found.settling.value / 0.5 == pytest.approx(3.912023, rel=1e-6)
    assert found.bandwidth_3db.value / (2 * math.pi) * found.rise_time.value == pytest.approx(0.34969915, rel=1e-7)


@pytest.mark.parametrize("zeta", [0.02, 0.6, 0.707, 1.5])
@pytest.mark.parametrize("limit", [0.01, 0.05])
def test_band_interval_covers(zeta: float, limit: float) -> None:
    """The flat band's interval (of the one or the two bands given) covers the true edge in 93–97 % of 1000 fits."""
    theta = np.array([1.0, 100.0, zeta])
    covariance = np.diag([1e-3, 0.3, 0.01 * zeta]) ** 2
    true = float(features.band_edge(100.0 * ONE, zeta * ONE, limit)[0][0])
    rng = np.random.default_rng(8)
    hits = 0
    for k in range(1000):
        found = theta + np.sqrt(np.diag(covariance)) * rng.standard_normal(3)
        bands = _bands(found, covariance, limit, k)
        hits += any(low <= true <= high for low, high in bands)
    assert 0.93 <= hits / 1000 <= 0.97


def _bands(theta: np.ndarray, covariance: np.ndarray, limit: float, seed: int) -> list[tuple[float, float]]:
    from rigtally.rating.rating import _bands as bands_of
    from rigtally.rating.rating import _draws

    fit = fit_of(form("second-order"), theta, covariance, ("", "rad/s", ""))
    drawn = _draws(fit, np.random.default_rng(seed))
    found = bands_of(limit, float(theta[1]), float(theta[2]), drawn[:, 1], drawn[:, 2], False)
    return [band.end.interval() for band in found]


def test_two_bands_where_the_band_jumps() -> None:
    """Near ζ 0.59 the ±5 % band may end at the resonance or beyond it: both are given, with their chances."""
    edge = 0.5900  # 1/(2ζ√(1 − ζ²)) = 1.05 at ζ = 0.5899
    fit = fit_of(form("second-order"), np.array([1.0, 100.0, edge]), np.diag([1e-3, 0.3, 0.01]) ** 2, ("", "rad/s", ""))
    bands = [b for b in rate(fit).flat_bands if b.limit == 0.05]
    assert len(bands) == 2 and sum(b.probability for b in bands) == pytest.approx(1.0)
    assert {b.leaves for b in bands} == {"upwards", "downwards"}


def test_rate_sensor_and_highpass() -> None:
    """A rate sensor says so and has a lowest rate; a highpass is rated upwards from its edge."""
    theta, c = np.array([2.0, 100.0, 0.7]), np.diag([2e-3, 0.3, 0.01]) ** 2
    found = rate(fit_of(form("second-order-rate"), theta, c, ("", "rad/s", "")), noise=0.1)
    assert "rate of the input" in found.statement
    assert found.lowest.value == pytest.approx(1.959964 * 0.1 / 2.0, rel=1e-6)
    high = rate(fit_of(form("second-order-highpass"), theta, c, ("", "rad/s", "")))
    assert high.flat_bands[0].to_dict()["to"] is None and "upwards" in high.statement
    start = high.flat_bands[-1].start.value
    gain = abs(complex(form("second-order-highpass").transfer_matrix(theta)(start))) / 2.0
    assert abs(gain - 1.0) == pytest.approx(high.flat_bands[-1].limit, rel=1e-6)


def test_refusals() -> None:
    """A form without a rating, a parameter that is not determined, an unstable sensor."""
    c = np.diag([1e-3, 0.3, 0.01]) ** 2
    with pytest.raises(UsageError):
        rate(fit_of(form("second-order-zero"), np.array([1.0, 0.1, 100.0, 0.7]), np.eye(4) * 1e-6, ("",) * 4))
    lost = c.copy()
    lost[2] = lost[:, 2] = np.nan
    with pytest.raises(FitError):
        rate(fit_of(form("second-order"), np.array([1.0, 100.0, 0.7]), lost, ("",) * 3))
    with pytest.raises(FitError):
        rate(fit_of(form("second-order"), np.array([1.0, 100.0, -0.1]), c, ("",) * 3))
