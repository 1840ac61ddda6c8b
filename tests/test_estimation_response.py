"""A measured frequency response is fitted with the same forms and the same honesty."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

import rigtally as rt
from rigtally.errors import UsageError
from rigtally.estimation.response_fit import gain_with_derivative
from rigtally.forms.named import form
from rigtally.records.record import Response

OMEGA = np.geomspace(1.0, 300.0, 60)


def measured(
    name: str, theta: list[float], size: float, seed: int, dead: bool = False, stated: bool = True
) -> Response:
    """A response of that form with circular noise of a relative size (invented)."""
    rng = np.random.default_rng(seed)
    gain = form(name, dead_time=dead).transfer_matrix(np.array(theta))(OMEGA)
    u = size * np.abs(gain)
    gain = gain + u * (rng.normal(size=OMEGA.size) + 1j * rng.normal(size=OMEGA.size))
    covariance = (u**2)[:, None, None, None, None] * np.eye(2) if stated else None
    return Response(OMEGA, gain[:, None, None], covariance)


@pytest.mark.parametrize("name", ["first-order", "second-order-zero", "third-order-rate", "rational-2/2"])
def test_derivative_is_exact(name: str) -> None:
    """∂G/∂θ equals central differences of G."""
    shape = form(name, dead_time=True)
    theta = np.linspace(0.5, 1.5, len(shape.names))
    _, exact = gain_with_derivative(shape, theta, OMEGA[:20])
    for k in range(theta.size):
        step = np.zeros(theta.size)
        step[k] = 1e-6
        up, down = (gain_with_derivative(shape, theta + sign * step, OMEGA[:20])[0] for sign in (1, -1))
        np.testing.assert_allclose(exact[k], (up - down) / 2e-6, atol=1e-7 * np.abs(exact).max())


@pytest.mark.parametrize("stated", [True, False])
def test_interval_covers_as_often_as_it_says(stated: bool) -> None:
    """Stated or from the scatter: the 95 % interval of ωn, ζ and K covers the truth within binomial bounds."""
    truth = np.array([2.0, 30.0, 0.3])
    missed, count = np.zeros(3), 40
    for seed in range(count):
        found = rt.fit(measured("second-order", list(truth), 0.02, seed, stated=stated), form="second-order")
        ends = [q.interval(0.95) for q in found.parameters.values()]
        missed += [not low <= value <= high for (low, high), value in zip(ends, truth, strict=True)]
    low, high = stats.binom.ppf([5e-4, 1 - 5e-4], count, 0.05)
    assert np.all((missed >= low) & (missed <= high))


def test_dead_time_and_held_values() -> None:
    """A dead time is found beside the poles; a held value is kept and has no u."""
    found = rt.fit(
        measured("second-order", [2.0, 30.0, 0.3, 0.004], 0.01, 1, dead=True),
        form="second-order",
        dead_time=True,
    )
    for name, value in {
        "gain": 2.0,
        "natural_frequency": 30.0,
        "damping_ratio": 0.3,
        "dead_time": 0.004,
    }.items():
        q = found.parameters[name]
        assert abs(q.value - value) < 4 * q.u
    held = rt.fit(measured("first-order", [2.0, 0.05], 0.01, 2), form="first-order", set={"gain": 2.0})
    assert held.parameters["gain"].value == 2.0
    assert held.parameters["gain"].u == 0.0


def test_a_form_that_does_not_hold_is_told() -> None:
    """A first-order fit of a resonance with stated uncertainties says so; the right form says nothing."""
    response = measured("second-order", [2.0, 30.0, 0.1], 0.01, 3)
    assert "form-does-not-hold" in {w.code for w in rt.fit(response, form="first-order").warnings}
    assert "form-does-not-hold" not in {w.code for w in rt.fit(response, form="second-order").warnings}


def test_magnitudes_alone() -> None:
    """Without phase ωn, ζ and K are found, it is said what is not, and a dead time is refused."""
    full = measured("second-order", [2.0, 30.0, 0.3], 0.005, 4)
    bare = Response(OMEGA, np.abs(full.gain).astype(complex), full.covariance, magnitude_only=True)
    found = rt.fit(bare, form="second-order")
    for name, value in {"gain": 2.0, "natural_frequency": 30.0, "damping_ratio": 0.3}.items():
        assert abs(found.parameters[name].value - value) < 4 * found.parameters[name].u
    assert "needs-phase" in {w.code for w in found.warnings}
    with pytest.raises(UsageError) as refusal:
        rt.fit(bare, form="second-order", dead_time=True)
    assert refusal.value.code == "needs-phase"
