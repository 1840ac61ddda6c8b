"""Properties of media: stated by the user, or from published formulations of water and gases.

`property_value(rig, medium, property, values)` gives a property that the rig file does not state itself,
with its derivative by the rig's values it depends on (temperature, pressure).

Sources, all from memory, checked in the tests against IAPWS figures and a reference library's values: water
density and compressibility, Kell, J. Chem. Eng. Data 20 (1975) 97, at atmospheric pressure; water viscosity,
IAPWS R12-08, the short formula at 0.1 MPa; viscosity of air, Lemmon & Jacobsen, Int. J. Thermophys. 25 (2004)
21 (dilute gas, two terms linear in density); other gases, Sutherland's law; density by the ideal gas law
(for air at 20 °C and 1 atm 0.04 % below the real one).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from rigtally.errors import RigError
from rigtally.physics.rig import Rig
from rigtally.quantities.dual import Dual, partials_of, value_of

GAS_CONSTANT = 8.314462618  # J/(mol K), exact to the digits shown since 2019
ZERO_CELSIUS = 273.15


@dataclass(frozen=True)
class Gas:
    """Molar mass kg/mol, ratio of heat capacities, Sutherland: viscosity Pa s at T0, T0 and S in K."""

    molar_mass: float
    heat_capacity_ratio: float
    viscosity: float
    at: float
    sutherland: float


# molar masses (air: dry, with 0.04 % carbon dioxide), heat capacity ratios (20 °C, 1 bar), Sutherland constants:
# handbook values, from memory
GASES = {
    "air": Gas(0.0289655, 1.402, 1.716e-5, 273.15, 110.4),
    "nitrogen": Gas(0.0280134, 1.401, 1.663e-5, 273.15, 106.7),
    "oxygen": Gas(0.0319988, 1.397, 1.919e-5, 273.15, 138.9),
    "helium": Gas(0.0040026, 1.667, 1.87e-5, 273.15, 79.4),
    "argon": Gas(0.039948, 1.670, 2.125e-5, 273.15, 144.4),
    "carbon dioxide": Gas(0.0440095, 1.294, 1.370e-5, 273.15, 222.2),
}
BUILT_IN = ("water", *GASES)


def property_value(
    rig: Rig, medium: str, prop: str, values: Mapping[str, float]
) -> tuple[float, dict[str, float]]:
    """A property of a built-in medium and its derivatives by the rig's values.

    Parameters
    ----------
    rig : Rig
        `rig.media[medium]` says which formulation, and the names of its temperature and pressure.
    medium, prop : str
        "density", "viscosity" or "bulk_modulus".
    values : mapping of value name to SI value

    Raises
    ------
    RigError
        code "missing-property": the formulation lacks it.
    """
    what = rig.media[medium]
    kind = str(what.get("builtin", ""))
    temperature = _seed(what.get("temperature"), values)
    if kind == "water":
        found = _WATER.get(prop)
        if found is not None and temperature is not None:
            return _split(found(temperature))
    elif kind in GASES:
        pressure = _seed(what.get("pressure"), values)
        result = _gas(GASES[kind], kind, str(what.get("process", "adiabatic")), prop, temperature, pressure)
        if result is not None:
            return _split(result)
    raise RigError(
        f"medium {medium!r} has no {prop}",
        where=rig.file,
        do=f'state it: {prop} = "…" in [medium.{medium}]',
        code="missing-property",
    )


def _seed(name: object, values: Mapping[str, float]) -> Dual | None:
    if not isinstance(name, str) or name not in values:
        return None
    return Dual(float(values[name]), {name: 1.0})


def _split(found: Dual | float) -> tuple[float, dict[str, float]]:
    return float(value_of(found)), {name: float(slope) for name, slope in partials_of(found).items()}


def _polynomial(coefficients: tuple[float, ...], x: Dual) -> Dual:
    out = Dual(0.0)
    for c in reversed(coefficients):
        out = out * x + c
    return out


def water_density(temperature: Dual) -> Dual:
    """Kell (1975), kg/m³ at atmospheric pressure, 0 to 100 °C."""
    t = temperature - ZERO_CELSIUS
    top = (999.83952, 16.945176, -7.9870401e-3, -46.170461e-6, 105.56302e-9, -280.54253e-12)
    return _polynomial(top, t) / (1.0 + 16.879850e-3 * t)


def water_bulk_modulus(temperature: Dual) -> Dual:
    """Isothermal, Pa: the inverse of Kell's (1975) compressibility at atmospheric pressure."""
    t = temperature - ZERO_CELSIUS
    top = (50.88630, 0.7171582, 0.7819867e-3, 31.62214e-6, -0.1323594e-6, 0.6345750e-9)
    return (1.0 + 21.65928e-3 * t) / (_polynomial(top, t) * 1e-11)


def water_viscosity(temperature: Dual) -> Dual:
    """IAPWS R12-08 short formula at 0.1 MPa, Pa s, 253 to 383 K."""
    x = temperature / 300.0
    terms = ((280.68, -1.9), (511.45, -7.7), (61.131, -19.6), (0.45903, -40.0))
    out = Dual(0.0)
    for size, power in terms:
        out = out + 1e-6 * size * x.scaled(x.value**power, power * x.value ** (power - 1.0))
    return out


_WATER: dict[str, Callable[[Dual], Dual]] = {
    "density": water_density,
    "bulk_modulus": water_bulk_modulus,
    "viscosity": water_viscosity,
}


def air_viscosity(temperature: Dual, density: Dual | float) -> Dual:
    """Lemmon & Jacobsen (2004), Pa s: dilute gas, and the terms linear in density."""
    t = temperature
    star = t / 103.3
    log = star.scaled(math.log(star.value), 1.0 / star.value)
    exponent = _polynomial((0.431, -0.4623, 0.08406, 0.005341, -0.00331), log)
    omega = exponent.scaled(math.exp(exponent.value), math.exp(exponent.value))
    root = (28.9586 * t).scaled(math.sqrt(28.9586 * t.value), 0.5 / math.sqrt(28.9586 * t.value))
    dilute = 0.0266958 * root / (0.360**2 * omega)
    tau = 132.6312 / t
    delta = density / (0.0289586 * 10447.7)
    first = 10.72 * tau.scaled(tau.value**0.2, 0.2 * tau.value**-0.8)
    second = -8.876 * tau.scaled(tau.value**0.6, 0.6 * tau.value**-0.4)
    return 1e-6 * (dilute + (first + second) * delta)


def _gas(
    gas: Gas, name: str, process: str, prop: str, temperature: Dual | None, pressure: Dual | None
) -> Dual | None:
    """Density, viscosity or bulk modulus of a gas; None where temperature or pressure is missing."""
    if prop == "bulk_modulus" and pressure is not None:
        return pressure * (gas.heat_capacity_ratio if process == "adiabatic" else 1.0)
    if temperature is None:
        return None
    density = pressure * gas.molar_mass / (GAS_CONSTANT * temperature) if pressure is not None else None
    if prop == "density":
        return density
    if prop == "viscosity":
        if name == "air":
            return air_viscosity(temperature, density if density is not None else 0.0)
        x = temperature / gas.at
        power = x.scaled(x.value**1.5, 1.5 * math.sqrt(x.value))
        return gas.viscosity * power * (gas.at + gas.sutherland) / (temperature + gas.sutherland)
    return None
