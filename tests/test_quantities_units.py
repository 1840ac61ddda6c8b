"""Units as they are written at the bench: their factor to SI, their SI-coherent text, their name in words."""

from __future__ import annotations

import time

import pytest

from rigtally.errors import UsageError
from rigtally.quantities.units import dimension, registry, same_dimension, unit

# factors by their definitions (inch 25.4 mm, pound 0.45359237 kg and 9.80665 m/s², bar 1e5 Pa: exact)
WRITTEN = [
    ("mV/kPa", "V/Pa", 1e-6), ("V/Pa", "V/Pa", 1.0), ("m^3/Pa", "m^3/Pa", 1.0), ("kPa*s/m^3", "Pa*s/m^3", 1e3),
    ("Pa*s^2/m^3", "Pa*s^2/m^3", 1.0), ("L/min", "m^3/s", 1e-3 / 60), ("psi", "Pa", 0.45359237 * 9.80665 / 0.0254**2),
    ("bar(g)", "Pa", 1e5), ("N/mm", "N/m", 1e3), ("mm/N", "m/N", 1e-3), ("kohm", "ohm", 1e3), ("µF", "F", 1e-6),
    ("Ω", "ohm", 1.0), ("kg·m²", "kg*m^2", 1.0), ("m⁻²", "1/m^2", 1.0), ("m/s²", "m/s^2", 1.0), ("g", "kg", 1e-3),
    ("pC/N", "C/N", 1e-12), ("mA/kPa", "A/Pa", 1e-6), ("V/K", "V/K", 1.0), ("K/W", "K/W", 1.0), ("%", "", 0.01),
    ("rpm", "rad/s", 2 * 3.141592653589793 / 60), ("Hz", "Hz", 1.0), ("1/s", "1/s", 1.0), ("V/Hz^0.5", "V/Hz^0.5", 1.0),
    ("Nm", "N*m", 1.0), ("mNm", "N*m", 1e-3), ("kNm", "N*m", 1e3), ("nm", "m", 1e-9), ("mN", "N", 1e-3),
    ("", "", 1.0), ("-", "", 1.0), ("cSt", "m^2/s", 1e-6), ("lbf/in", "N/m", 0.45359237 * 9.80665 / 0.0254),
]  # fmt: skip


@pytest.mark.parametrize("text, si, factor", WRITTEN, ids=[w[0] or "none" for w in WRITTEN])
def test_written_unit(text: str, si: str, factor: float) -> None:
    """Factor and SI-coherent text; the text itself has the factor 1 and the same dimension."""
    found = unit(text)
    assert (found.si, found.offset) == (si, 0.0)
    assert found.factor == pytest.approx(factor, rel=1e-12)
    assert unit(found.si).factor == 1.0
    assert same_dimension(text, found.si)


@pytest.mark.parametrize(
    "text", ["kN", "kPa", "mbar", "mV", "mA", "kHz", "ms", "mm", "rad/s", "m/s", "Hz", "bar"]
)
def test_common_units_are_those_of_the_registry(text: str) -> None:
    """What is answered without the registry is what the registry says."""
    units = registry()
    assert unit(text).factor == pytest.approx(units.Quantity(1.0, text).to_base_units().magnitude, rel=1e-15)
    assert units.Unit(text).dimensionality == units.Unit(unit(text).si).dimensionality


def test_temperatures_have_an_offset() -> None:
    """°C and °F as readings, by definition."""
    celsius, fahrenheit = unit("°C"), unit("°F")
    assert (celsius.factor, celsius.offset, celsius.si) == (1.0, 273.15, "K")
    assert 212.0 * fahrenheit.factor + fahrenheit.offset == pytest.approx(373.15, abs=1e-9)


@pytest.mark.parametrize("text", ["bar(a)", "bar(g)", "psig", "mbar (d)", "kPa(a)"])
def test_pressures_carry_their_reference(text: str) -> None:
    """(a), (g), (d): kept beside the unit."""
    found = unit(text)
    assert found.si == "Pa"
    assert found.reference == text.strip(")")[-1]
    assert dimension(text) == "a pressure"


@pytest.mark.parametrize(
    "text",
    ["9**9**9**9", "9**999", "m**9**9**9", "9^9^9^9^9", "(" * 200, "m" * 500, "bogus", "m)", "__class__"],
)
def test_no_text_stops_the_program(text: str) -> None:
    """What is no unit is refused at once, however large the number in it would be."""
    began = time.perf_counter()
    with pytest.raises(UsageError) as caught:
        unit(text)
    assert caught.value.code == "unknown-unit"
    assert time.perf_counter() - began < 5.0


@pytest.mark.parametrize(
    "text, words",
    [("mm", "a length"), ("V", "a voltage"),
     ("ohm", "an electrical resistance"), ("F", "a capacitance"), ("H", "an inductance"),
     ("kPa", "a pressure"), ("Nm", "a torque"), ("N/m", "a stiffness"), ("L/min", "a volume flow"),
     ("kg*m^2", "a moment of inertia"),
     ("", "a plain number")],
)  # fmt: skip
def test_dimensions_in_words(text: str, words: str) -> None:
    """The kind of quantity, for messages."""
    assert dimension(text) == words
