"""Each kind of element as primitive equations between its across and through variables.

An element with one port has one equation, a coupler two. They are linear in the port's
across variables v1, v2 (first minus second node) and through variables f1, f2 (into the
first node of the port, through the element, out of the second), with coefficients that
are products of an integer, a symbol of the element and a power of s:

    damper         d·v − f = 0                  spring      k·v − s·f = 0
    mass           m·s·v − f = 0                laminar     v − R·f − I·s·f = 0
    ideal ratio    v2 − n·v1 = 0, f1 + n·f2 = 0
    motor          v1 − K·v2 = 0, f2 + K·f1 = 0
    piston         f1 − A·v2 = 0, f2 + A·v1 = 0

All couplers conserve power: v1·f1 + v2·f2 = 0. Signs are those of the rig file's page.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from rigtally.errors import RigError
from rigtally.physics import geometry
from rigtally.physics.oscillating_line import line_values
from rigtally.physics.rig import Element, Port, Rig

Getter = Callable[[str], Any]
FRICTION_MODEL = "friction model"


@dataclass(frozen=True)
class Symbol:
    """One coefficient of the network, with the way to compute it from the rig's values.

    Attributes
    ----------
    letter, owner : str
        "R" of "impulse line": for the printed formula.
    identity : tuple
        Two symbols of one identity have always the same value (the same formula of the same values).
    compute : callable
        (getter of the element's values by key, context) -> number, array or Dual, in SI.
    """

    letter: str
    owner: str
    identity: tuple[Any, ...]
    compute: Callable[[Getter, Context], Any]
    element: Element | None = None


@dataclass(frozen=True)
class Context:
    """What a symbol may depend on besides the element's own values.

    `omega` is the angular frequency at which oscillating lines are taken (number or Dual),
    `friction` maps a line's name to its friction model (value, relative inertance per relative resistance).
    """

    omega: Any
    friction: Mapping[str, tuple[Any, float]]


@dataclass(frozen=True)
class Term:
    """integer · symbol · s^power of one port quantity ("v1", "f1", "v2", "f2")."""

    quantity: str
    coefficient: int = 1
    symbol: Symbol | None = None
    power: int = 0


@dataclass(frozen=True)
class Lowered:
    """An element as equations Σ terms = 0, one for each port."""

    name: str
    ports: tuple[Port, ...]
    equations: tuple[tuple[Term, ...], ...]
    element: Element


def lower(rig: Rig) -> tuple[Lowered, ...]:
    """Every element of the rig as primitive equations (a bellows gives two)."""
    out: list[Lowered] = []
    for element in rig.elements:
        make = _KINDS.get(element.kind)
        if make is None:
            raise RigError(
                f"kind {element.kind!r} of element {element.name!r} is not known",
                where=rig.file,
                do="choose one of: " + ", ".join(sorted(_KINDS)),
                code="unknown-kind",
            )
        out.extend(make(element))
    return tuple(out)


def _symbol(element: Element, letter: str, formula: Callable[[Getter, Context], Any], word: str) -> Symbol:
    """A symbol whose identity is the formula and the values that go into it."""
    taken = tuple(sorted(element.values.items()))
    oscillating = element.kind == "laminar-line" and element.options.get("friction") not in ("steady", "plug")
    own = (element.name,) if oscillating else ()
    return Symbol(letter, element.name, (word, element.medium, taken, *own), formula, element)


def _one(letter: str, key: str, build: Callable[[Symbol], tuple[Term, ...]]) -> Callable[..., Any]:
    """A kind with one value, or with a geometry that makes it."""

    def make(element: Element) -> list[Lowered]:
        formula, word = _formula_of(element, key)
        symbol = _symbol(element, letter, formula, word)
        return [Lowered(element.name, element.ports, (build(symbol),), element)]

    return make


def _formula_of(element: Element, key: str) -> tuple[Callable[[Getter, Context], Any], str]:
    if key in element.values:
        return (lambda get, _: get(key)), key
    for needed, formula in _GEOMETRY.get(key, []):
        if all(k in element.values for k in needed.split() if k != "medium") and (
            "medium" not in needed or element.medium
        ):
            return formula, f"{key} of {needed}"
    raise RigError(
        f"element {element.name!r} has no {key}",
        where=f"line {element.line}" if element.line else "",
        do=f"state {key}, or its geometry",
        code="missing-value",
    )


_GEOMETRY: dict[str, list[tuple[str, Callable[[Getter, Context], Any]]]] = {
    "stiffness": [
        (
            "wire coil_diameter turns shear_modulus",
            lambda g, _: geometry.coil_spring_rate(
                g("wire"), g("coil_diameter"), g("turns"), g("shear_modulus")
            ),
        ),
        (
            "width thickness length youngs_modulus",
            lambda g, _: geometry.cantilever_rate(
                g("length"), g("width"), g("thickness"), g("youngs_modulus")
            ),
        ),
        (
            "diameter length shear_modulus",
            lambda g, _: geometry.torsion_bar_rate(g("diameter"), g("length"), g("shear_modulus")),
        ),
    ],
    "inertia": [("mass diameter", lambda g, _: geometry.disk_inertia(g("mass"), g("diameter")))],
    "compliance": [
        (
            "area medium",
            lambda g, _: geometry.tank_compliance(g("area"), g("density"), g("gravity")),
        ),
        (
            "diameter medium",
            lambda g, _: geometry.tank_compliance(
                geometry.bore_area(g("diameter")), g("density"), g("gravity")
            ),
        ),
        ("volume medium", lambda g, _: geometry.liquid_compliance(g("volume"), g("bulk_modulus"))),
    ],
    "resistance": [
        (
            "area discharge_coefficient flow medium",
            lambda g, _: geometry.orifice_resistance(
                g("area"), g("discharge_coefficient"), g("density"), g("flow")
            ),
        )
    ],
}


def _conductance(g: Symbol) -> tuple[Term, ...]:
    return Term("v1", 1, g), Term("f1", -1)


def _resistance(r: Symbol) -> tuple[Term, ...]:
    return Term("v1"), Term("f1", -1, r)


def _across_store(c: Symbol) -> tuple[Term, ...]:
    return Term("v1", 1, c, 1), Term("f1", -1)


def _stiffness(k: Symbol) -> tuple[Term, ...]:
    return Term("v1", 1, k), Term("f1", -1, None, 1)


def _inertance(i: Symbol) -> tuple[Term, ...]:
    return Term("v1"), Term("f1", -1, i, 1)


def _laminar_line(element: Element) -> list[Lowered]:
    friction = element.options.get("friction", "oscillating")

    def values(get: Getter, context: Context) -> Any:
        return line_values(
            friction, get("bore"), get("length"), get("density"), get("viscosity"), context.omega
        )

    def resistance(get: Getter, context: Context) -> Any:
        model, _ = context.friction.get(element.name, (1.0, 0.0))
        return values(get, context).resistance * model

    def inertance(get: Getter, context: Context) -> Any:
        model, slope = context.friction.get(element.name, (1.0, 0.0))
        return values(get, context).inertance * (1.0 + (model - 1.0) * slope)

    r = _symbol(element, "R", resistance, "line resistance " + friction)
    i = _symbol(element, "I", inertance, "line inertance " + friction)
    terms = (Term("v1"), Term("f1", -1, r), Term("f1", -1, i, 1))
    return [Lowered(element.name, element.ports, (terms,), element)]


def _ratio(key: str, letter: str) -> Callable[[Element], list[Lowered]]:
    def make(element: Element) -> list[Lowered]:
        n = _symbol(element, letter, lambda get, _: get(key), key)
        across = (Term("v2"), Term("v1", -1, n))
        through = (Term("f1"), Term("f2", 1, n))
        return [Lowered(element.name, element.ports, (across, through), element)]

    return make


def _motor(element: Element) -> list[Lowered]:
    k = _symbol(element, "K", lambda get, _: get("constant"), "constant")
    across = (Term("v1"), Term("v2", -1, k))
    through = (Term("f2"), Term("f1", 1, k))
    return [Lowered(element.name, element.ports, (across, through), element)]


def _piston(element: Element) -> list[Lowered]:
    a = _symbol(element, "A", lambda get, _: get("area"), "area")
    flow = (Term("f1"), Term("v2", -1, a))
    force = (Term("f2"), Term("v1", 1, a))
    out = [Lowered(element.name, element.ports, (flow, force), element)]
    if "stiffness" in element.values:
        k = Symbol(
            "k",
            element.name,
            ("stiffness", "", (("stiffness", element.values["stiffness"]),)),
            lambda get, _: get("stiffness"),
            element,
        )
        own = f"{element.name} (stiffness)"
        out.append(Lowered(own, (element.ports[1],), (_stiffness(k),), element))
    return out


_KINDS: dict[str, Callable[[Element], list[Lowered]]] = {
    "mass": _one("m", "mass", _across_store),
    "spring": _one("k", "stiffness", _stiffness),
    "damper": _one("d", "damping", _conductance),
    "coil-spring": _one("k", "stiffness", _stiffness),
    "cantilever": _one("k", "stiffness", _stiffness),
    "inertia": _one("J", "inertia", _across_store),
    "torsion-spring": _one("k", "stiffness", _stiffness),
    "rotary-damper": _one("d", "damping", _conductance),
    "torsion-bar": _one("k", "stiffness", _stiffness),
    "resistor": _one("R", "resistance", _resistance),
    "capacitor": _one("C", "capacitance", _across_store),
    "inductor": _one("L", "inductance", _inertance),
    "fluid-resistance": _one("R", "resistance", _resistance),
    "fluid-inertance": _one("I", "inertance", _inertance),
    "chamber": _one("C", "compliance", _across_store),
    "open-tank": _one("C", "compliance", _across_store),
    "laminar-line": _laminar_line,
    "orifice": _one("R", "resistance", _resistance),
    "thermal-resistance": _one("R", "resistance", _resistance),
    "heat-capacity": _one("C", "capacity", _across_store),
    "lever": _ratio("ratio", "n"),
    "gear": _ratio("ratio", "n"),
    "transformer": _ratio("ratio", "n"),
    "rack": _ratio("radius", "r"),
    "motor": _motor,
    "piston": _piston,
    "bellows": _piston,
}
