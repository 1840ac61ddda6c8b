"""Exact simulation between samples against scipy's integrators and closed forms."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from scipy import signal
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from rigtally.errors import UsageError
from rigtally.forms.hold import companion, exponentials, flow, recursion
from rigtally.forms.named import SINGLE_FORMS, form, matrix_form
from rigtally.forms.simulate import respond_at, simulate
from rigtally.forms.transfer_matrix import TransferMatrix

VALUES = {
    "gain": 1.7,
    "natural_frequency": 12.0,
    "damping_ratio": 0.25,
    "time_constant": 0.08,
    "zero_time": 0.03,
}


def plant(name: str, **changes: float) -> TransferMatrix:
    """A named form with the values above."""
    shape = form(name)
    theta = np.array([{**VALUES, **changes}[n] for n in shape.names])
    return shape.transfer_matrix(theta)


def noise(count: int, seed: int = 0) -> np.ndarray:
    """A white input."""
    return np.random.default_rng(seed).normal(size=count)


@pytest.mark.parametrize("name", SINGLE_FORMS)
def test_ramped_agrees_with_lsim(name: str) -> None:
    """Every named form, ramped input: scipy's lsim (which interpolates linearly) to 1e-9."""
    model = plant(name)
    u, interval = noise(400), 0.01
    system = signal.TransferFunction(
        np.trim_zeros(model.numerators[0, 0][::-1], "f"), model.denominator[::-1]
    )
    _, expected, _ = signal.lsim(system, u, interval * np.arange(u.size))
    np.testing.assert_allclose(simulate(model, u, interval, between="ramped"), expected, atol=1e-9)


@pytest.mark.parametrize("name", SINGLE_FORMS)
def test_held_agrees_with_the_discrete_twin(name: str) -> None:
    """Every named form, held input: scipy's zero-order-hold discretisation, sample by sample."""
    model = plant(name)
    u, interval = noise(300), 0.01
    num, den, _ = signal.cont2discrete(
        (np.trim_zeros(model.numerators[0, 0][::-1], "f"), model.denominator[::-1]), interval, "zoh"
    )
    expected = signal.lfilter(num[0], den, u)
    np.testing.assert_allclose(simulate(model, u, interval), expected, atol=1e-8)


@pytest.mark.parametrize("between", ["held", "ramped"])
@pytest.mark.parametrize("dead", [0.0, 0.004, 0.01, 0.0137, 0.05])
def test_dead_time_inside_an_interval(between: str, dead: float) -> None:
    """A dead time that is no whole number of intervals: the differential equation integrated numerically."""
    base = plant("second-order-zero")
    model = TransferMatrix(base.numerators, base.denominator, np.array([[dead]]))
    interval, count = 0.01, 60
    u = noise(count, 3)
    time = interval * np.arange(count)

    def input_at(t: float) -> float:
        moved = t - dead
        if between == "ramped":
            return float(np.interp(moved, time, u))
        return float(u[min(max(int(np.floor(moved / interval + 1e-9)), 0), count - 1)])

    a, b = companion(base.denominator), np.array([0.0, 1.0])
    corners = np.unique(np.round(np.concatenate([time, time + dead]), 12))
    corners = corners[corners <= time[-1] + 1e-12]
    state = np.zeros(2)
    expected = {0: 0.0}
    for left, right in pairwise(corners):
        middle = input_at(0.5 * (left + right))
        ends = (middle, middle) if between == "held" else (input_at(left), input_at(right))

        def slope(
            t: float, x: np.ndarray, left: float = left, right: float = right, ends: tuple = ends
        ) -> np.ndarray:
            return a @ x + b * (ends[0] + (ends[1] - ends[0]) * (t - left) / (right - left))

        state = solve_ivp(slope, (left, right), state, rtol=1e-10, atol=1e-12).y[:, -1]
        k = round(right / interval)
        if abs(k * interval - right) < 1e-9:
            expected[k] = float(base.numerators[0, 0, :2] @ state)
    got = simulate(model, u, interval, between=between)
    np.testing.assert_allclose(got[list(expected)], list(expected.values()), atol=2e-8)


def test_strongly_oversampled_step_is_exact() -> None:
    """ωn·T = 1e-5: the recursion keeps nine digits of the closed-form step over 2e5 samples."""
    w, damping, interval = 1.0, 0.3, 1e-5
    model = plant("second-order", gain=1.0, natural_frequency=w, damping_ratio=damping)
    t = interval * np.arange(200_000)
    q = np.sqrt(1 - damping**2)
    exact = 1 - np.exp(-damping * w * t) * (np.cos(q * w * t) + damping / q * np.sin(q * w * t))
    np.testing.assert_allclose(simulate(model, np.ones(t.size), interval), exact, atol=1e-9)


