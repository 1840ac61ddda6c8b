"""The frequency road: exact end terms and holds, exact derivatives, starts, constraints, honest in any colour."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy import signal, stats
from scipy.linalg import expm

from bound import second_order, second_order_bound
from rigtally.errors import FitError
from rigtally.estimation.frequency_columns import Problem
from rigtally.estimation.frequency_domain import fit_frequency
from rigtally.estimation.frequency_noise import autoregression, from_reflections, lag_one
from rigtally.estimation.frequency_projection import project, project_given
from rigtally.estimation.spectrum import all_bins, spectral_segment
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import Form, form, matrix_form

INTERVAL = 0.05


def simulated(
    shape: Form, theta: np.ndarray, u: np.ndarray, interval: float, hold: str, fine: int = 100
) -> np.ndarray:
    """Brute force: fine steps of the matrix exponential, the delayed input looked up at each, from a moving state.

    Nothing of the estimator is used; dead times are multiples of interval/fine. One input, one output.
    """
    matrix = shape.transfer_matrix(theta)
    den, num = matrix.denominator, matrix.numerators[0, 0]
    n, step = den.size - 1, interval / fine
    block = np.zeros((n + 2, n + 2))
    block[np.arange(n - 1), np.arange(1, n)] = 1.0
    block[n - 1, :n] = -den[:n]
    block[n - 1, n] = block[n, n + 1] = 1.0
    grown = expm(block * step)
    lag = round(float(matrix.dead_time[0, 0]) / step)
    index = np.arange(u.size * fine) - lag
    if hold == "held":
        begin = u[np.clip(np.floor_divide(index, fine), 0, u.size - 1)]
        end = begin
    else:
        at = np.arange(u.size)
        begin, end = np.interp(index / fine, at, u), np.interp((index + 1) / fine, at, u)
    x = np.linspace(0.3, 0.1, n)
    out = np.empty(u.size)
    read, through = num[:n] - num[n] * den[:n], num[n]
    for k in range(u.size * fine):
        if k % fine == 0:
            out[k // fine] = read @ x + through * begin[k]
        x = grown[:n, :n] @ x + grown[:n, n] * begin[k] + grown[:n, n + 1] * (end[k] - begin[k]) / step
    return out


def problem_of(shape: Form, u: np.ndarray, y: np.ndarray, hold: str, scale: float = 0.4) -> Problem:
    """One segment on all bins, the offset taken as known to be nought."""
    trial = Trial(shape, (), between=hold)
    segment = spectral_segment(Segment("made", u[None], y[None], INTERVAL), trial, 0.0)
    bins = all_bins(u.size, with_zero=True)
    return Problem(shape, (segment,), (bins,), np.ones(1), scale=scale, offset_free=False)


CASES = [
    ("first-order", [2.0, 0.5], 0.255),
    ("first-order-rate", [2.0, 0.5], 0.0),
    ("second-order", [2.0, 3.0, 0.3], 0.0),
    ("second-order", [2.0, 3.0, 1.0], 0.13),  # a double pole
    ("second-order-rate", [2.0, 3.0, 1.2], 0.07),
    ("second-order-zero", [2.0, 0.2, 3.0, 1.0], 0.1),
    ("second-order-highpass", [2.0, 3.0, 0.3], 0.1),
    ("third-order", [2.0, 1 / 3, 3.0, 1.0], 0.02),  # a triple pole
    ("third-order-rate", [2.0, 0.5, 3.0, 0.3], 0.0),
    ("rational-2/2", [1.0, 2.0, 3.0, 9.0, 2.0], 0.05),
    ("rational-3/4", [4.0, 1.0, 0.5, 0.2, 40.0, 44.0, 30.0, 5.0], 0.0),
]


@pytest.mark.parametrize("hold", ["held", "ramped"])
@pytest.mark.parametrize(("name", "values", "dead"), CASES)
def test_the_spectrum_is_exact(name: str, values: list[float], dead: float, hold: str) -> None:
    """At the true poles nothing is left over, whatever the start and the end of the record, and b comes back."""
    rng = np.random.default_rng(4)
    shape = form(name, dead_time=dead > 0)
    theta = np.array([*values, *([dead] if dead else [])])
    u = np.cumsum(rng.normal(size=90))
    y = simulated(shape, theta, u, INTERVAL, hold)
    problem = problem_of(shape, u, y, hold)
    scaled = theta / problem.scale**shape.time_powers
    found = project(problem, scaled[shape.numerator_count :])
    assert np.max(np.abs(found.residual)) < 1e-7 * np.std(y)
    np.testing.assert_allclose(found.numerator, shape.numerator_coefficients(scaled)[0], rtol=1e-6)


@pytest.mark.parametrize("hold", ["held", "ramped", "band-limited"])
@pytest.mark.parametrize(("name", "values", "dead"), CASES)
def test_derivatives_are_exact(name: str, values: list[float], dead: float, hold: str) -> None:
    """The full derivative of the projected residual equals central differences of it, away from the optimum."""
    rng = np.random.default_rng(5)
    shape = form(name, dead_time=dead > 0)
    theta = np.array([*values, *([dead] if dead else [])])
    u = np.cumsum(rng.normal(size=60))
    y = np.cumsum(rng.normal(size=60))
    problem = problem_of(shape, u, y, hold)
    scaled = theta / problem.scale**shape.time_powers
    phi = 1.02 * scaled[shape.numerator_count :]

    def differences(function: Callable[[np.ndarray], np.ndarray], at: np.ndarray) -> np.ndarray:
        columns = []
        for k in range(at.size):
            step = np.zeros(at.size)
            step[k] = 1e-5 * max(abs(at[k]), 0.1)
            columns.append((function(at + step) - function(at - step)) / (2 * step[k]))
        return np.array(columns).T

    for function, at in ((project, phi), (project_given, 1.02 * scaled)):
        exact = function(problem, at).jacobian
        by_hand = differences(lambda x, f=function: f(problem, x).residual, at)
        np.testing.assert_allclose(exact, by_hand, atol=2e-6 * np.abs(exact).max())


def trial(u: np.ndarray, y: np.ndarray, shape: Form, interval: float = 2e-3, **options: object) -> Trial:
    """One segment, one trial."""
    return Trial(shape, (Segment("made", np.atleast_2d(u), np.atleast_2d(y), interval),), **options)


SECOND = form("second-order")


def second_order_cost(theta: np.ndarray, u: np.ndarray, y: np.ndarray, interval: float) -> float:
    """Sum of squares at given θ with the best offset (the record starts at rest)."""
    rest = y - second_order(theta, u, interval, np.zeros(2))
    return float(np.sum((rest - rest.mean()) ** 2))


@pytest.mark.parametrize("damping", [0.02, 0.3, 1.5])
@pytest.mark.parametrize("speed", [1e-3, 1e-1, 1.5])
def test_no_start_is_asked(speed: float, damping: float) -> None:
    """ωn·T over three decades and every damping: the truth is found within 5 u and the cost is the truth's or less."""
    rng = np.random.default_rng(6)
    interval, w = 2e-3, speed / 2e-3
    count = int(np.clip(60 / speed, 400, 20_000))
    u = (np.arange(count) >= count // 5).astype(float)
    clean = second_order(np.array([2.0, w, damping]), u, interval, np.zeros(2))
    y = clean + 0.4 + 0.01 * rng.normal(size=count)
    found = fit_frequency(trial(u, y, SECOND, interval))
    off = found.theta - [2.0, w, damping]
    assert np.all(np.abs(off) < 5 * np.sqrt(np.diag(found.covariance)))
    assert found.converged
    off_truth = second_order_cost(np.array([2.0, w, damping]), u, y, interval)
    assert float(np.sum((y - found.fitted[0][0]) ** 2)) <= off_truth * (1 + 1e-6)


def test_an_oversampled_record_keeps_its_digits() -> None:
    """ωn·T = 1e-5: the polynomial basis in δ gives the poles to a part in a thousand from a clean record."""
    interval, w = 1e-6, 10.0
    t = interval * np.arange(400_000)
    y = 2.0 * -np.expm1(-w * t)  # first order, step at the first sample but one
    u = np.ones(t.size)
    u[0] = 0.0
    rng = np.random.default_rng(3)
    y = np.concatenate([[0.0], y[:-1]]) + 1e-3 * rng.normal(size=t.size)
    found = fit_frequency(trial(u, y, form("first-order"), interval, noise="white", offset=0.0))
    off = found.theta - [2.0, 1 / w]
    assert np.all(np.abs(off) < 4 * np.sqrt(np.diag(found.covariance)))
    assert np.all(np.abs(off) < 1e-3 * np.array([2.0, 1 / w]))


def test_dead_time_needs_no_start() -> None:
    """A dead time of 18.7 samples, not a multiple of the interval, is found with the rest."""
    rng = np.random.default_rng(7)
    shape = form("second-order", dead_time=True)
    theta = np.array([2.0, 3.0, 0.4, 18.7 * INTERVAL])
    u = (np.arange(500) >= 60).astype(float)
    y = simulated(shape, theta, u, INTERVAL, "held", fine=10)
    y += 0.01 * rng.normal(size=y.size)
    found = fit_frequency(trial(u, y, shape, INTERVAL))
    assert np.all(np.abs(found.theta - theta) < 4 * np.sqrt(np.diag(found.covariance)))


def test_two_inputs_and_two_outputs_share_one_denominator() -> None:
    """A 2 × 2 matrix with powers of s of its own; rescaling one output changes no other number."""
    rng = np.random.default_rng(8)
    shape = matrix_form(("current", "speed"), ("volts", "torque"), (((0, 1), (0,)), ((0,), (0, 1))), 2)
    theta = np.array([0.5, 0.8, 1.5, 2.0, -0.7, 0.3, 9.0, 0.6])
    matrix = shape.transfer_matrix(theta)
    u = rng.normal(size=(2, 300)).repeat(5, axis=1)
    y = np.zeros((2, 1500))
    for i in range(2):
        for j in range(2):
            b, a, _ = signal.cont2discrete(
                (np.trim_zeros(matrix.numerators[i, j][::-1], "f"), matrix.denominator[::-1]), 0.02, "zoh"
            )
            y[i] += signal.lfilter(b[0], a, u[j])
    y += np.array([[0.01], [0.05]]) * rng.normal(size=y.shape)
    found = fit_frequency(trial(u, y, shape, 0.02))
    assert np.all(np.abs(found.theta - theta) < 4.5 * np.sqrt(np.diag(found.covariance)))
    other = fit_frequency(trial(u, y * np.array([[1.0], [1000.0]]), shape, 0.02))
    scale = np.array([1, 1, 1, 1000, 1000, 1, 1, 1.0])
    np.testing.assert_allclose(other.theta / scale, found.theta, rtol=2e-4)


def test_an_integrator_is_taken_as_one() -> None:
    """K / (s(τs + 1)) on a held input whose mean is not nought, from any level."""
    rng = np.random.default_rng(9)
    shape = matrix_form(("y",), ("u",), (((0,),),), 1, integrators=1)
    u = np.repeat(rng.normal(size=100) + 0.5, 8)
    b, a, _ = signal.cont2discrete(([3.0 / 0.4], [1.0, 1.0 / 0.4, 0.0]), 0.02, "zoh")
    y = signal.lfilter(b[0], a, u) + 5.0 + 0.002 * rng.normal(size=u.size)
    found = fit_frequency(trial(u, y, shape, 0.02))
    u_theta = np.sqrt(np.diag(found.covariance))
    assert np.all(np.abs(found.theta - [3.0, 0.4]) < 4 * u_theta)
    assert u_theta[0] < 1e-3


def test_release_has_no_gain() -> None:
    """A free decay gives ωn and ζ with their u; the gain is not a number."""
    rng = np.random.default_rng(10)
    t = 1e-3 * np.arange(1500)
    w, z = 200.0, 0.05
    y = np.exp(-z * w * t) * np.cos(w * np.sqrt(1 - z * z) * t) + 0.3 + 0.01 * rng.normal(size=t.size)
    one = Segment("made", np.zeros((1, t.size)), y[None], 1e-3, excitation="release", at=0.0)
    found = fit_frequency(Trial(SECOND, (one,)))
    assert np.isnan(found.theta[0])
    assert np.isnan(found.covariance[0, 0])
    u_theta = np.sqrt(np.diag(found.covariance)[1:])
    assert np.all(np.abs(found.theta[1:] - [w, z]) < 4 * u_theta)
    assert np.all(u_theta < [0.2, 1e-3])


def made(count: int = 1200, seed: int = 11, damping: float = 0.3) -> tuple[np.ndarray, np.ndarray]:
    """A step record at 40 dB with a known answer: K = 2, ωn = 30 rad/s."""
    rng = np.random.default_rng(seed)
    u = (np.arange(count) >= count // 5).astype(float)
    clean = second_order(np.array([2.0, 30.0, damping]), u, 2e-3, np.zeros(2))
    return u, clean + 0.4 + 0.01 * rng.normal(size=count)


def test_lmfit_carries_what_the_user_holds_bounds_and_ties() -> None:
    """A held value has no u and lessens the others'; a range binds; a tie is kept to the last digit."""
    u, y = made()
    free = fit_frequency(trial(u, y, SECOND))
    held = fit_frequency(trial(u, y, SECOND, held={"damping_ratio": 0.3}))
    assert held.theta[2] == 0.3
    assert held.covariance[2, 2] == 0.0
    assert held.covariance[1, 1] < free.covariance[1, 1]
    wide = fit_frequency(trial(u, y, SECOND, ranges={"damping_ratio": (0.0, 5.0)}))
    np.testing.assert_allclose(wide.theta, free.theta, rtol=1e-6)
    np.testing.assert_allclose(wide.covariance, free.covariance, rtol=1e-3)
    tied = fit_frequency(trial(u, y, SECOND, ties={"damping_ratio": "0.01 * natural_frequency"}))
    assert tied.theta[2] == pytest.approx(0.01 * tied.theta[1], rel=1e-12)
    assert abs(tied.theta[1] - 30.0) < 4 * np.sqrt(tied.covariance[1, 1])


def test_repeats_share_the_rig_and_nothing_else() -> None:
    """Two records with offsets of their own give one θ, with about √½ of the u."""
    u, y = made(seed=12)
    _, again = made(seed=13)
    one = fit_frequency(trial(u, y, SECOND))
    segments = (Segment("a", u[None], y[None], 2e-3), Segment("b", u[None], again[None] + 7.0, 2e-3))
    both = fit_frequency(Trial(SECOND, segments))
    ratio = np.sqrt(np.diag(both.covariance) / np.diag(one.covariance))
    np.testing.assert_allclose(ratio, np.sqrt(0.5), rtol=0.1)
    assert np.all(np.abs(both.theta - [2.0, 30.0, 0.3]) < 4 * np.sqrt(np.diag(both.covariance)))
    assert np.mean(both.fitted[1]) - np.mean(both.fitted[0]) == pytest.approx(7.0, abs=0.01)


def test_hum_does_not_pass_for_noise() -> None:
    """A mains line of ten times the noise, at 50.03 Hz: found, taken out, and the answer as honest as without."""
    u, y = made(count=2000)
    clean = fit_frequency(trial(u, y, SECOND))
    t = 2e-3 * np.arange(y.size)
    humming = y + 0.1 * np.sin(2 * np.pi * 50.03 * t + 0.3)
    found = fit_frequency(trial(u, humming, SECOND))
    assert found.nuisance["hum"] == 1
    shift = np.abs(found.theta - clean.theta) / np.sqrt(np.diag(clean.covariance))
    assert np.all(shift < 0.5)
    np.testing.assert_allclose(np.diag(found.covariance), np.diag(clean.covariance), rtol=0.5)


def test_what_this_road_cannot_serve_is_refused() -> None:
    """Gaps, uneven stamps and a start at rest are refused, so that the door can take the other road."""
    u, y = made(count=200)
    good = trial(u, y, SECOND)
    gap = y.copy()
    gap[50] = np.nan
    segment = good.segments[0]
    for bad in (
        trial(u, gap, SECOND),
        replace(good, rest=True),
        replace(good, segments=(replace(segment, stamps=segment.time),)),
        replace(good, segments=(replace(segment, excitation="step", at=0.0),)),
    ):
        with pytest.raises(FitError) as refusal:
            fit_frequency(bad)
        assert refusal.value.code == "road-unfit"


def test_colour_whitens_exactly() -> None:
    """The whitening of an AR(2) is the Cholesky factor's: W C Wᵀ = 1 with the first samples included."""
    colour = from_reflections(np.array([-0.8, 0.3]), 1.0)
    n = 30
    a = colour.predictors[-1]
    # covariance by the impulse response, long enough to have died away
    impulse = signal.lfilter([1.0], a, np.r_[1.0, np.zeros(4000)])
    r = np.array([impulse[: 4000 - k] @ impulse[k:4000] for k in range(n)])
    covariance = r[np.abs(np.subtract.outer(np.arange(n), np.arange(n)))]
    w = colour.whiten(np.eye(n)).T
    np.testing.assert_allclose(w @ covariance @ w.T, np.eye(n), atol=1e-9)


def test_colour_is_found_and_white_is_left_white() -> None:
    """AR(1) with ρ = 0.9 gets its ρ; white noise gets order 0."""
    rng = np.random.default_rng(14)
    e = rng.normal(size=5000)
    assert autoregression([e], 24).order == 0
    red = signal.lfilter([1.0], [1.0, -0.9], e)
    found = autoregression([red], 24)
    assert found.order >= 1
    assert lag_one(red) == pytest.approx(0.9, abs=0.02)
    assert found.effective_share() == pytest.approx(0.1 / 1.9, rel=0.5)


def monte_carlo(rho: float, records: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Errors over the bound and over U, (records·cells, 3); steps and noise, ζ 0.05 and 0.7, 40 dB, 600 samples."""
    errors, pulls = [], []
    for cell, (damping, kind) in enumerate((z, k) for z in (0.05, 0.7) for k in ("step", "noise")):
        rng = np.random.default_rng([seed, cell])
        theta = np.array([2.0, 30.0, damping])
        u = (np.arange(600) >= 120).astype(float) if kind == "step" else np.repeat(rng.normal(size=150), 4)
        clean = second_order(theta, u, 2e-3, np.zeros(2))
        sigma = 0.01 * float(np.std(clean))
        limit = second_order_bound(theta, u, 2e-3, sigma, rho=rho)
        for _ in range(records):
            e = rng.normal(size=600)
            if rho:
                e[1:] *= np.sqrt(1 - rho**2)
                e = signal.lfilter([1.0], [1.0, -rho], e)
            found = fit_frequency(trial(u, clean + 0.4 + sigma * e, SECOND))
            off = found.theta - theta
            errors.append(off / limit)
            pulls.append(off / (np.sqrt(np.diag(found.covariance)) * stats.t.ppf(0.975, found.dof)))
    return np.array(errors), np.array(pulls)


@pytest.mark.parametrize(("rho", "records", "most"), [(0.0, 20, 1.0), (0.9, 8, 1.1)])
def test_efficient_and_honest(rho: float, records: int, most: float) -> None:
    """RMSE over the bound within Monte Carlo scatter of `most`; the 95 % interval covers as often as it says.

    The three parameters of a record are counted as one draw in the scatter, which is on the safe side.
    """
    errors, pulls = monte_carlo(rho, records, 30)
    count = errors.shape[0]
    ratio = np.sqrt(np.mean(errors**2, axis=0))
    assert np.all(ratio < most + 3.3 / np.sqrt(2 * count))
    assert np.all(ratio > 1.0 - 3.3 / np.sqrt(2 * count))
    missed = np.sum(np.abs(pulls) > 1.0, axis=0)
    low, high = stats.binom.ppf([1e-3, 1 - 1e-3], count, 0.05 if rho == 0 else 0.06)
    assert np.all((missed >= low) & (missed <= high))
