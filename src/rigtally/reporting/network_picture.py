"""The rig as plain lines and boxes: a vertical line for each node, a row for each element between its nodes.

Nothing can overlap, whatever the network: the boxes stand between the node lines, one below the other.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import FancyBboxPatch

from rigtally.physics.rig import GROUND, Element, Rig
from rigtally.reporting.numbers import engineering
from rigtally.reporting.plots import svg

MOST_ELEMENTS, MOST_NODES = 40, 12
GAP = 2.0  # inches between node lines
BOX = 1.6
LINE = 0.17  # inches between connections on one side of a box
NODE, WIRE, EARTH, DRIVEN, READ = "#0b5cad", "#55606b", "#333333", "#3f6b26", "#a8480f"
_OF_MEDIUM = ("density", "viscosity", "bulk_modulus", "temperature", "static_pressure")


@dataclass(frozen=True)
class _Row:
    """A box with its words and the node columns that it is connected to (with a small word at each)."""

    name: str
    detail: str
    ends: tuple[tuple[int, str], ...]
    colour: str = EARTH
    framed: bool = True

    @property
    def gap(self) -> int:
        """The gap between node lines in which the box stands: right of its leftmost node."""
        return min(column for column, _ in self.ends)

    def side(self, left: bool) -> list[tuple[int, str]]:
        """Connections that leave on one side, in their order."""
        return [end for end in self.ends if (end[0] <= self.gap) is left]

    @property
    def height(self) -> float:
        """Inches."""
        return max(0.40, LINE * (1 + max(len(self.side(True)), len(self.side(False)))))


def network_picture(rig: Rig) -> str:
    """SVG of the network, or "" where there is nothing to draw or it would not be readable."""
    nodes = _ordered(rig)
    if not rig.elements or len(rig.elements) > MOST_ELEMENTS or len(nodes) > MOST_NODES:
        return ""
    column = {name: k for k, name in enumerate([*nodes, GROUND])}
    rows = [*_imposed(rig, column), *(_element(rig, e, column) for e in rig.elements), *_read(rig, column)]
    grounded = any(column[GROUND] in {c for c, _ in row.ends} for row in rows)
    width = max(8.6, GAP * (len(nodes) - (0 if grounded else 1)) + 1.4)
    depth = sum(row.height + 0.16 for row in rows)
    figure = Figure(figsize=(width, depth + 0.6))
    axis = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axis.set_axis_off()
    extent = GAP * (len(nodes) if grounded else len(nodes) - 1)
    axis.set_xlim(extent / 2 - width / 2, extent / 2 + width / 2)
    axis.set_ylim(-depth - 0.2, 0.4)
    for name, k in column.items():
        if name == GROUND and not grounded:
            continue
        colour = EARTH if name == GROUND else NODE
        axis.plot(
            [GAP * k] * 2, [-depth, 0.0], color=colour, linewidth=3.0 if name == GROUND else 1.6, zorder=1
        )
        axis.text(GAP * k, 0.08, name, ha="center", va="bottom", fontsize=9, color=colour, fontweight="bold")
    y = 0.0
    for row in rows:
        _draw(axis, row, y - 0.08 - row.height / 2)
        y -= row.height + 0.16
    return svg(figure)


def _draw(axis: Axes, row: _Row, y: float) -> None:
    """One row about the height y."""
    x = GAP * (row.gap + 0.5)
    for left in (True, False):
        ends = row.side(left)
        edge = x - BOX / 2 if left else x + BOX / 2
        for k, (node, word) in enumerate(ends):
            at = y + LINE * ((len(ends) - 1) / 2 - k)
            axis.plot([edge, GAP * node], [at, at], color=row.colour, linewidth=1.0, zorder=2)
            axis.plot([GAP * node], [at], "o", color=row.colour, markersize=4.5, zorder=4)
            if word and not left:
                axis.text(
                    edge + 0.06, at + 0.015, word, fontsize=6, color=WIRE, ha="left", va="bottom", zorder=4
                )
    if row.framed:
        axis.add_patch(
            FancyBboxPatch(
                (x - BOX / 2 + 0.03, y - row.height / 2 + 0.03), BOX - 0.06, row.height - 0.06,
                boxstyle="round,pad=0.03", facecolor="white", edgecolor=row.colour, linewidth=1.0, zorder=3,
            )
        )  # fmt: skip
    shift = 0.075 if row.detail else 0.0
    axis.text(
        x, y + shift, _short(row.name), ha="center", va="center", fontsize=8, color=row.colour, zorder=5
    )
    axis.text(
        x, y - 0.085, _short(row.detail, 32), ha="center", va="center", fontsize=6.5, color=WIRE, zorder=5
    )


def _short(text: str, most: int = 25) -> str:
    return text if len(text) <= most else text[: most - 1] + "…"


def _element(rig: Rig, element: Element, column: dict[str, int]) -> _Row:
    words = [""] if len(element.ports) == 1 else ["prim", "sec"]
    ends = [
        (column[node], word)
        for port, word in zip(element.ports, words, strict=True)
        for node in (port.first, port.second)
    ]
    return _Row(element.name, _value(rig, element), tuple(ends))


def _imposed(rig: Rig, column: dict[str, int]) -> list[_Row]:
    """What is imposed on the rig, with its channel."""
    return [
        _Row(d.name, f"imposed {d.imposes}", _port(d.port.first, d.port.second, column), DRIVEN)
        for d in rig.drives
    ]


def _read(rig: Rig, column: dict[str, int]) -> list[_Row]:
    """What is read: across a pair of nodes, or through an element (at the nodes of its first port)."""
    rows = []
    for reading in rig.readings:
        detail, port = f"read {reading.of}", reading.port
        if port is None:
            detail += f" through {reading.through}"
            port = next(e.ports[0] for e in rig.elements if e.name == reading.through)
        if reading.port is None:
            rows.append(
                _Row(reading.name, detail, ((min(column[port.first], column[port.second]), ""),), READ, False)
            )
        else:
            rows.append(_Row(reading.name, detail, _port(port.first, port.second, column), READ))
    return rows


def _port(first: str, second: str, column: dict[str, int]) -> tuple[tuple[int, str], ...]:
    return ((column[first], ""), (column[second], ""))


def _value(rig: Rig, element: Element) -> str:
    """The first values of an element, with units; those of its medium stand in the tables."""
    shown = []
    for key, name in element.values.items():
        value = rig.values.get(name)
        if value is not None and key not in _OF_MEDIUM and math.isfinite(value.value):
            shown.append(engineering(value.value, value.unit))
    return ", ".join(shown[:2])


def _ordered(rig: Rig) -> Sequence[str]:
    """The nodes from the drives onwards, breadth first, without the ground."""
    ports = [[n for p in e.ports for n in (p.first, p.second) if n != GROUND] for e in rig.elements]
    every = list(dict.fromkeys(n for around in ports for n in around))
    driven = [n for d in rig.drives for n in (d.port.first, d.port.second) if n in every]
    out: list[str] = []
    for start in dict.fromkeys([*driven[:1], *every]):
        waiting = [start]
        while waiting:
            here = waiting.pop(0)
            if here in out:
                continue
            out.append(here)
            waiting += [n for around in ports if here in around for n in around if n not in out]
    return out
