"""The corrected signal: truth inside its band, dead time and right-half-plane zeros, blocks."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rigtally.errors import LogError, UsageError
from rigtally.forms.named import form
from rigtally.rating.correction import Corrector, correct
from tally_cases import fit_of, noise_of

INTERVAL = 1e-3
THETA = np.array([2.0, 60.0, 0.3])


def truth(omega_top: float, n: int, rng: np.random.Generator, lines: int = 40):
    """Sum of sines below omega_top: samples of the input, and of the output of a transfer function, exact."""
    w = rng.uniform(0.05, 1.0, lines) * omega_top
    a = rng.standard_normal(lines) / math.sqrt(lines / 2)
    phase = rng.uniform(0, 2 * math.pi, lines)
    t = INTERVAL * np.arange(n)

    def through(gain) -> np.ndarray:
        return np.sum(a[:, None] * (gain(w)[:, None] * np.exp(1j * (w[:, None] * t + phase[:, None]))).real, axis=0)

    return through(lambda x: np.ones_like(x, dtype=complex)), through


@pytest.mark.parametrize("name, theta", [
    ("second-order", THETA),
    ("first-order", np.array([2.0, 0.02])),
    ("second-order-zero", np.array([2.0, -0.01, 60.0, 0.7])),
])  # fmt: skip
def test_truth_is_recovered(name: str, theta: np.ndarray) -> None:
    """A band-limited truth without noise comes back to 0.2 % of its size, a right-half-plane zero included."""
    f = form(name)
    fit = fit_of(f, theta, 0.0 * np.eye(theta.size), ("",) * theta.size)
    top = Corrector(fit, INTERVAL, noise=1e-6).cutoff
    x, through = truth(0.8 * top, 12_000, np.random.default_rng(1))
    found = correct(through(fit.transfer_function), INTERVAL, fit, noise=1e-6)
    inside = np.isfinite(found.u)
    assert inside.sum() > 4000
    assert np.max(np.abs(found.value - x)[inside]) < 2e-3 * np.std(x)
    assert np.std((found.uncorrected - x)[inside]) > 0.05 * np.std(x)


def test_dead_time_is_taken_out() -> None:
    """A dead time of a fraction of an interval and more comes out as a shift."""
    f = form("first-order", dead_time=True)
    theta = np.array([1.0, 0.02, 0.0137])
    fit = fit_of(f, theta, 0.0 * np.eye(3), ("", "s", "s"))
    top = Corrector(fit, INTERVAL, noise=1e-6).cutoff
    x, through = truth(0.5 * top, 8000, np.random.default_rng(2))
    found = correct(through(fit.transfer_function), INTERVAL, fit, noise=1e-6)
    inside = np.isfinite(found.u)
    assert np.max(np.abs(found.value - x)[inside]) < 2e-3 * np.std(x)


def test_pointwise_bands_hold_the_truth() -> None:
    """Noise and a wrong fit, drawn as stated: the 95 % bands hold 93 to 97 % of the samples over 60 records."""
    f = form("second-order")
    covariance = noise_of(THETA, 0.01)
    root = np.linalg.cholesky(covariance)
    rng = np.random.default_rng(3)
    shares = []
    for _ in range(60):
        true = f.transfer_matrix(THETA)
        fit = fit_of(f, THETA + root @ rng.standard_normal(3), covariance, ("",) * 3)
        top = Corrector(fit, INTERVAL, noise=0.02).cutoff
        x, through = truth(0.5 * top, 9000, rng)
        y = through(true) + 0.02 * rng.standard_normal(9000)
        found = correct(y, INTERVAL, fit, noise=0.02)
        low, high = found.band()
        good = found.determined
        shares.append(np.mean(((low <= x) & (x <= high))[good]))
    assert 0.93 <= np.mean(shares) <= 0.97


def test_blocks_give_the_same_numbers() -> None:
    """A log corrected block by block equals the one corrected whole."""
    fit = fit_of(form("second-order"), THETA, noise_of(THETA, 0.01), ("",) * 3)
    rng = np.random.default_rng(4)
    y = np.cumsum(rng.standard_normal(20_000)) * 0.02
    whole = correct(y, INTERVAL, fit, noise=0.02)
    parts = list(Corrector(fit, INTERVAL, noise=0.02).stream(np.array_split(y, 17)))
    value = np.concatenate([a for a, _ in parts])
    assert value.size == y.size
    inside = np.isfinite(whole.u)
    assert np.allclose(value[inside], whole.value[inside], atol=1e-6 * np.ptp(y))
    assert np.array_equal(np.isfinite(np.concatenate([u for _, u in parts])), inside)


def test_what_lies_beyond_is_not_claimed() -> None:
    """A truth with lines beyond the cut-off: those samples are not called determined."""
    fit = fit_of(form("second-order"), THETA, noise_of(THETA, 0.001), ("",) * 3)
    top = Corrector(fit, INTERVAL, noise=0.001).cutoff
    _, through = truth(1.4 * top, 12_000, np.random.default_rng(5))
    y = through(fit.transfer_function) + 0.001 * np.random.default_rng(6).standard_normal(12_000)
    assert np.mean(correct(y, INTERVAL, fit, noise=0.001).determined) < 0.05


def test_refusals() -> None:
    """A highpass, a gap, a record shorter than the filter: refused by name."""
    high = fit_of(form("second-order-highpass"), THETA, noise_of(THETA), ("",) * 3)
    low = fit_of(form("second-order"), THETA, noise_of(THETA), ("",) * 3)
    with pytest.raises(UsageError):
        correct(np.zeros(1000), INTERVAL, high, noise=0.1)
    with pytest.raises(LogError) as gap:
        correct(np.array([0.0, np.nan]), INTERVAL, low, noise=0.1)
    assert gap.value.code == "not-finite"
    with pytest.raises(LogError) as short:
        correct(np.zeros(50), INTERVAL, low, noise=0.1)
    assert short.value.code == "too-short"
