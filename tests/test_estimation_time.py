"""The time road: efficient, honest, convergent without a start; exact derivatives; gaps, stamps, ties, segments."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import signal, stats

from bound import bound, second_order, second_order_bound
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


def trial(
    u: np.ndarray, y: np.ndarray, shape: Form = SECOND, interval: float = INTERVAL, **options: object
) -> Trial:
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
    errors, pulls, factors = monte_carlo(6, 0.0, 20, [c for c in CELLS if c[0] < 1])
    count = errors.size / 3
    ratio = np.sqrt(np.mean(errors**2, axis=(0, 1)))
    np.testing.assert_allclose(ratio, 1.0, atol=3.5 / np.sqrt(2 * count))
    missed = np.sum(np.abs(pulls) > factors[:, :, None], axis=(0, 1))
    low, high = stats.binom.ppf([1e-3, 1 - 1e-3], int(count), 0.05)
    assert np.all((missed >= low) & (missed <= high))


def test_coloured_noise_is_found_and_paid_for() -> None:
    """Autoregressive noise (ρ = 0.9), nobody told: intervals cover, and the estimate stays near that noise's bound."""
    errors, pulls, factors = monte_carlo(10, 0.9, 21, [(0.3, 40, "step"), (0.7, 40, "noise")])
    assert np.sqrt(np.mean(errors**2)) < 1.15 * (1 + 2.5 / np.sqrt(2 * 20))
    missed = int(np.sum(np.any(np.abs(pulls) > factors[:, :, None] * 1.4, axis=2)))
    assert missed <= stats.binom.ppf(0.999, 20, 3 * 0.006)


