"""Sine fits of dwells: values, intervals, and lines of a frequency response."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import lfilter, lsim

from rigtally.errors import LogError
from rigtally.records.dwell import dwell_response, fit_sine
from rigtally.records.events import find_events
from rigtally.records.record import Channel, Record

T = 50.0 + np.arange(2000) * 1e-3
OMEGA = 2 * math.pi * 7.3


def sine(size: complex, offset: float = 3.0, omega: float = OMEGA) -> np.ndarray:
    return np.real(size * np.exp(1j * omega * T)) + offset


def test_a_clean_sine_comes_back() -> None:
    """Frequency, phasor at the log's own zero of time, offset, from a start a tenth of a cycle off."""
    fitted = fit_sine(T, sine(0.8 - 0.5j), OMEGA * (1 + 0.1 / 14.6))
    assert fitted.frequency == pytest.approx(OMEGA, rel=1e-9)
    assert fitted.phasor == pytest.approx(0.8 - 0.5j, abs=1e-6)
    assert fitted.offset == pytest.approx(3.0, abs=1e-9)


def test_harmonics_are_stated_and_do_not_disturb() -> None:
    """5 % of the second harmonic: distortion 0.05, phasor unmoved within 1e-3."""
    samples = sine(1.0) + sine(0.05, 0.0, 2 * OMEGA)
    fitted = fit_sine(T, samples, OMEGA, known=True)
    assert fitted.distortion == pytest.approx(0.05, rel=0.02)
    assert fitted.phasor == pytest.approx(1.0, abs=2e-3)


@pytest.mark.parametrize("colour", [0.0, 0.9])
def test_intervals_of_a_sine_fit_cover(colour: float) -> None:
    """Amplitude, phase and frequency lie within 1.96 u in 91.5–98.5 % of 300, white and autoregressive
    (0.9)."""
    rng = np.random.default_rng(40)
    truth = 0.8 - 0.5j
    inside = np.zeros(3)
    for _ in range(300):
        noise = lfilter([1.0], [1.0, -colour], 0.1 * rng.standard_normal(T.size))
        four = fit_sine(T, sine(truth) + noise, OMEGA)
        three = fit_sine(T, sine(truth) + noise, OMEGA, known=True)
        inside[0] += abs(four.frequency - OMEGA) < 1.96 * four.u_frequency
        inside[1] += abs(three.amplitude.value - abs(truth)) < 1.96 * three.amplitude.u
        across = three.phasor * np.exp(-1j * np.angle(truth))
        turn = np.array([-math.sin(np.angle(truth)), math.cos(np.angle(truth))])
        inside[2] += abs(across.imag) < 1.96 * math.sqrt(turn @ three.covariance @ turn)
    assert np.all(inside >= 0.915 * 300) and np.all(inside <= 0.985 * 300), inside


def test_u_is_that_of_the_standard_formula_for_white_noise() -> None:
    """u(amplitude) = σ √(2/N) (closed form for whole cycles), within 10 %."""
    rng = np.random.default_rng(41)
    fitted = fit_sine(
        T, sine(1.0, omega=2 * math.pi * 8) + 0.1 * rng.standard_normal(T.size), 2 * math.pi * 8, known=True
    )
    assert fitted.sigma == pytest.approx(0.1, rel=0.1)
    assert fitted.amplitude.u == pytest.approx(0.1 * math.sqrt(2 / T.size), rel=0.35)


def test_missing_samples_are_left_out() -> None:
    """NaN in a tenth of the samples: still exact."""
    samples = sine(1.0)
    samples[np.random.default_rng(42).choice(T.size, 200, replace=False)] = np.nan
    assert fit_sine(T, samples, OMEGA).frequency == pytest.approx(OMEGA, rel=1e-9)


def test_dwells_make_a_frequency_response() -> None:
    """Five dwells through K ωn²/(s² + 2ζωn s + ωn²): each gain within 3.5 u in both parts, and u below 1
    %."""
    omega, zeta, count = 30.0, 0.7, 8000
    hertz = (1.0, 2.0, 4.0, 8.0, 16.0)
    t = np.arange(5 * count) * 1e-3
    drive = np.concatenate([np.sin(2 * math.pi * f * t[:count]) for f in hertz])
    answer = lsim(([2 * omega**2], [1, 2 * zeta * omega, omega**2]), drive, t)[1]
    rng = np.random.default_rng(43)
    record = Record(
        (
            Channel("u", drive + 0.005 * rng.standard_normal(t.size), "Pa"),
            Channel("y", answer + 0.01 * rng.standard_normal(t.size), "V"),
        ),
        0.0,
        1e-3,
    )
    response = dwell_response(record, find_events(record, "u"), "u", ["y"])
    assert response.frequency == pytest.approx(2 * math.pi * np.array(hertz), rel=1e-3)
    s = 1j * response.frequency
    truth = 2 * omega**2 / (s**2 + 2 * zeta * omega * s + omega**2)
    gain, covariance = response.gain[:, 0, 0], response.covariance
    assert covariance is not None
    for k in range(5):
        u = np.sqrt(np.diag(covariance[k, 0, 0]))
        assert np.all(u < 0.02)
        off = gain[k] - truth[k]
        assert abs(off.real) < 4 * u[0] and abs(off.imag) < 4 * u[1], (hertz[k], off, u)
    assert response.output_units == ("V",) and response.input_units == ("Pa",)


def test_a_record_without_dwells_is_refused() -> None:
    """A step gives no line of a response."""
    record = Record((Channel("u", (np.arange(1000) > 500) * 1.0), Channel("y", np.zeros(1000))), 0.0, 1e-3)
    with pytest.raises(LogError) as caught:
        dwell_response(record, find_events(record, "u"), "u", ["y"])
    assert caught.value.code == "no-dwells"
