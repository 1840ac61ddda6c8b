"""[[element]], [medium.x] and [value.x]: the rig's parts and their values, each value once."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from rigtally.physics.kinds import KINDS, PROPERTY_UNITS, Kind
from rigtally.physics.media import BUILT_IN, GASES
from rigtally.physics.rig import GROUND, Element, Port
from rigtally.physics.rig_source import Source, nearest
from rigtally.quantities.uncertain import Uncertain
from rigtally.quantities.units import same_dimension

_PLACE = ("name", "kind", "from", "to", "at", "primary", "secondary", "medium")
_MEDIUM_KEYS = (*PROPERTY_UNITS, "gas", "process")


class Parts:
    """Reads elements and collects the values that they use."""

    def __init__(self, source: Source, settings: Mapping[str, Any]) -> None:
        self.source = source
        self.settings = settings
        self.values: dict[str, Uncertain] = {}
        self.labels: dict[str, tuple[str, str]] = {}
        self.media: dict[str, dict[str, Any]] = {}
        self.stated: dict[str, Any] = source.tree.get("medium", {})
        self.shared: dict[str, Any] = source.tree.get("value", {})
        self.used: set[str] = set()
        self._check_tables()
        for name in ("gravity", "static_pressure", "temperature"):
            if isinstance(settings.get(name), Uncertain):
                self.keep(f"rig.{name}", settings[name], "rig", name)

    def keep(self, name: str, value: Uncertain, owner: str, key: str) -> str:
        """Remember a value under its name."""
        self.values[name] = value
        self.labels[name] = (owner, key)
        return name

    def _check_tables(self) -> None:
        for kind, tables in (("medium", self.stated), ("value", self.shared)):
            if not isinstance(tables, dict) or not all(isinstance(t, dict) for t in tables.values()):
                raise self.source.fault(
                    f"{kind} is not a table with a name",
                    table=kind,
                    do=f"write [{kind}.name]",
                    code="bad-table",
                )
        for name, entry in self.stated.items():
            self.source.only_keys(entry, _MEDIUM_KEYS, table=f"medium.{name}")
            for key in PROPERTY_UNITS:
                if key in entry and not self._is_shared(entry[key]):
                    self._property(f"medium.{name}", key, entry[key])
            if "gas" in entry:
                self.source.one_of(
                    str(entry["gas"]), GASES, table=f"medium.{name}", key="gas", code="unknown-gas"
                )
            if "process" in entry:
                self.source.one_of(
                    str(entry["process"]), ("adiabatic", "isothermal"), table=f"medium.{name}", key="process",
                    code="unknown-process",
                )  # fmt: skip
        for name, entry in self.shared.items():
            if "." in name:
                raise self.source.fault(
                    f"the value's name {name!r} has a point in it", table=f"value.{name}",
                    do="write it with _ instead", code="bad-name",
                )  # fmt: skip
            self.source.only_keys(entry, ("value",), table=f"value.{name}")
            if "value" not in entry:
                raise self.source.fault(
                    "value is missing", table=f"value.{name}", do='write value = "4.00 mm ± 0.05 mm"',
                    code="missing-key",
                )  # fmt: skip

    @staticmethod
    def _is_shared(value: Any) -> bool:
        return isinstance(value, str) and value.strip().startswith("=")

    def elements(self) -> tuple[Element, ...]:
        """Every [[element]] of the file, checked one by one."""
        out: list[Element] = []
        entries = self.source.tree.get("element", [])
        if not isinstance(entries, list) or not all(isinstance(entry, dict) for entry in entries):
            raise self.source.fault(
                "element is not a list of tables", table="element", do="write [[element]]", code="bad-table"
            )
        names: set[str] = set()
        for number, entry in enumerate(entries):
            name = self.source.text_of(entry, "name", table="element", number=number)
            if name in names:
                raise self.source.fault(
                    f"the name {name!r} is given twice", table="element", number=number, name=name,
                    key="name", do="give each element a name of its own", code="doubled-name",
                )  # fmt: skip
            names.add(name)
            out.append(self._element(entry, number, name))
        return tuple(out)

    def check_shared(self) -> None:
        """Refuse a shared value that nothing has used; called when all is read."""
        for name in self.shared:
            if name not in self.used:
                raise self.source.fault(
                    f"the value {name!r} is used nowhere",
                    table=f"value.{name}",
                    do=f'use it, as bore = "= {name}", or take the table out',
                    code="unused-value",
                )

    def _element(self, entry: Mapping[str, Any], number: int, name: str) -> Element:
        at: dict[str, Any] = {"table": "element", "number": number, "name": name}
        word = self.source.text_of(entry, "kind", **at)
        self.source.one_of(word, KINDS, key="kind", code="unknown-kind", **at)
        kind = KINDS[word]
        keys = {key for choice in kind.choices for key in choice} | set(kind.optional) | set(kind.words)
        uses_medium = "medium" in keys
        place = ("primary", "secondary") if kind.coupler else ("from", "to", "at")
        self.source.only_keys(
            entry,
            ["name", "kind", *place, *sorted(keys - {"medium"}), *(["medium"] if uses_medium else [])],
            **at,
        )
        ports = self._ports(entry, kind, at)
        choice, index = self._choice(entry, kind, word, at)
        medium = self.source.text_of(entry, "medium", need=False, **at) if "medium" in choice else ""
        values = {}
        for key in (*choice, *kind.optional):
            if key != "medium" and key in entry:
                values[key] = self._value(entry[key], kind.units[key], name, key, key not in kind.signed, at)
        if medium:
            values.update(self.use_medium(medium, kind.properties.get(index, ()), at))
        options = {}
        for key, words in kind.words.items():
            if key in entry:
                options[key] = self.source.one_of(str(entry[key]), words, key=key, code="unknown-word", **at)
        return Element(name, word, ports, values, options, medium, self.source.lines.table("element", number))

    def _choice(
        self, entry: Mapping[str, Any], kind: Kind, word: str, at: dict[str, Any]
    ) -> tuple[tuple[str, ...], int]:
        """The set of keys that the element states; exactly one of the kind's sets."""
        whole = [k for k, choice in enumerate(kind.choices) if all(key in entry for key in choice)]
        started = {key for choice in kind.choices for key in choice if key in entry}
        if len(kind.choices) > 1 and len(whole) >= 1:
            used = set(kind.choices[whole[0]])
            extra = sorted(started - used)
            if extra:
                ways = " or ".join(" and ".join(choice) for choice in kind.choices)
                raise self.source.fault(
                    f"{extra[0]} stands beside {' and '.join(kind.choices[whole[0]])}", key=extra[0],
                    do=f"state {ways}", code="too-many-values", **at,
                )  # fmt: skip
        if not whole:
            best = max(kind.choices, key=lambda choice: sum(key in entry for key in choice))
            missing = [key for key in best if key not in entry]
            ways = " or ".join(" and ".join(choice) for choice in kind.choices)
            raise self.source.fault(
                f"{missing[0]} is missing", do=f"a {word} needs {ways}", code="missing-key", **at
            )
        return kind.choices[whole[0]], whole[0]

    def _ports(self, entry: Mapping[str, Any], kind: Kind, at: dict[str, Any]) -> tuple[Port, ...]:
        if kind.coupler:
            return tuple(self._port(entry, key, at) for key in ("primary", "secondary"))
        if "at" in entry:
            if "from" in entry or "to" in entry:
                raise self.source.fault(
                    "at stands beside from or to", key="at", code="bad-place",
                    do="at is short for from = …, to = ground; use one", **at,
                )  # fmt: skip
            node = self._node(entry["at"], "at", at)
            if node == GROUND:
                raise self.source.fault(
                    "at is ground", key="at", do="name a node of the rig", code="same-node", **at
                )
            return (Port(node),)
        first = self._node(entry.get("from"), "from", at)
        second = self._node(entry.get("to"), "to", at)
        return self._one_port(first, second, kind, at)

    def _one_port(self, first: str, second: str, kind: Kind, at: dict[str, Any]) -> tuple[Port, ...]:
        if first == second:
            raise self.source.fault(
                f"from and to are the same node {first!r}", key="to", do="name two different nodes",
                code="same-node", **at,
            )  # fmt: skip
        if kind.grounded and GROUND not in (first, second):
            raise self.source.fault(
                "its other end is ground by nature", key="to", do='write at = "…" (or to = "ground")',
                code="needs-ground", **at,
            )  # fmt: skip
        return (Port(first, second),)

    def _port(self, entry: Mapping[str, Any], key: str, at: dict[str, Any]) -> Port:
        place = entry.get(key)
        if isinstance(place, list):
            if len(place) != 2:
                raise self.source.fault(
                    f"{key} has {len(place)} nodes", key=key, do='write a node or a pair ["node", "other"]',
                    code="bad-place", **at,
                )  # fmt: skip
            first, second = (self._node(node, key, at) for node in place)
        else:
            first, second = self._node(place, key, at), GROUND
        if first == second:
            raise self.source.fault(
                f"{key} begins and ends at {first!r}", key=key, do="name two different nodes",
                code="same-node", **at,
            )  # fmt: skip
        return Port(first, second)

    def _node(self, node: Any, key: str, at: dict[str, Any]) -> str:
        if isinstance(node, str) and node.strip():
            return node.strip()
        what = f"{key} is missing" if node is None else f"{key} = {node!r} is not a node"
        raise self.source.fault(what, key=key, do=f'write {key} = "node"', code="missing-node", **at)

    def _value(
        self, written: Any, unit: str, owner: str, key: str, positive: bool, at: dict[str, Any]
    ) -> str:
        """Name of the value: the element's own, or a shared one."""
        if self._is_shared(written):
            return self._shared(written.strip()[1:].strip(), unit, key, positive, at)
        found = self.source.quantity(written, unit, key=key, positive=positive, **at)
        if not positive and found.value == 0.0:
            raise self.source.fault(
                f"{key} = {written!r} must not be 0", key=key, do="write the ratio, negative if it turns",
                code="zero-ratio", **at,
            )  # fmt: skip
        return self.keep(f"{owner}.{key}", found, owner, key)

    def _shared(self, name: str, unit: str, key: str, positive: bool, at: dict[str, Any]) -> str:
        """Name of a shared value, now one of the rig's."""
        found = self._resolved(name, unit, key, positive, at)
        before = self.values.get(name)
        if before is not None and not same_dimension(before.unit, found.unit):
            raise self.source.fault(
                f"{key} takes {name!r}, which is of another dimension elsewhere", key=key,
                do="give it a value of its own", code="wrong-unit", **at,
            )  # fmt: skip
        return self.keep(name, found, name, "value")

    def _resolved(self, name: str, unit: str, key: str, positive: bool, at: dict[str, Any]) -> Uncertain:
        """The quantity of a [value.x]."""
        if name not in self.shared:
            raise self.source.fault(
                f'{key} = "= {name}" names no [value.{name}]', key=key, do=nearest(name, list(self.shared))
                if self.shared else f"write [value.{name}] with value = …", code="unknown-value", **at,
            )  # fmt: skip
        self.used.add(name)
        written = self.shared[name]["value"]
        return self.source.quantity(written, unit, table=f"value.{name}", key="value", positive=positive)

    def _property(self, table: str, prop: str, written: Any) -> Uncertain:
        """A property as a medium's table states it, its own or a shared value."""
        if self._is_shared(written):
            name = written.strip()[1:].strip()
            return self._resolved(name, PROPERTY_UNITS[prop], prop, True, {"table": table})
        return self.source.quantity(written, PROPERTY_UNITS[prop], table=table, key=prop)

    def use_medium(self, name: str, properties: tuple[str, ...], at: dict[str, Any]) -> dict[str, str]:
        """Names of the values of the properties that an element uses; computed ones have none."""
        stated = self.stated.get(name)
        if stated is None and name not in BUILT_IN:
            raise self.source.fault(
                f"there is no [medium.{name}]", key="medium",
                do=nearest(name, [*self.stated, *BUILT_IN]), code="unknown-medium", **at,
            )  # fmt: skip
        stated = stated or {}
        entry = self.media.setdefault(name, {})
        found: dict[str, str] = {}
        for prop in properties:
            if prop in stated:
                found[prop] = self._stated_property(name, prop, stated[prop])
            else:
                self._computed_property(name, prop, stated, entry, at)
        # what no element computes with may still bound its validity (the speed of sound in a line)
        entry["stated"] = {
            prop: self._property(f"medium.{name}", prop, stated[prop])
            for prop in ("density", "viscosity", "bulk_modulus")
            if prop in stated
        }
        return found

    def _stated_property(self, name: str, prop: str, written: Any) -> str:
        """Name of the value: the medium's own, or a shared one."""
        table = f"medium.{name}"
        if self._is_shared(written):
            shared = self._shared(
                written.strip()[1:].strip(), PROPERTY_UNITS[prop], prop, True, {"table": table, "name": ""}
            )
            self.media[name].setdefault("shared", {})[prop] = shared
            return shared
        return self.keep(f"{name}.{prop}", self._property(table, prop, written), name, prop)

    def _computed_property(
        self, name: str, prop: str, stated: Mapping[str, Any], entry: dict[str, Any], at: dict[str, Any]
    ) -> None:
        """A property that a built-in formulation gives; temperature and pressure become inputs."""
        builtin = stated.get("gas", name if name in BUILT_IN else "")
        table = f"medium.{name}"
        where = dict(at, key="medium") if name not in self.stated else {"table": table}
        if not builtin:
            raise self.source.fault(
                f"medium {name!r} has no {prop}", do=f'write {prop} = "… {PROPERTY_UNITS[prop]} ± … %"',
                code="missing-property", **where,
            )  # fmt: skip
        entry["builtin"] = builtin
        entry["process"] = str(stated.get("process", "adiabatic"))
        needs_temperature = not (prop == "bulk_modulus" and builtin in GASES)
        if needs_temperature:
            if "temperature" in stated:
                entry["temperature"] = self._stated_property(name, "temperature", stated["temperature"])
            elif "rig.temperature" in self.values:
                entry["temperature"] = "rig.temperature"
            else:
                raise self.source.fault(
                    f"the {prop} of {name!r} depends on temperature, and none is stated",
                    do='write temperature = "20 °C ± 2 K" in the medium or in [rig]',
                    code="missing-temperature", **where,
                )  # fmt: skip
        if builtin in GASES and prop in ("density", "bulk_modulus"):
            if "rig.static_pressure" not in self.values:
                raise self.source.fault(
                    f"the {prop} of gas {name!r} depends on pressure, and none is stated",
                    do='write static_pressure = "2.0 bar, absolute" in [rig]',
                    code="missing-pressure", **where,
                )  # fmt: skip
            entry["pressure"] = "rig.static_pressure"
        elif builtin in GASES and "rig.static_pressure" in self.values:
            entry["pressure"] = "rig.static_pressure"
