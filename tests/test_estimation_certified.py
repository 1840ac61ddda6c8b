"""The time road against certified and published answers: tests whose input is not logged, at true stamps.

NIST Statistical Reference Datasets, nonlinear regression (public domain): Misra1a, BoxBOD, Lanczos3, MGH17, with
certified parameters and standard deviations.
"""

from __future__ import annotations

import numpy as np
import pytest

from rigtally.estimation.result import RoadResult
from rigtally.estimation.time_domain import fit_time
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import form

MISRA = (
    [77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0],
    [10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78],
)
BOXBOD = ([1.0, 2.0, 3.0, 5.0, 7.0, 10.0], [109.0, 149.0, 149.0, 191.0, 213.0, 224.0])
LANCZOS = [
    2.5134, 2.0443, 1.6684, 1.3664, 1.1232, 0.9269, 0.7679, 0.6389, 0.5338, 0.4479, 0.3776, 0.3197,
    0.2720, 0.2325, 0.1997, 0.1723, 0.1493, 0.1301, 0.1138, 0.1000, 0.0883, 0.0783, 0.0698, 0.0624,
]  # fmt: skip
MGH17 = [
    0.844, 0.908, 0.932, 0.936, 0.925, 0.908, 0.881, 0.850, 0.818, 0.784, 0.751, 0.718, 0.685, 0.658, 0.628, 0.603,
    0.580, 0.558, 0.538, 0.522, 0.506, 0.490, 0.478, 0.467, 0.457, 0.448, 0.438, 0.431, 0.424, 0.420, 0.414, 0.411,
    0.406,
]  # fmt: skip


def unlogged(
    name: str, stamps: object, values: object, excitation: str, size: float = 1.0, **options: object
) -> RoadResult:
    """Fit a test at stated stamps that begins at zero."""
    time = np.asarray(stamps, dtype=float)
    segment = Segment(
        "certified", np.zeros((1, time.size)), np.asarray(values, dtype=float)[None], np.nan, float(time[0]), time,
        excitation, 0.0, size,
    )  # fmt: skip
    settings = {"rest": excitation != "release", "offset": 0.0, "noise": "white", **options}
    return fit_time(Trial(form(name), (segment,), **settings))


def decay_rates(result: RoadResult, order: int) -> tuple[np.ndarray, np.ndarray]:
    """Real decay rates, slowest first, and u, from the coefficients a0 … of a rational form.

    With A(s) = Π (s + r): dr = Σ (-r)^m da_m / A'(-r).
    """
    place = slice(result.theta.size - order, result.theta.size)
    a = np.append(result.theta[place], 1.0)
    roots = np.sort(-np.roots(a[::-1]).real)
    slopes = np.array([(-r) ** np.arange(order) / np.polyval(np.polyder(a[::-1]), -r) for r in roots])
    u = np.sqrt(np.diag(slopes @ result.covariance[place, place] @ slopes.T))
    return roots, u


@pytest.mark.parametrize(
    ("data", "gain", "u_gain", "rate", "u_rate", "rss"),
    [
        (MISRA, 2.3894212918e2, 2.7070075241, 5.5015643181e-4, 7.2668688436e-6, 1.2455138894e-1),
        (BOXBOD, 2.1380940889e2, 1.2354515176e1, 5.4723748542e-1, 1.0455993237e-1, 1.1680088766e3),
    ],
    ids=["Misra1a", "BoxBOD"],
)
def test_certified_first_order_steps(
    data: tuple[list[float], list[float]], gain: float, u_gain: float, rate: float, u_rate: float, rss: float
) -> None:
    """y = b1 (1 - exp(-b2 x)): certified b1, b2 = 1/τ, both standard deviations and the residual, to 2e-6."""
    found = unlogged("first-order", *data, "step")
    tau, u_tau = found.theta[1], float(np.sqrt(found.covariance[1, 1]))
    assert found.theta[0] == pytest.approx(gain, rel=2e-6)
    assert np.sqrt(found.covariance[0, 0]) == pytest.approx(u_gain, rel=2e-5)
    assert 1 / tau == pytest.approx(rate, rel=2e-6)
    assert u_tau / tau**2 == pytest.approx(u_rate, rel=2e-5)
    assert float(np.sum((found.fitted[0][0] - np.array(data[1])) ** 2)) == pytest.approx(rss, rel=1e-6)
    assert found.dof == len(data[0]) - 2


