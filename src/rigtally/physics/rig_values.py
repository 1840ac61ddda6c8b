"""The rig's values as inputs: which there are, and what the network's symbols are worth, with derivatives."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.physics.elements import FRICTION_MODEL, Context, Symbol
from rigtally.physics.rig import Element, Rig
from rigtally.quantities.dual import Dual, partials_of, value_of
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
STANDARD_GRAVITY = 9.80665  # m/s², exact by definition
OMEGA = "ω of the lines"


@dataclass(frozen=True)
class FrictionModel:
    """The model uncertainty of one oscillating line: a factor on its resistance, nominally 1.

    `half_width` is half the relative spread of the resistance between 0.5 and 2 times the
    frequency at which the line is taken; `inertance_slope` is the relative change of the
    inertance per relative change of the resistance over the same span.
    """

    half_width: float
    inertance_slope: float


class RigValues:
    """Names, nominal values and symbol values of one rig."""

    def __init__(self, rig: Rig, symbols: Sequence[Symbol]) -> None:
        self.rig = rig
        self.symbols = tuple(symbols)
        self.friction: dict[str, FrictionModel] = {}
        self._drawn: dict[tuple[str, str], tuple[list[Array], Array]] = {}
        self.names: tuple[str, ...] = ()
        self.names = self._used()

    def _used(self) -> tuple[str, ...]:
        """Names of the rig's values that the symbols depend on, in the rig's order."""
        seen: set[str] = set()
        seeds = {name: Dual(u.value, {name: 1.0}) for name, u in self.rig.values.items()}
        for symbol in self.symbols:
            found = symbol.compute(self._getter(symbol, seeds), Context(1.0, {}))
            seen |= set(partials_of(found))
        return tuple(name for name in self.rig.values if name in seen)

    @property
    def oscillating(self) -> tuple[Element, ...]:
        """Lines taken at a frequency of the rig."""
        owners = {s.owner for s in self.symbols}
        return tuple(
            e
            for e in self.rig.elements
            if e.kind == "laminar-line"
            and e.options.get("friction", "oscillating") == "oscillating"
            and e.name in owners
        )

    @property
    def input_names(self) -> tuple[str, ...]:
        """The rig's values, then the friction models of its lines."""
        return (*self.names, *(f"{name}.{FRICTION_MODEL}" for name in self.friction))

    @property
    def inputs(self) -> tuple[Uncertain, ...]:
        """Those values with their uncertainty."""
        models = tuple(
            Uncertain(1.0, f.half_width / math.sqrt(3.0), "", distribution="rectangular")
            for f in self.friction.values()
        )
        return (*(self.rig.values[name] for name in self.names), *models)

    @property
    def nominal(self) -> Array:
        """(v,) nominal values."""
        return np.array([u.value for u in self.inputs])

    def label(self, name: str) -> tuple[str, str]:
        """(owner, key) of a value, for the budget."""
        if name in self.rig.labels:
            owner, key = self.rig.labels[name]
            return owner, key
        owner, _, key = name.rpartition(".")
        return owner, key

    def symbol_values(self, values: Array, omega: Any) -> Array:
        """(…, P) symbol values at (…, v) values, the lines taken at omega (…)."""
        plain = values.tolist() if values.ndim == 1 else np.moveaxis(values, -1, 0)
        named = dict(zip(self.input_names, plain, strict=True))
        context = self._context(named, omega)
        found = [s.compute(self._getter(s, named), context) for s in self.symbols]
        if values.ndim == 1:
            return np.array([float(value_of(x)) for x in found])
        return np.stack([np.broadcast_to(value_of(x), values.shape[:-1]) for x in found], axis=-1)

    def symbol_derivatives(self, values: Array, omega: float) -> tuple[Array, Array, Array]:
        """(P,) symbol values, (P, v) derivatives by the values, (P,) derivatives by omega."""
        names = self.input_names
        named = {name: Dual(float(x), {name: 1.0}) for name, x in zip(names, values, strict=True)}
        context = self._context(named, Dual(omega, {OMEGA: 1.0}))
        place = {name: k for k, name in enumerate(names)}
        x = np.zeros(len(self.symbols))
        by = np.zeros((len(self.symbols), len(names)))
        by_omega = np.zeros(len(self.symbols))
        for p, symbol in enumerate(self.symbols):
            found = symbol.compute(self._getter(symbol, named), context)
            x[p] = value_of(found)
            for name, slope in partials_of(found).items():
                if name == OMEGA:
                    by_omega[p] = slope
                else:
                    by[p, place[name]] = slope
        return x, by, by_omega

    def element_value(self, element: Element, key: str) -> float:
        """A nominal value of an element or of its medium."""
        nominal = {name: u.value for name, u in self.rig.values.items()}
        probe = Symbol("", element.name, (), lambda get, _: get(key), element)
        return float(value_of(probe.compute(self._getter(probe, nominal), Context(1.0, {}))))

    def _context(self, named: Mapping[str, Any], omega: Any) -> Context:
        return Context(
            omega,
            {
                name: (named[f"{name}.{FRICTION_MODEL}"], model.inertance_slope)
                for name, model in self.friction.items()
            },
        )

    def _getter(self, symbol: Symbol, named: Mapping[str, Any]) -> Any:
        element = symbol.element

        def get(key: str) -> Any:
            if element is not None and key in element.values:
                return self._named(named, element.values[key])
            if key == "gravity":
                return self._gravity(named)
            medium = element.medium if element is not None else ""
            stated = self.rig.media.get(medium, {}).get("shared", {}).get(key, f"{medium}.{key}")
            if stated in self.rig.values:
                return self._named(named, stated)
            return self._property(medium, key, named)

        return get

    def _named(self, named: Mapping[str, Any], name: str) -> Any:
        if name in named:
            return named[name]
        return self.rig.values[name].value

    def _gravity(self, named: Mapping[str, Any]) -> Any:
        if "rig.gravity" in self.rig.values:
            return self._named(named, "rig.gravity")
        stated = self.rig.settings.get("gravity")
        return stated.value if isinstance(stated, Uncertain) else (stated or STANDARD_GRAVITY)

    def _property(self, medium: str, prop: str, named: Mapping[str, Any]) -> Any:
        """A property that follows from others (a built-in medium at its temperature, a gas)."""
        from rigtally.physics.media import property_value

        if medium not in self.rig.media:
            raise RigError(
                f"{prop} is not stated, and there is no medium {medium!r}",
                where=self.rig.file,
                do=f"state {prop} of the medium",
                code="missing-value",
            )
        current = {name: value_of(self._named(named, name)) for name in self.rig.values}
        stated = self.rig.media[medium].get("stated", {}) if medium in self.rig.media else {}
        if prop in stated:
            return stated[prop].value
        if any(np.size(x) > 1 for x in current.values()):
            return self._drawn_property(medium, prop, current)
        value, slopes = property_value(self.rig, medium, prop, {n: float(x) for n, x in current.items()})
        partials: dict[str, Any] = {}
        for name, slope in slopes.items():
            for source, inner in partials_of(named.get(name, 0.0)).items():
                partials[source] = partials.get(source, 0.0) + slope * inner
        return Dual(value, partials) if partials else value

    def _drawn_property(self, medium: str, prop: str, current: Mapping[str, Any]) -> Array:
        """A property at many draws; kept while the draws of what it follows from stay the same."""
        from rigtally.physics.media import property_value

        sources = [n for n in self.rig.media[medium].values() if isinstance(n, str) and n in current]
        columns = [np.asarray(current[n], dtype=float) for n in sources]
        kept = self._drawn.get((medium, prop))
        if kept is not None and all(
            a is b or np.array_equal(a, b) for a, b in zip(kept[0], columns, strict=True)
        ):
            return kept[1]
        size = max((c.size for c in columns), default=1)
        rows = np.stack([np.broadcast_to(c, (size,)) for c in columns]) if columns else np.zeros((0, size))
        nominal = {name: u.value for name, u in self.rig.values.items()}
        found = np.array(
            [
                property_value(self.rig, medium, prop, {**nominal, **dict(zip(sources, row, strict=True))})[0]
                for row in rows.T.tolist()
            ]
        )
        self._drawn[medium, prop] = (columns, found)
        return found
