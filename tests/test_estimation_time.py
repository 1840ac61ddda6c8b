"""The time road: efficient, honest, convergent without a start; exact derivatives; gaps, stamps, ties, segments."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from bound import bound, second_order, second_order_bound
from scipy import signal, stats

from rigtally.errors import FitError
from rigtally.estimation.time_domain import fit_time, profile
from rigtally.estimation.time_problem import Problem
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import Form, form, matrix_form
from rigtally.forms.simulate import respond_at, simulate

SECOND = form("second-order")
W, INTERVAL, COUNT = 30.0, 2e-3, 600


def excitation(kind: str, count: int, rng: np.random.Generator) -> np.ndarray:
    """A step after a fifth of the record, or noise held for four samples."""
    if kind == "step":
        return (np.arange(count) >= count // 5).astype(float)
    return np.repeat(rng.normal(size=-(-count // 4)), 4)[:count]


def noise(sigma: float, count: int, rng: np.random.Generator, rho: float = 0.0) -> np.ndarray:
    """Stationary noise of that standard deviation, white or a first-order autoregression."""
    e = rng.normal(size=count)
    if rho:
        e[1:] *= np.sqrt(1 - rho**2)
        e = signal.lfilter([1.0], [1.0, -rho], e)
    return sigma * e


def trial(u: np.ndarray, y: np.ndarray, shape: Form = SECOND, interval: float = INTERVAL, **options: object) -> Trial:
    """One segment, one trial."""
    return Trial(shape, (Segment("made", np.atleast_2d(u), np.atleast_2d(y), interval),), **options)


def test_bound_meets_the_closed_forms() -> None:
    """The brute-force bound itself: L01 (damped sinusoid) and L02 (first-order step), derived closed forms."""
    damping, w, interval = 0.02, 2 * np.pi * 10, 1e-3
    t = interval * np.arange(12_000)

    def ring(v: np.ndarray) -> np.ndarray:
        return v[2] * np.exp(-v[1] * t) * np.sin(v[0] * t + v[3])

    found = bound(ring, np.array([w, damping * w, 1.0, 0.4]), 0.01, 2)
    np.testing.assert_allclose(found, 4 * (damping * w) ** 1.5 * 0.01 * np.sqrt(interval), rtol=0.02)
    steps = interval * np.arange(10_000)
    found = bound(lambda v: v[0] * -np.expm1(-steps / v[1]), np.array([1.0, 1.0]), 0.01, 2)
    np.testing.assert_allclose(found, [0.00012646, 0.00073739], rtol=1e-3)


CELLS = [(z, snr, kind) for z in (0.05, 0.3, 0.7, 1.2) for snr in (20, 40) for kind in ("step", "noise")]


def monte_carlo(
    records: int, rho: float, seed: int, cells: list[tuple[float, int, str]], **options: object
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Errors over the bound, over u, and t-quantiles (cells, records, 3)."""
    errors, pulls, factors = [], [], []
    for cell, (damping, snr, kind) in enumerate(cells):
        rng = np.random.default_rng([seed, cell])
        theta = np.array([2.0, W, damping])
        u = excitation(kind, COUNT, rng)
        clean = second_order(theta, u, INTERVAL, np.zeros(2))
        sigma = float(np.std(clean)) * 10 ** (-snr / 20)
        limit = second_order_bound(theta, u, INTERVAL, sigma, rho=rho)
        for _ in range(records):
            y = clean + 0.4 + noise(sigma, COUNT, rng, rho)
            found = fit_time(trial(u, y, **options))
            off = found.theta - theta
            errors.append(off / limit)
            pulls.append(off / np.sqrt(np.diag(found.covariance)))
            factors.append(stats.t.ppf(0.975, found.dof))
    shape = (len(cells), records, 3)
    return np.reshape(errors, shape), np.reshape(pulls, shape), np.reshape(factors, shape[:2])


def test_white_noise_is_met_at_the_bound() -> None:
    """Pooled RMSE over the bound within Monte Carlo scatter of one; the 95 % interval covers as often as it says."""
    errors, pulls, factors = monte_carlo(12, 0.0, 20, [c for c in CELLS if c[0] < 1])
    count = errors.size / 3
    ratio = np.sqrt(np.mean(errors**2, axis=(0, 1)))
    np.testing.assert_allclose(ratio, 1.0, atol=3.5 / np.sqrt(2 * count))
    missed = np.sum(np.abs(pulls) > factors[:, :, None], axis=(0, 1))
    low, high = stats.binom.ppf([1e-3, 1 - 1e-3], int(count), 0.05)
    assert np.all((missed >= low) & (missed <= high))