def test_certified_three_exponentials() -> None:
    """Lanczos3 as the pulse response of a rational-2/3 form: certified rates and standard deviations."""
    found = unlogged("rational-2/3", 0.05 * np.arange(24), LANCZOS, "pulse")
    rates, u = decay_rates(found, 3)
    np.testing.assert_allclose(rates, [9.5498101505e-1, 2.9515951832, 4.9863565084], rtol=2e-5)
    np.testing.assert_allclose(u, [9.7041624475e-2, 1.0766312506e-1, 3.4436403035e-2], rtol=1e-3)


def test_certified_two_exponentials_and_a_level() -> None:
    """MGH17 as a release with an offset: certified rates, standard deviations and level."""
    found = unlogged("rational-0/2", 10.0 * np.arange(33), MGH17, "release", offset="free")
    rates, u = decay_rates(found, 2)
    np.testing.assert_allclose(rates, [1.2867534640e-2, 2.2122699662e-2], rtol=2e-5)
    np.testing.assert_allclose(u, [4.4861358114e-4, 8.9471996575e-4], rtol=1e-3)
    assert found.nuisance["offset of output"] == pytest.approx(3.7541005211e-1, rel=1e-5)
    assert np.isnan(found.theta[0])  # a release has no gain


INDOMETH = (
    [0.25, 0.5, 0.75, 1.0, 1.25, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0],
    [1.50, 0.94, 0.78, 0.48, 0.37, 0.19, 0.12, 0.11, 0.08, 0.07, 0.05],
)
THEOPH = (
    [0.0, 0.25, 0.57, 1.12, 2.02, 3.82, 5.1, 7.03, 9.05, 12.12, 24.37],
    [0.74, 2.84, 6.57, 10.50, 9.66, 8.58, 8.36, 7.47, 6.89, 5.94, 3.28],
)


def test_indomethacin_record() -> None:
    """Measured biexponential decay as a pulse response of second order with a zero.

    Data: R's data set Indometh, subject 1; published fit of A1 exp(-exp(l1) t) + A2 exp(-exp(l2) t) from Pinheiro &
    Bates, Mixed-Effects Models in S and S-PLUS (2000), from memory, reproduced by direct least squares.
    """
    found = unlogged("rational-1/2", *INDOMETH, "pulse")
    rates, u = decay_rates(found, 2)
    np.testing.assert_allclose(np.log(rates), [-1.7878, 0.5794], atol=1e-4)
    np.testing.assert_allclose(u / rates, [0.7871, 0.1247], atol=2e-4)


def test_theophylline_record() -> None:
    """Measured absorption and elimination: an overdamped pulse response (ζ near 3), dose 4.02.

    Data: R's data set Theoph, subject 1; published values lKe, lKa, lCl from the same book, from memory,
    reproduced by direct least squares.
    """
    found = unlogged("rational-0/2", *THEOPH, "pulse", size=4.02)
    rates, u = decay_rates(found, 2)
    np.testing.assert_allclose(np.log(rates), [-2.9196, 0.5752], atol=1e-4)
    np.testing.assert_allclose(u / rates, [0.1709, 0.1728], atol=2e-4)
    second = unlogged("second-order", *THEOPH, "pulse", size=4.02)
    gain, frequency, damping = second.theta
    assert np.log(1 / gain) == pytest.approx(-3.9159, abs=1e-4)
    assert np.sqrt(second.covariance[0, 0]) / gain == pytest.approx(0.1273, abs=2e-4)
    assert frequency == pytest.approx(0.30968, abs=1e-4)
    assert damping == pytest.approx(2.9569, abs=1e-3)
