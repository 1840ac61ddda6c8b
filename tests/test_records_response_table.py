"""A frequency response as a table: three ways to write a gain, units that must be stated, uncertainties."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from rigtally.errors import RigtallyError
from rigtally.records.record import Response

HERTZ = np.array([0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0])
GAIN = 2.5e-3 / (1.0 - (HERTZ / 12.0) ** 2 + 0.4j * HERTZ / 12.0)
Write = Callable[..., Path]


@pytest.fixture
def write(tmp_path: Path) -> Write:
    def to(heading: str, *columns: np.ndarray) -> Path:
        path = tmp_path / "response.csv"
        rows = "\n".join(",".join(f"{cell:.12g}" for cell in row) for row in zip(*columns, strict=True))
        path.write_text(f"{heading}\n{rows}\n", encoding="utf-8")
        return path

    return to


def read(path: Path, **options: object) -> Response:
    found = rt.read(path, **options)  # type: ignore[arg-type]
    assert isinstance(found, Response)
    return found


MAGNITUDE, DEGREES = np.abs(GAIN), np.degrees(np.angle(GAIN))


@pytest.mark.parametrize(
    ("heading", "columns"),
    [
        ("f [Hz],magnitude [V/kPa],phase [deg]", (HERTZ, MAGNITUDE * 1e3, DEGREES)),
        ("frequency [kHz],gain [mV/kPa],phase [rad]", (HERTZ / 1e3, MAGNITUDE * 1e6, np.angle(GAIN))),
        ("omega [rad/s],real [V/Pa],imag [V/Pa]", (2 * np.pi * HERTZ, GAIN.real, GAIN.imag)),
        ("f [Hz],gain [dB re 1 V/Pa],phase [deg]", (HERTZ, 20 * np.log10(MAGNITUDE), DEGREES)),
        ("Frequency (Hz),Mag (V/Pa),Phase (°)", (HERTZ, MAGNITUDE, DEGREES)),
        # turns of the phase do not matter to a complex gain
        ("f [Hz],magnitude [V/Pa],phase [deg]", (HERTZ, MAGNITUDE, DEGREES - 720.0)),
        # nor does the order of the lines
        ("f [Hz],magnitude [V/Pa],phase [deg]", (HERTZ[::-1], MAGNITUDE[::-1], DEGREES[::-1])),
    ],
)
def test_every_way_to_write_a_gain(heading: str, columns: tuple[np.ndarray, ...], write: Write) -> None:
    """Magnitude, dB and phase, real and imaginary: one complex gain in SI units over rad/s."""
    found = read(write(heading, *columns))
    np.testing.assert_allclose(found.frequency, 2 * np.pi * HERTZ, rtol=1e-11)
    np.testing.assert_allclose(found.gain[:, 0, 0], GAIN, rtol=1e-9)
    assert (found.output_units, found.input_units) == (("V",), ("Pa",))
    assert not found.magnitude_only
    assert "frequency response" in found.provenance.how_read[1]


def test_magnitude_alone_is_flagged(write: Write) -> None:
    """Without a phase the gain is |G|, and says so; the imaginary part's variance is unknown, not zero."""
    found = read(write("f [Hz],magnitude [-],u(magnitude)", HERTZ, MAGNITUDE, 0.01 * MAGNITUDE))
    assert found.magnitude_only
    np.testing.assert_allclose(found.gain[:, 0, 0], MAGNITUDE)
    assert found.covariance is not None
    np.testing.assert_allclose(found.covariance[:, 0, 0, 0, 0], (0.01 * MAGNITUDE) ** 2)
    assert np.isnan(found.covariance[:, 0, 0, 1, 1]).all()


