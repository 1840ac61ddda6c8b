"""Handbook formulas: element values from dimensions and materials.

Each takes plain numbers, arrays, or `Dual` numbers (exact derivatives), all in SI.
"""

from __future__ import annotations

import math
from typing import Any


def bore_area(bore: Any) -> Any:
    """π d²/4, m²."""
    return bore**2 * (math.pi / 4.0)


def poiseuille_resistance(bore: Any, length: Any, viscosity: Any) -> Any:
    """128 μ l/(π d⁴), Pa s/m³: steady laminar flow in a round bore (Hagen-Poiseuille)."""
    return viscosity * length * (128.0 / math.pi) / bore**4


def plug_inertance(bore: Any, length: Any, density: Any) -> Any:
    """ρ l/A, Pa s²/m³: all of the fluid moves as one plug."""
    return density * length / bore_area(bore)


def coil_spring_rate(wire: Any, coil_diameter: Any, turns: Any, shear_modulus: Any) -> Any:
    """G d⁴/(8 D³ n), N/m: close-coiled helical spring of round wire (spring handbooks).

    `coil_diameter` is the mean diameter, `turns` the active ones; no curvature correction.
    """
    return shear_modulus * wire**4 / (coil_diameter**3 * turns * 8.0)


def cantilever_rate(length: Any, width: Any, thickness: Any, youngs_modulus: Any) -> Any:
    """E w t³/(4 l³), N/m: clamped beam of rectangular section, loaded at its end (beam tables)."""
    return youngs_modulus * width * thickness**3 / (length**3 * 4.0)


def torsion_bar_rate(diameter: Any, length: Any, shear_modulus: Any) -> Any:
    """π G d⁴/(32 l), N m/rad: round bar in torsion (beam tables)."""
    return shear_modulus * diameter**4 * (math.pi / 32.0) / length


def disk_inertia(mass: Any, diameter: Any) -> Any:
    """m d²/8, kg m²: solid disk about its axis."""
    return mass * diameter**2 / 8.0


def tank_compliance(area: Any, density: Any, gravity: Any) -> Any:
    """A/(ρ g), m³/Pa: open tank with upright walls."""
    return area / (density * gravity)


def liquid_compliance(volume: Any, bulk_modulus: Any) -> Any:
    """V/K, m³/Pa: a rigid chamber full of liquid, or of gas with K = γ p or p."""
    return volume / bulk_modulus


def orifice_resistance(area: Any, discharge_coefficient: Any, density: Any, flow: Any) -> Any:
    """ρ |Q|/(Cd A)², Pa s/m³: slope of Δp = ρ/2 (Q/(Cd A))² at the working flow."""
    working = -flow if _value(flow) < 0 else flow
    return density * working / (discharge_coefficient * area) ** 2


def _value(number: Any) -> float:
    value = getattr(number, "value", number)
    return float(value if not hasattr(value, "shape") or value.shape == () else value.flat[0])
