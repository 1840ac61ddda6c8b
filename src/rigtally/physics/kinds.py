"""The kinds of element: what each needs, in which units, between nodes of which domain."""

from __future__ import annotations

from dataclasses import dataclass, field

TRANSLATION, ROTATION, ELECTRICAL, FLUID, THERMAL = (
    "translation",
    "rotation",
    "electrical",
    "fluid",
    "thermal",
)
SAME = "one domain"  # both ports of one domain, whichever it is


@dataclass(frozen=True)
class Kind:
    """One kind of element.

    Attributes
    ----------
    domains : tuple of str
        One for an element, two (primary, secondary) for a coupler.
    choices : tuple of tuples
        Sets of keys, one of which must be stated whole; "medium" among them needs its `properties`.
    units : mapping of key to unit
    optional : keys that may stand besides
    properties : mapping of the set's place in `choices` to the medium's properties that it uses
    grounded : bool
        The other end is ground by nature (mass, inertia, open tank, heat capacity).
    signed : keys that may be negative
    words : mapping of option key to its allowed words
    """

    domains: tuple[str, ...]
    choices: tuple[tuple[str, ...], ...]
    units: dict[str, str]
    optional: tuple[str, ...] = ()
    properties: dict[int, tuple[str, ...]] = field(default_factory=dict)
    grounded: bool = False
    signed: tuple[str, ...] = ()
    words: dict[str, tuple[str, ...]] = field(default_factory=dict)

    @property
    def coupler(self) -> bool:
        """Two ports."""
        return len(self.domains) == 2


def _one(domain: str, key: str, unit: str, *, grounded: bool = False) -> Kind:
    return Kind((domain,), ((key,),), {key: unit}, grounded=grounded)


_LENGTH = "m"
KINDS: dict[str, Kind] = {
    "mass": _one(TRANSLATION, "mass", "kg", grounded=True),
    "spring": _one(TRANSLATION, "stiffness", "N/m"),
    "damper": _one(TRANSLATION, "damping", "N*s/m"),
    "coil-spring": Kind(
        (TRANSLATION,),
        (("wire", "coil_diameter", "turns", "shear_modulus"),),
        {"wire": _LENGTH, "coil_diameter": _LENGTH, "turns": "", "shear_modulus": "Pa"},
    ),
    "cantilever": Kind(
        (TRANSLATION,),
        (("length", "width", "thickness", "youngs_modulus"),),
        {"length": _LENGTH, "width": _LENGTH, "thickness": _LENGTH, "youngs_modulus": "Pa"},
    ),
    "inertia": Kind(
        (ROTATION,),
        (("inertia",), ("mass", "diameter")),
        {"inertia": "kg*m^2", "mass": "kg", "diameter": _LENGTH},
        grounded=True,
    ),
    "torsion-spring": _one(ROTATION, "stiffness", "N*m/rad"),
    "rotary-damper": _one(ROTATION, "damping", "N*m*s/rad"),
    "torsion-bar": Kind(
        (ROTATION,),
        (("diameter", "length", "shear_modulus"),),
        {"diameter": _LENGTH, "length": _LENGTH, "shear_modulus": "Pa"},
    ),
    "resistor": _one(ELECTRICAL, "resistance", "ohm"),
    "capacitor": _one(ELECTRICAL, "capacitance", "F"),
    "inductor": _one(ELECTRICAL, "inductance", "H"),
    "fluid-resistance": _one(FLUID, "resistance", "Pa*s/m^3"),
    "fluid-inertance": _one(FLUID, "inertance", "Pa*s^2/m^3"),
    "chamber": Kind(
        (FLUID,),
        (("compliance",), ("volume", "medium")),
        {"compliance": "m^3/Pa", "volume": "m^3"},
        properties={1: ("bulk_modulus",)},
    ),
    "open-tank": Kind(
        (FLUID,),
        (("area", "medium"), ("diameter", "medium")),
        {"area": "m^2", "diameter": _LENGTH},
        properties={0: ("density",), 1: ("density",)},
        grounded=True,
    ),
    "laminar-line": Kind(
        (FLUID,),
        (("bore", "length", "medium"),),
        {"bore": _LENGTH, "length": _LENGTH},
        properties={0: ("density", "viscosity")},
        words={"friction": ("oscillating", "steady", "plug")},
    ),
    "orifice": Kind(
        (FLUID,),
        (("area", "discharge_coefficient", "flow", "medium"),),
        {"area": "m^2", "discharge_coefficient": "", "flow": "m^3/s"},
        properties={0: ("density",)},
    ),
    "thermal-resistance": _one(THERMAL, "resistance", "K/W"),
    "heat-capacity": _one(THERMAL, "capacity", "J/K", grounded=True),
    "lever": Kind((TRANSLATION, TRANSLATION), (("ratio",),), {"ratio": ""}, signed=("ratio",)),
    "gear": Kind((ROTATION, ROTATION), (("ratio",),), {"ratio": ""}, signed=("ratio",)),
    "transformer": Kind((SAME, SAME), (("ratio",),), {"ratio": ""}, signed=("ratio",)),
    "rack": Kind((ROTATION, TRANSLATION), (("radius",),), {"radius": _LENGTH}),
    "piston": Kind((FLUID, TRANSLATION), (("area",),), {"area": "m^2"}),
    "bellows": Kind(
        (FLUID, TRANSLATION), (("area",),), {"area": "m^2", "stiffness": "N/m"}, optional=("stiffness",)
    ),
    "motor": Kind((ELECTRICAL, ROTATION), (("constant",),), {"constant": "V*s/rad"}),
}

PROPERTY_UNITS = {
    "density": "kg/m^3",
    "viscosity": "Pa*s",
    "bulk_modulus": "Pa",
    "temperature": "K",
}

DOMAIN_OF = {
    "velocity": TRANSLATION, "displacement": TRANSLATION, "acceleration": TRANSLATION, "force": TRANSLATION,
    "angular velocity": ROTATION, "angle": ROTATION, "angular acceleration": ROTATION, "torque": ROTATION,
    "voltage": ELECTRICAL, "current": ELECTRICAL, "charge": ELECTRICAL,
    "pressure": FLUID, "flow": FLUID, "volume flow": FLUID, "volume": FLUID, "level": FLUID,
    "temperature": THERMAL, "heat flow": THERMAL,
}  # fmt: skip