@pytest.mark.parametrize("level", [False, True], ids=["ratio", "dB"])
def test_uncertainties_become_a_covariance(level: bool, write: Write) -> None:
    """u of magnitude (or level) and phase give the covariance that 200 000 draws give (first order)."""
    u_relative, u_phase = 0.004, 0.006
    magnitude = 20 * np.log10(MAGNITUDE) if level else MAGNITUDE
    u_magnitude = 20 / np.log(10) * u_relative * np.ones(7) if level else u_relative * MAGNITUDE
    heading = f"f [Hz],magnitude [{'dB' if level else '-'}],phase [deg],u_magnitude,u_phase,coherence"
    path = write(
        heading, HERTZ, magnitude, DEGREES, u_magnitude, np.full(7, np.degrees(u_phase)), np.full(7, 0.98)
    )
    found = read(path)
    rng = np.random.default_rng(8)
    draws = (
        MAGNITUDE * (1 + u_relative * rng.normal(size=(200_000, 7)))
        * np.exp(1j * (np.angle(GAIN) + u_phase * rng.normal(size=(200_000, 7))))
    )  # fmt: skip
    for k in range(7):
        expected = np.cov(draws[:, k].real, draws[:, k].imag)
        scale = np.trace(expected)
        np.testing.assert_allclose(found.covariance[k, 0, 0], expected, atol=0.012 * scale)
    np.testing.assert_array_equal(found.coherence, np.full(7, 0.98))


def test_uncertainty_of_real_and_imaginary_part(write: Write) -> None:
    """Their squares stand on the diagonal, in SI units."""
    found = read(
        write(
            "f [Hz],real [V/kPa],imag [V/kPa],u(real),u(imag)", HERTZ, GAIN.real, GAIN.imag, HERTZ, 2 * HERTZ
        )
    )
    np.testing.assert_allclose(found.covariance[:, 0, 0, 1, 1], (2e-3 * HERTZ) ** 2)
    np.testing.assert_allclose(found.covariance[:, 0, 0, 0, 1], 0.0)


@pytest.mark.parametrize(
    ("heading", "code", "unit"),
    [
        ("f,magnitude [V/Pa],phase [deg]", "no-unit", {"f": "Hz"}),
        ("f [Hz],magnitude,phase [deg]", "no-unit", {"magnitude": "V/Pa"}),
        ("f [Hz],magnitude [V/Pa],phase", "no-unit", {"phase": "deg"}),
        ("f [s],magnitude [V/Pa],phase [deg]", "unit-mismatch", {"f": "Hz"}),
        ("f [Hz],magnitude [V/Pa],phase [m]", "unit-mismatch", {"phase": "deg"}),
    ],
)
def test_a_unit_is_never_guessed(heading: str, code: str, unit: dict[str, str], write: Write) -> None:
    """Hz or rad/s, ratio or dB, degrees or radians: refused unless stated, read when stated."""
    path = write(heading, HERTZ, MAGNITUDE, DEGREES)
    with pytest.raises(RigtallyError) as refusal:
        rt.read(path)
    assert refusal.value.code == code
    np.testing.assert_allclose(read(path, units=unit).gain[:, 0, 0], GAIN, rtol=1e-9)


def test_what_makes_no_response_is_refused(write: Write) -> None:
    """Expanded uncertainties, doubled and negative frequencies, negative magnitudes."""
    for heading, columns, code in (
        ("f [Hz],magnitude [-],U(magnitude)", (HERTZ, MAGNITUDE, MAGNITUDE), "expanded-uncertainty"),
        ("f [Hz],magnitude [-]", (np.round(HERTZ), MAGNITUDE), None),
        ("f [Hz],magnitude [-]", (np.floor(HERTZ / 3) + 0.5, MAGNITUDE), "bad-frequency"),
        ("f [Hz],magnitude [-]", (-HERTZ, MAGNITUDE), "bad-frequency"),
        ("f [Hz],magnitude [-]", (HERTZ, -MAGNITUDE), "bad-magnitude"),
    ):
        path = write(heading, *columns)
        if code is None:
            assert read(path).magnitude_only
            continue
        with pytest.raises(RigtallyError) as refusal:
            rt.read(path)
        assert refusal.value.code == code


def test_a_record_with_a_frequency_channel_stays_a_record(write: Write) -> None:
    """A speed log with a column named frequency is no response: the time stands first."""
    found = rt.read(write("t [s],frequency [Hz],gain [V]", HERTZ, HERTZ, HERTZ))
    assert not isinstance(found, Response)
    assert found.names == ("frequency", "gain")