def made(seed: int = 3, count: int = 1500, sigma: float = 0.02) -> tuple[np.ndarray, np.ndarray]:
    """A record with K = 2, ωn = 30 rad/s, ζ = 0.35, offset 0.7 (invented)."""
    rng = np.random.default_rng(seed)
    u = np.repeat(rng.choice([-1.0, 1.0], count // 50), 50)
    y = simulate(SECOND.transfer_matrix(np.array([2.0, W, 0.35])), u, INTERVAL)
    return u, y + 0.7 + sigma * rng.normal(size=u.size)


JACOBIANS: list[tuple[Form, str, bool]] = [
    (form("second-order", dead_time=True), "held", False),
    (form("second-order-zero", dead_time=True), "ramped", False),
    (form("second-order-highpass"), "held", False),
    (form("third-order-rate"), "ramped", False),
    (form("rational-1/3"), "held", True),
]


@pytest.mark.parametrize(("shape", "between", "irregular"), JACOBIANS)
def test_derivatives_are_exact(shape: Form, between: str, irregular: bool) -> None:
    """The model's own derivative by every parameter against central differences of its output."""
    from rigtally.estimation.time_model import outputs_and_derivatives, responses

    values = {"gain": 2.0, "natural_frequency": 9.0, "damping_ratio": 0.4, "time_constant": 0.2, "zero_time": 0.1,
              "dead_time": 0.0337, "b0": 5.0, "b1": 2.0, "a0": 40.0, "a1": 30.0, "a2": 6.0}  # fmt: skip
    theta = np.array([values[n] for n in shape.names])
    rng = np.random.default_rng(4)
    u = rng.normal(size=120)
    stamps = np.cumsum(rng.uniform(0.005, 0.02, 120)) if irregular else None
    segment = Segment("d", u[None], np.zeros((1, 120)), 0.01, 0.0, stamps)
    task = Trial(shape, (segment,), between=between)

    def output(at: np.ndarray) -> np.ndarray:
        return outputs_and_derivatives(shape, at, responses(shape, at, segment, task), 120)[0][0]

    exact = outputs_and_derivatives(shape, theta, responses(shape, theta, segment, task), 120)[1][:, 0]
    for k in range(theta.size):
        size = 1e-5 * abs(theta[k])
        up, down = theta.copy(), theta.copy()
        up[k] += size
        down[k] -= size
        slope = (output(up) - output(down)) / (2 * size)
        np.testing.assert_allclose(exact[k], slope, atol=2e-6 * np.abs(slope).max(), err_msg=shape.names[k])


def test_the_projected_gradient_is_exact() -> None:
    """Half the slope of the reduced cost by every parameter is rᵀJ, nuisance and free response included."""
    u, y = made(count=400)
    problem = Problem(trial(u, y, drift=True), trial(u, y).segments)
    theta = np.array([1.8, 28.0, 0.4])
    r, jacobian, _ = problem.reduced(theta)
    for k in range(3):
        size = 1e-6 * theta[k]
        up, down = theta.copy(), theta.copy()
        up[k] += size
        down[k] -= size
        costs = [float(np.sum(problem.reduced(at)[0] ** 2)) for at in (up, down)]
        assert float(r @ jacobian[:, k]) == pytest.approx(
            0.5 * (costs[0] - costs[1]) / (2 * size), rel=1e-5, abs=1e-3
        )


def test_gaps_in_the_output_are_left_out() -> None:
    """NaN samples count for nothing: the same numbers as wild samples would not give, and fewer degrees of freedom."""
    u, y = made()
    whole = fit_time(trial(u, y, noise="white"))
    holes = y.copy()
    holes[100:140] = np.nan
    holes[700] = np.nan
    found = fit_time(trial(u, holes, noise="white"))
    assert whole.dof - found.dof == 41
    u_whole = np.sqrt(np.diag(whole.covariance))
    assert np.all(np.abs(found.theta - whole.theta) < 1.0 * u_whole)
    assert np.all(np.sqrt(np.diag(found.covariance)) > 0.999 * u_whole * np.sqrt(0.97))


@pytest.mark.parametrize("between", ["held", "ramped"])
def test_true_stamps_on_a_grid_change_nothing(between: str) -> None:
    """The same record by stamps and by interval: the same answer to 1e-6."""
    u, y = made(count=600)
    task = trial(u, y, between=between, noise="white")
    stamps = INTERVAL * np.arange(u.size)
    other = replace(task, segments=(replace(task.segments[0], stamps=stamps, interval=np.nan),))
    one, two = fit_time(task), fit_time(other)
    np.testing.assert_allclose(one.theta, two.theta, rtol=1e-6)
    np.testing.assert_allclose(one.covariance, two.covariance, rtol=1e-4)


def test_dead_time_between_samples() -> None:
    """A dead time of 3.4 intervals is found without a start, within its interval, beside K, ωn and ζ."""
    rng = np.random.default_rng(8)
    shape = form("second-order", dead_time=True)
    theta = np.array([2.0, W, 0.35, 3.4 * INTERVAL])
    u = np.repeat(rng.normal(size=100), 10)
    y = simulate(shape.transfer_matrix(theta), u, INTERVAL) + 0.01 * rng.normal(size=u.size)
    found = fit_time(trial(u, y, shape))
    assert np.all(np.abs(found.theta - theta) < 4 * np.sqrt(np.diag(found.covariance)))
    assert found.covariance[3, 3] ** 0.5 < 0.05 * INTERVAL


def test_held_ranges_and_ties() -> None:
    """A held value stays and has no variance; a tie moves with its partner; a range is not left."""
    u, y = made()
    found = fit_time(trial(u, y, held={"damping_ratio": 0.35}))
    assert found.theta[2] == 0.35
    assert np.all(found.covariance[2] == 0.0)
    tied = fit_time(trial(u, y, ties={"gain": "natural_frequency / 15"}))
    assert tied.theta[0] == pytest.approx(tied.theta[1] / 15, rel=1e-12)
    assert tied.covariance[0, 0] == pytest.approx(tied.covariance[1, 1] / 225, rel=1e-6)
    kept = fit_time(trial(u, y, ranges={"natural_frequency": (10.0, 29.0)}))
    assert 28.9 < kept.theta[1] <= 29.0


def test_segments_share_the_parameters_alone() -> None:
    """Two records of one rig with different offsets: u shrinks by about √2, offsets do not matter."""
    one = made(3)
    again = simulate(SECOND.transfer_matrix(np.array([2.0, W, 0.35])), one[0], INTERVAL)
    again = again + 50.0 + 0.02 * np.random.default_rng(4).normal(size=again.size)
    segments = (trial(*one).segments[0], trial(one[0], again).segments[0])
    both = fit_time(Trial(SECOND, segments, noise="white"))
    alone = fit_time(trial(*one, noise="white"))
    ratio = np.sqrt(np.diag(alone.covariance) / np.diag(both.covariance))
    np.testing.assert_allclose(ratio, np.sqrt(2), rtol=0.06)
    assert abs(both.theta[1] - W) < 4 * both.covariance[1, 1] ** 0.5


def test_a_change_of_unit_changes_nothing_else() -> None:
    """Two outputs; one channel a million times larger: ωn, ζ and their u stay to 1e-6."""
    rng = np.random.default_rng(6)
    shape = matrix_form(("p", "q"), ("u",), [[(0,)], [(0, 1)]], 2)
    theta = np.array([2.0, 5.0, 0.02, W, 0.35])
    u = np.repeat(rng.normal(size=80), 10)[None]
    y = simulate(shape.transfer_matrix(theta), u, INTERVAL)
    y = y + np.array([[0.05], [0.2]]) * rng.normal(size=y.shape)
    one = fit_time(trial(u, y, shape))
    two = fit_time(trial(u, y * np.array([[1.0], [1e6]]), shape))
    np.testing.assert_allclose(two.theta[3:], one.theta[3:], rtol=1e-6)
    np.testing.assert_allclose(two.covariance[3:, 3:], one.covariance[3:, 3:], rtol=1e-4)
    assert np.all(np.abs(one.theta - theta) < 4.5 * np.sqrt(np.diag(one.covariance)))


def test_release_has_no_gain_and_an_honest_frequency() -> None:
    """Free decay from a displaced position at a time between samples: ωn and ζ with their u, gain NaN."""
    rng = np.random.default_rng(9)
    time = INTERVAL * np.arange(1000)
    at = 0.3005
    rest = 1.0 - respond_at(SECOND.transfer_matrix(np.array([1.0, W, 0.1])), np.maximum(time - at, 0.0))
    y = 3.0 + rest + 0.01 * rng.normal(size=time.size)
    segment = Segment("r", np.zeros((1, 1000)), y[None], INTERVAL, 0.0, None, "release", at)
    found = fit_time(Trial(SECOND, (segment,)))
    assert np.isnan(found.theta[0])
    u = np.sqrt(np.diag(found.covariance))
    assert abs(found.theta[1] - W) < 4 * u[1] < 0.4
    assert abs(found.theta[2] - 0.1) < 4 * u[2] < 0.01
    assert not found.warnings


def test_profile_meets_the_quadratic_where_that_is_good() -> None:
    """With much data the profile's ends are the estimate ± t u to 2 %."""
    u, y = made()
    task = trial(u, y, noise="white")
    found = fit_time(task)
    low, high = profile(task, found, "natural_frequency")
    half = stats.t.ppf(0.975, found.dof) * found.covariance[1, 1] ** 0.5
    assert low == pytest.approx(found.theta[1] - half, abs=0.03 * half)
    assert high == pytest.approx(found.theta[1] + half, abs=0.03 * half)


def test_profile_is_open_where_the_log_says_nothing() -> None:
    """A heavily damped pair seen by a slow sampler: the fast pole is unbounded above, and the interval says so."""
    rng = np.random.default_rng(2)
    u = (np.arange(60) >= 10).astype(float)
    y = simulate(form("first-order").transfer_matrix(np.array([1.0, 0.5])), u, 0.1) + 0.02 * rng.normal(
        size=60
    )
    shape = form("second-order")
    task = trial(u, y, shape, 0.1, noise="white")
    found = fit_time(task)
    low, high = profile(task, found, "natural_frequency")
    assert np.isinf(high)
    assert 0.5 < low < found.theta[1]  # one time constant of 0.5 s: ωn/2ζ = 2 rad/s is all that is known


def test_found_without_a_start() -> None:
    """Random records begun in mid-transient: the cost reached is no higher than from the truth (+1e-6)."""
    import importlib.util
    from pathlib import Path

    path = Path(__file__).parents[1] / "benchmarks" / "convergence.py"
    spec = importlib.util.spec_from_file_location("convergence", path)
    module = importlib.util.module_from_spec(spec)
    import sys

    sys.modules["convergence"] = module
    spec.loader.exec_module(module)
    for seed in range(8):
        excess, _ = module.lost(module.random_record(seed, 1200), "time")
        assert excess <= 1e-6, f"seed {seed}"


def test_refuses_too_few_samples() -> None:
    """Five samples are not fitted."""
    with pytest.raises(FitError) as caught:
        fit_time(trial(np.ones(5), np.arange(5.0)))
    assert caught.value.code == "too-few-samples"
