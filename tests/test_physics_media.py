"""Properties of water and gases against published figures, and their derivatives."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import pytest

from rigtally.errors import RigError
from rigtally.physics.media import GAS_CONSTANT, GASES, property_value

ATMOSPHERE = 101325.0


def rig(kind: str, process: str = "adiabatic") -> Any:
    entry = {"builtin": kind, "process": process, "temperature": "T", "pressure": "p"}
    return SimpleNamespace(media={"m": entry}, file="rig.toml")


def value(
    kind: str, prop: str, temperature: float, pressure: float = ATMOSPHERE, process: str = "adiabatic"
) -> float:
    return property_value(rig(kind, process), "m", prop, {"T": temperature, "p": pressure})[0]


# Figures of a reference library of fluid properties (CoolProp 8.0.0: IAPWS-95 water, Lemmon air) at 101325 Pa.
# 998.207 kg/m³ and 1.0016 mPa s at 20 °C are also IAPWS's own (from memory).
LIBRARY = [
    ("water", "density", 293.15, 998.207, 3e-4),
    ("water", "density", 298.15, 997.048, 3e-4),
    ("water", "viscosity", 293.15, 1.0016e-3, 3e-4),
    ("water", "viscosity", 298.15, 0.8900e-3, 3e-4),
    ("water", "bulk_modulus", 293.15, 2.179e9, 1e-3),
    ("air", "density", 293.15, 1.2046, 5e-4),  # ideal gas: the compressibility factor, 0.9996, is left out
    ("air", "viscosity", 293.15, 1.8206e-5, 3e-4),
]


@pytest.mark.parametrize("kind, prop, temperature, expected, tolerance", LIBRARY)
def test_against_the_library(
    kind: str, prop: str, temperature: float, expected: float, tolerance: float
) -> None:
    """Density, viscosity and compressibility at 20 and 25 °C."""
    assert value(kind, prop, temperature) == pytest.approx(expected, rel=tolerance)


def test_water_viscosity_against_the_full_formulation() -> None:
    """IAPWS R12-08, table 4: 889.7351 µPa s at 298.15 K and 998 kg/m³ (critical term 1).

    The row is at 998 kg/m³, 0.095 % above the density of 0.1 MPa; the viscosity of water changes there by less
    than 1e-4 of itself (table 4 itself: by 62 % over 20 % of density), hence 5e-4.
    """
    assert value("water", "viscosity", 298.15) == pytest.approx(889.7351e-6, rel=5e-4)


def test_gas_is_stiff_by_its_process() -> None:
    """Bulk modulus γp or p (G = V/(γp), V/p); γ of air 1.402 (the library's), the same at any temperature."""
    assert value("air", "bulk_modulus", 290.0) == pytest.approx(1.402 * ATMOSPHERE, rel=3e-4)
    assert value("air", "bulk_modulus", 290.0, process="isothermal") == ATMOSPHERE
    one_litre = 1e-3 / value("air", "bulk_modulus", 290.0, process="isothermal")
    assert one_litre == pytest.approx(9.8692327e-09, rel=1e-6)


def test_ideal_gas() -> None:
    """Density pM/(RT) of each gas; helium at 0 °C and 1 atm: 0.1785 kg/m³ (handbook, from memory)."""
    for name, gas in GASES.items():
        assert value(name, "density", 300.0, 2e5) == pytest.approx(
            2e5 * gas.molar_mass / (GAS_CONSTANT * 300.0)
        )
    assert value("helium", "density", 273.15) == pytest.approx(0.1785, rel=1e-3)


# Viscosities of gases at 300 K and 1 bar, µPa s: handbook values, from memory; Sutherland's law is good to about 2 %.
@pytest.mark.parametrize(
    "kind, micro",
    [("nitrogen", 17.9), ("oxygen", 20.8), ("helium", 20.0), ("argon", 22.9), ("carbon dioxide", 15.0)],
)
def test_gas_viscosities(kind: str, micro: float) -> None:
    """Each gas's viscosity at 300 K, to the quality of Sutherland's law."""
    assert value(kind, "viscosity", 300.0) == pytest.approx(1e-6 * micro, rel=0.02)


@pytest.mark.parametrize("kind", ["water", *GASES])
@pytest.mark.parametrize("prop", ["density", "viscosity", "bulk_modulus"])
@pytest.mark.parametrize("temperature", [278.15, 300.0, 350.0])
def test_derivatives_are_exact(kind: str, prop: str, temperature: float) -> None:
    """Derivatives by temperature and pressure agree with central differences of the values."""
    at = {"T": temperature, "p": 3e5}
    _, slopes = property_value(rig(kind), "m", prop, at)
    for name, step in (("T", 0.01), ("p", 10.0)):
        ends = [property_value(rig(kind), "m", prop, {**at, name: at[name] + d})[0] for d in (step, -step)]
        size = property_value(rig(kind), "m", prop, at)[0] / at[name]
        assert slopes.get(name, 0.0) == pytest.approx(
            (ends[0] - ends[1]) / (2 * step), rel=2e-5, abs=1e-8 * size
        )


def test_what_is_lacking_is_refused() -> None:
    """A property that the formulation does not have is refused with the key to write."""
    with pytest.raises(RigError, match=r"has no heat_capacity.*\[medium\.m\]"):
        property_value(rig("water"), "m", "heat_capacity", {"T": 300.0})
