"""Propagation of uncertainty against published worked examples."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from rigtally.errors import UsageError
from rigtally.quantities.coverage import coverage_factor
from rigtally.quantities.draws import draw
from rigtally.quantities.dual import Dual
from rigtally.quantities.propagation import propagate
from rigtally.quantities.uncertain import Uncertain


def rectangular(value: float, half: float, dof: float = math.inf) -> Uncertain:
    return Uncertain(value, half / math.sqrt(3.0), dof=dof, distribution="rectangular")


def test_effective_degrees_of_freedom_of_a_product() -> None:
    """JCGM 100:2008, G.4.1, from memory: 0.25 %, 0.57 %, 0.82 % (n 10, 5, 15) give 1.03 %, 19.0, 2.09."""
    parts = [Uncertain(1.0, 0.0025, dof=9), Uncertain(1.0, 0.0057, dof=4), Uncertain(1.0, 0.0082, dof=14)]
    found = propagate(lambda x: x[0] * x[1] * x[2], parts)
    assert 100 * found.u[0] == pytest.approx(1.03, abs=0.005)
    assert found.dof[0] == pytest.approx(19.0, abs=0.05)
    assert coverage_factor(0.95, found.dof[0]) == pytest.approx(2.09, abs=0.012)


def end_gauge() -> tuple:
    """JCGM 100:2008, H.1: l = l_s + d − l_s (δα θ + α_s δθ), nm and °C."""
    inputs = [
        Uncertain(50000623.0, 25.0, dof=18),
        Uncertain(215.0, 5.8, dof=24),
        Uncertain(0.0, 3.9, dof=5),
        Uncertain(0.0, 6.7, dof=8),
        rectangular(11.5e-6, 2e-6),
        rectangular(0.0, 1e-6, dof=50),
        rectangular(0.0, 0.05, dof=2),
        Uncertain(-0.1, 0.2),
        Uncertain(0.0, 0.5 / math.sqrt(2.0)),
    ]

    def length(x):
        standard, d, d1, d2, alpha, d_alpha, d_theta, theta, cycle = x
        return standard + d + d1 + d2 - standard * (d_alpha * (theta + cycle) + alpha * d_theta)

    return length, inputs


def test_end_gauge_calibration() -> None:
    """JCGM 100:2008, H.1 (opened in a public repository of worked examples; 16.7, 2.92, 93 from memory)."""
    length, inputs = end_gauge()
    found = propagate(length, inputs)
    assert found.value[0] == pytest.approx(50000838.0, abs=0.5)
    assert found.u[0] == pytest.approx(32.0, abs=0.5)
    assert found.dof[0] == pytest.approx(16.7, abs=0.1)
    k = coverage_factor(0.99, math.floor(found.dof[0]))  # the example takes whole degrees of freedom
    assert k == pytest.approx(2.92, abs=0.005)
    assert k * found.u[0] == pytest.approx(93.0, abs=1.0)
    assert found.shares.sum() == pytest.approx(1.0, abs=1e-12)


def test_end_gauge_second_order_terms_show_in_the_draws() -> None:
    """The same example: with the second-order terms u is 34 nm, which the draws find by themselves."""
    length, inputs = end_gauge()
    known = [replace(x, dof=math.inf) for x in inputs]
    drawn = propagate(length, known, monte_carlo=400_000, rng=np.random.default_rng(1)).monte_carlo
    assert drawn is not None
    assert drawn.u[0] == pytest.approx(34.0, abs=0.5)
    assert not drawn.agrees[0]


def test_correlated_resistance_reactance_and_impedance() -> None:
    """JCGM 100:2008, H.2, tables H.2 to H.4: five simultaneous sets of V, I and phase."""
    v = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
    i = np.array([19.663, 19.639, 19.640, 19.685, 19.678]) * 1e-3
    phi = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])
    data = np.stack([v, i, phi])
    u = data.std(axis=1, ddof=1) / math.sqrt(5.0)
    inputs = [Uncertain(float(m), float(s)) for m, s in zip(data.mean(axis=1), u, strict=True)]
    mv, mi, mp = data.mean(axis=1)
    c, s = math.cos(mp), math.sin(mp)
    jacobian = [
        [c / mi, -mv * c / mi**2, -mv * s / mi],
        [s / mi, -mv * s / mi**2, mv * c / mi],
        [1 / mi, -mv / mi**2, 0.0],
    ]

    def function(x):
        z = x[0] / x[1]
        return [z * np.cos(x[2]), z * np.sin(x[2]), z]

    found = propagate(function, inputs, np.corrcoef(data), jacobian=jacobian)
    np.testing.assert_allclose(found.value, [127.732, 219.847, 254.260], atol=1e-3)
    np.testing.assert_allclose(found.u, [0.071, 0.295, 0.236], atol=1e-3)
    r = found.covariance / np.outer(found.u, found.u)
    np.testing.assert_allclose([r[0, 1], r[0, 2], r[1, 2]], [-0.588, -0.485, 0.993], atol=1e-3)
    np.testing.assert_allclose(found.shares.sum(axis=1), 1.0, atol=1e-12)


def test_correlated_intercept_and_slope() -> None:
    """JCGM 100:2008, H.3: correction at 30 °C from intercept and slope with r = −0.930: −0.1494(41) °C."""
    inputs = [Uncertain(-0.1712, 0.0029), Uncertain(0.00218, 0.00067)]
    r = np.array([[1.0, -0.930], [-0.930, 1.0]])
    found = propagate(lambda x: x[0] + 10.0 * x[1], inputs, r, monte_carlo=100_000)
    assert found.value[0] == pytest.approx(-0.1494, abs=5e-5)
    assert found.u[0] == pytest.approx(0.0041, abs=5e-5)
    assert found.monte_carlo is not None
    assert found.monte_carlo.u[0] == pytest.approx(0.0041, abs=1e-4)


ADDITIVE = {
    "normal": ([Uncertain(0.0, 1.0)] * 4, 3.92, 0.02, True),
    "rectangular": ([rectangular(0.0, math.sqrt(3.0))] * 4, 3.88, 0.02, True),
    "one dominant": (
        [rectangular(0.0, math.sqrt(3.0))] * 3 + [rectangular(0.0, 10.0 * math.sqrt(3.0))], 17.0, 0.1, False
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", ADDITIVE)
def test_additive_model(case: str) -> None:
    """JCGM 101:2008, 9.2 (tables 2 to 4): half-widths 3.92, 3.88 and 17.0; the last differs from 19.9."""
    inputs, half, tolerance, agrees = ADDITIVE[case]
    found = propagate(sum, inputs, monte_carlo=500_000, rng=np.random.default_rng(7))
    drawn = found.monte_carlo
    assert drawn is not None
    assert 0.5 * (drawn.high[0] - drawn.low[0]) == pytest.approx(half, abs=tolerance)
    assert drawn.agrees[0] is agrees
    if case == "one dominant":
        assert found.u[0] == pytest.approx(10.1, abs=0.05)
        assert coverage_factor(0.95) * found.u[0] == pytest.approx(19.9, abs=0.05)


def test_mass_calibration_must_say_that_first_order_differs() -> None:
    """JCGM 101:2008, 9.3, table 5 (from memory, verified): u 0.0539 first order, 0.0754 by draws."""
    inputs = [
        Uncertain(100000.0, 0.050),
        Uncertain(1.234, 0.020),
        rectangular(1.20, 0.10),
        rectangular(8000.0, 1000.0),
        rectangular(8000.0, 50.0),
    ]

    def difference(x):
        reference, small, air, weight, standard = x
        return (reference + small) * (1.0 + (air - 1.2) * (1.0 / weight - 1.0 / standard)) - 100000.0

    found = propagate(difference, inputs, monte_carlo=500_000, rng=np.random.default_rng(3))
    drawn = found.monte_carlo
    assert drawn is not None
    assert found.u[0] == pytest.approx(0.0539, abs=5e-5)
    assert drawn.mean[0] == pytest.approx(1.234, abs=1e-3)
    assert drawn.u[0] == pytest.approx(0.0754, abs=3e-4)
    assert drawn.low[0] == pytest.approx(1.0834, abs=3e-3)
    assert drawn.high[0] == pytest.approx(1.3825, abs=3e-3)
    assert not drawn.agrees[0]


@pytest.mark.parametrize(
    ("x1", "value", "u", "low", "high"),
    [(0.0, 50, 50, 0, 150), (0.010, 150, 112, 0, 366), (0.050, 2550, 502, 1593, 3549)],
)
def test_comparison_loss(x1: float, value: float, u: float, low: float, high: float) -> None:
    """JCGM 101:2008, 9.4 (tables 6 to 8; shortest intervals by the non-central chi-square): units of 1e-6."""
    inputs = [Uncertain(x1, 0.005), Uncertain(0.0, 0.005)]
    found = propagate(
        lambda x: x[0] ** 2 + x[1] ** 2,
        inputs,
        monte_carlo=500_000,
        rng=np.random.default_rng(5),
        interval="shortest",
    )
    drawn = found.monte_carlo
    assert drawn is not None
    assert 1e6 * drawn.mean[0] == pytest.approx(value, abs=2)
    assert 1e6 * drawn.u[0] == pytest.approx(u, abs=2)
    # the shortest interval's width is sharp, its place (at the foot of a flat density) is not
    assert 1e6 * (drawn.high[0] - drawn.low[0]) == pytest.approx(high - low, abs=8)
    assert 1e6 * drawn.low[0] == pytest.approx(low, abs=25)
    if x1 == 0.0:
        assert found.u[0] == 0.0


def test_thermal_expansion_coefficient() -> None:
    """NIST TN 1900 (2015), E13 (opened in a public repository of worked examples): 17.266(1.76)e-6 1/K."""
    inputs = [
        Uncertain(1.4999, 0.0001),
        Uncertain(1.5021, 0.0002),
        Uncertain(288.15, 0.02),
        Uncertain(373.10, 0.05),
    ]
    found = propagate(lambda x: (x[1] - x[0]) / (x[0] * (x[3] - x[2])), inputs)
    assert found.value[0] == pytest.approx(1.7266e-5, abs=1e-9)
    assert found.u[0] == pytest.approx(1.76e-6, abs=1e-8)


def test_a_function_that_cannot_be_differentiated_is_refused() -> None:
    """No jacobian and a function beyond arithmetic: a refusal that says what to do, not a wrong number."""
    with pytest.raises(UsageError) as refused:
        propagate(lambda x: math.cos(x[0]), [Uncertain(1.0, 0.1)])
    assert refused.value.code == "not-differentiable"


def test_draws_have_the_stated_mean_and_spread() -> None:
    """Each distribution's mean and spread within five standard errors; log-normal stays positive."""
    rng = np.random.default_rng(11)
    inputs = [
        Uncertain(3.0, 0.5),
        rectangular(3.0, 1.0),
        Uncertain(3.0, 1.5, distribution="lognormal"),
        Uncertain(3.0, 0.0),
    ]
    sample = draw(inputs, 200_000, rng)
    for x, row in zip(inputs, sample, strict=True):
        assert row.mean() == pytest.approx(x.value, abs=5 * x.u / math.sqrt(200_000) + 1e-12)
        assert row.std() == pytest.approx(x.u, rel=0.03, abs=1e-12)
    assert sample[2].min() > 0.0 and np.abs(sample[1] - 3.0).max() <= 1.0


def test_dual_numbers_follow_the_rules_of_differentiation() -> None:
    """Sum, product, quotient and power, against derivatives written by hand."""
    x, y = Dual(2.0, {"x": 1.0}), Dual(3.0, {"y": 1.0})
    found = (x**3 * y - 4.0 / y) / (x + 1.0) - (5.0 - x) * np.float64(2.0)
    assert found.value == pytest.approx((24.0 - 4.0 / 3.0) / 3.0 - 6.0)
    top = 24.0 - 4.0 / 3.0
    assert found.partials["x"] == pytest.approx((36.0 * 3.0 - top) / 9.0 + 2.0)
    assert found.partials["y"] == pytest.approx((8.0 + 4.0 / 9.0) / 3.0)