def test_repeated_poles_and_integrators() -> None:
    """1/(s + 2)^3 and 1/s²: closed forms of the step response."""
    t = 0.01 * np.arange(300)
    triple = TransferMatrix(np.array([[[8.0, 0, 0, 0]]]), np.poly([-2.0] * 3)[::-1], np.zeros((1, 1)))
    exact = 1 - np.exp(-2 * t) * (1 + 2 * t + 2 * t**2)
    np.testing.assert_allclose(simulate(triple, np.ones(t.size), 0.01), exact, atol=1e-12)
    np.testing.assert_allclose(respond_at(triple, t), exact, atol=1e-12)
    double = TransferMatrix(np.array([[[1.0, 0, 0]]]), np.array([0.0, 0.0, 1.0]), np.zeros((1, 1)))
    np.testing.assert_allclose(simulate(double, np.ones(t.size), 0.01), t**2 / 2, atol=1e-12)
    np.testing.assert_allclose(simulate(double, t, 0.01, between="ramped"), t**3 / 6, atol=1e-12)


def test_several_inputs_and_outputs_add_up() -> None:
    """Each output is the sum of its entries, each simulated alone."""
    shape = matrix_form(("p", "q"), ("u", "v"), [[(0,), (0, 1)], [(1,), (2,)]], 2)
    theta = np.array([1.0, 2.0, 0.1, 0.3, 0.5, 9.0, 0.4])
    model = shape.transfer_matrix(theta)
    u = np.array([noise(200, 1), noise(200, 2)])
    both = simulate(model, u, 0.01)
    for i in range(2):
        alone = sum(simulate(model.entry(i, j), u[j], 0.01) for j in range(2))
        np.testing.assert_allclose(both[i], alone, atol=1e-12)


def test_responses_at_any_stamps() -> None:
    """Steps and pulses at irregular stamps, after a dead time: the closed forms of a first-order lag."""
    t = np.sort(np.random.default_rng(5).uniform(0, 3, 100))
    base = plant("first-order", gain=2.0, time_constant=0.4)
    model = TransferMatrix(base.numerators, base.denominator, np.array([[0.25]]))
    since = np.maximum(t - 0.25, 0.0)
    np.testing.assert_allclose(respond_at(model, t), 2 * -np.expm1(-since / 0.4), atol=1e-13)
    pulse = np.where(t >= 0.25, 5.0 * np.exp(-since / 0.4), 0.0)
    np.testing.assert_allclose(respond_at(model, t, "pulse"), pulse, atol=1e-12)


def test_a_steady_start_stays_steady() -> None:
    """Begun in balance, a constant input leaves a constant output."""
    out = simulate(plant("second-order"), np.full(50, 3.0), 0.01, steady_start=True)
    np.testing.assert_allclose(out, 1.7 * 3.0, rtol=1e-12)


def test_blocks_equal_the_plain_loop() -> None:
    """The blocked recursion against the loop that it stands for, over lengths around the block's."""
    rng = np.random.default_rng(1)
    phi = expm(0.1 * companion(np.array([4.0, 0.4, 1.0])))
    for count in (1, 2, 15, 16, 17, 255, 256, 257, 1000):
        drive, x = rng.normal(size=(2, count)), np.array([1.0, -2.0])
        loop = np.empty((2, count))
        state = x
        for k in range(count):
            loop[:, k] = state
            state = phi @ state + drive[:, k]
        np.testing.assert_allclose(recursion(phi, drive, x), loop, atol=1e-11)


def test_many_exponentials_equal_scipys() -> None:
    """exp(a t) for durations over eight decades against scipy's expm, and the uniform short cut."""
    a = companion(np.array([4.0, 0.4, 1.0]))
    t = np.geomspace(1e-6, 50.0, 30)
    np.testing.assert_allclose(exponentials(a, t), np.array([expm(a * s) for s in t]), atol=1e-12)
    grid = 0.3 + 0.01 * np.arange(500)
    expected = np.array([expm(a * s) for s in grid]).transpose(1, 2, 0)
    np.testing.assert_allclose(flow(a, np.eye(2), grid), expected, atol=1e-12)


def test_refusals() -> None:
    """Unknown words and wrong shapes are refused with a code."""
    model = plant("first-order")
    for call, code in (
        (lambda: simulate(model, [1.0, 2.0], 0.1, between="bent"), "bad-option"),
        (lambda: simulate(model, [[1.0], [2.0]], 0.1), "bad-input"),
        (lambda: respond_at(model, [0.0], "shake"), "bad-option"),
    ):
        with pytest.raises(UsageError) as caught:
            call()
        assert caught.value.code == code
