"""Rig: what a rig file says, checked and in SI. Made by `rig_file`, read by the network."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from rigtally.quantities.uncertain import Uncertain

GROUND = "ground"


@dataclass(frozen=True)
class Port:
    """A pair of nodes; the across variable is first minus second."""

    first: str
    second: str = GROUND


@dataclass(frozen=True)
class Element:
    """One element or coupler.

    Attributes
    ----------
    name, kind : str
    ports : tuple of Port
        One for an element (from, to); two for a coupler (primary, secondary).
    values : mapping
        Key of the element ("bore") -> name of the rig value it takes ("impulse line.bore", or
        "tube_bore" for a shared one, or "oil.density" for a medium's property as key "density").
    options : mapping
        Words such as friction = "oscillating".
    medium : str
        Name of the medium, "" where there is none.
    line : int
        Line of the element's table in the file.
    """

    name: str
    kind: str
    ports: tuple[Port, ...]
    values: Mapping[str, str]
    options: Mapping[str, str] = field(default_factory=dict)
    medium: str = ""
    line: int = 0


@dataclass(frozen=True)
class Drive:
    """What is imposed on the rig: an input.

    `imposes` is as spoken ("pressure", "volume flow", "level", "displacement" …).
    `at` says that the place was written as `at`: a positive imposed through value then drives that
    node positive. Written as from and to (`at` false) it goes from the first node through the drive to
    the second, so that a load that opposes motion goes from the shaft to ground.
    """

    name: str
    imposes: str
    port: Port
    channel: str = ""
    known: str = "measured"
    between: str = "ramped"
    medium: str = ""
    unit: str = ""
    line: int = 0
    at: bool = True


@dataclass(frozen=True)
class Reading:
    """What is read off the rig: an output. `through` names an element for a through variable."""

    name: str
    of: str
    port: Port | None = None
    through: str = ""
    channel: str = ""
    medium: str = ""
    unit: str = ""
    line: int = 0


@dataclass(frozen=True)
class Rig:
    """A rig as its file states it.

    Attributes
    ----------
    values : mapping of name to Uncertain
        Every value of the rig once, SI: "impulse line.bore", "tube_bore", "oil.density", "rig.gravity".
        A shared value or a medium's property is one input, however many elements use it.
    labels : mapping of value name to (owner, key)
        For the budget: ("impulse line", "bore"), ("oil", "density").
    log : mapping
        The [log] table (time, units, skew, rate), for the reader of the log.
    fit, agreement, limits : mapping
        The tables of those names, as read (checked; quantities as Uncertain or plain numbers in SI).
    systematic : tuple of mappings
    """

    title: str
    elements: tuple[Element, ...]
    drives: tuple[Drive, ...]
    readings: tuple[Reading, ...]
    values: Mapping[str, Uncertain]
    labels: Mapping[str, tuple[str, str]]
    media: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    log: Mapping[str, Any] = field(default_factory=dict)
    fit: Mapping[str, Any] = field(default_factory=dict)
    agreement: Mapping[str, Any] = field(default_factory=dict)
    limits: Mapping[str, Any] = field(default_factory=dict)
    systematic: tuple[Mapping[str, Any], ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    file: str = ""
    sha256: str = ""
    text: str = ""
