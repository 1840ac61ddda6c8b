"""Checked rigs made by hand, for tests of the physics without a file."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from rigtally.physics.rig import GROUND, Drive, Element, Port, Reading, Rig
from rigtally.quantities.uncertain import Uncertain


def port(place: Any) -> Port:
    """A node (against ground), or a pair."""
    return Port(place) if isinstance(place, str) else Port(*place)


class RigBuilder:
    """Adds elements, drives and readings one by one; `rig()` is the checked rig."""

    def __init__(self, title: str = "rig") -> None:
        self.title = title
        self.elements: list[Element] = []
        self.drives: list[Drive] = []
        self.readings: list[Reading] = []
        self.values: dict[str, Uncertain] = {}
        self.media: dict[str, Mapping[str, Any]] = {}
        self.settings: dict[str, Any] = {}

    def medium(self, name: str, **properties: Any) -> RigBuilder:
        self.media[name] = {}
        for key, value in properties.items():
            self.values[f"{name}.{key}"] = quantity(value)
        return self

    def element(self, name: str, kind: str, *ports: Any, medium: str = "", shared: Any = None, **values: Any):
        """Values by key; `shared` maps a key to the name of a value that stands elsewhere."""
        options = {k: v for k, v in values.items() if isinstance(v, str)}
        keys = {}
        for key, value in values.items():
            if key not in options:
                keys[key] = f"{name}.{key}"
                self.values[keys[key]] = quantity(value)
        keys.update(shared or {})
        for key in ("density", "viscosity", "bulk_modulus"):
            if medium and f"{medium}.{key}" in self.values:
                keys[key] = f"{medium}.{key}"
        self.elements.append(Element(name, kind, tuple(port(p) for p in ports), keys, options, medium))
        return self

    def drive(self, name: str, imposes: str, place: Any, *, at: bool = True, medium: str = "") -> RigBuilder:
        self.drives.append(Drive(name, imposes, port(place), medium=medium, at=at))
        return self

    def reading(self, name: str, of: str, place: Any = None, *, through: str = "", medium: str = ""):
        where = port(place) if place is not None else None
        self.readings.append(Reading(name, of, where, through, medium=medium))
        return self

    def rig(self) -> Rig:
        labels = {
            name: tuple(name.rsplit(".", 1)) if "." in name else (name, "value") for name in self.values
        }
        return Rig(
            self.title,
            tuple(self.elements),
            tuple(self.drives),
            tuple(self.readings),
            dict(self.values),
            labels,
            media=self.media,
            settings=self.settings,
        )


def quantity(value: Any) -> Uncertain:
    """A plain number is exact; a pair is value and standard uncertainty."""
    if isinstance(value, Uncertain):
        return value
    if isinstance(value, tuple):
        return Uncertain(float(value[0]), float(value[1]))
    return Uncertain(float(value), 0.0)


def limits(value: float, half: float, unit: str = "") -> Uncertain:
    """value ± half as limits: rectangular."""
    return Uncertain(value, half / math.sqrt(3.0), unit, distribution="rectangular")


def impulse_line(friction: str = "oscillating") -> RigBuilder:
    """The oil-filled impulse line and gauge chamber of the rig file's page."""
    build = RigBuilder("Oil-filled impulse line")
    build.medium(
        "oil", density=limits(871.0, 0.005 * 871.0), viscosity=Uncertain(0.0296, 0.0006), bulk_modulus=1.42e9
    )
    build.element(
        "impulse line",
        "laminar-line",
        ("tapping", "gauge"),
        medium="oil",
        bore=limits(4.00e-3, 0.05e-3),
        length=limits(3.20, 0.01),
        friction=friction,
    )
    build.element("gauge chamber", "chamber", "gauge", compliance=limits(3.1e-12, 0.08 * 3.1e-12))
    build.drive("line pressure", "pressure", "tapping")
    build.reading("gauge pressure", "pressure", "gauge")
    return build


__all__ = ["GROUND", "RigBuilder", "impulse_line", "limits", "port", "quantity"]
