"""The rig as plain boxes and lines: nodes as dots with their names, elements as boxes with name and value."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import FancyBboxPatch
from numpy.typing import NDArray

from rigtally.physics.rig import GROUND, Rig
from rigtally.reporting.numbers import engineering
from rigtally.reporting.plots import svg

Array = NDArray[np.float64]
MOST_ELEMENTS = 40


def network_picture(rig: Rig) -> str:
    """SVG of the network, or "" where there is nothing to draw or it would not be readable."""
    if not rig.elements or len(rig.elements) > MOST_ELEMENTS:
        return ""
    nodes = sorted({n for e in rig.elements for p in e.ports for n in (p.first, p.second)} - {GROUND})
    levels = _levels(rig, nodes)
    columns = max(levels.values(), default=0) + 1
    place = _places(levels)
    figure = Figure(figsize=(8.6, 2.2 + 0.9 * max(_stack(place), 1)), layout="constrained")
    axis = figure.subplots()
    axis.set_axis_off()
    used: dict[tuple[float, float], int] = {}
    lowest = min((y for _, y in place.values()), default=0.0) - 1.6
    for element in rig.elements:
        ends = [_end(port.first, port.second, place) for port in element.ports]
        points = [p for pair in ends for p in pair]
        if not points:
            continue
        middle = np.mean(points, axis=0)
        if any(GROUND in (port.first, port.second) for port in element.ports) and len(points) == 1:
            middle = np.array([points[0][0], lowest + 0.75])
        key = (round(float(middle[0]), 1), round(float(middle[1]), 1))
        count = used.get(key, 0)
        used[key] = count + 1
        middle = (
            middle + np.array([0.0, 0.62 * count])
            if len(points) > 1
            else middle + np.array([0.62 * count, 0.0])
        )
        for point in points:
            axis.plot([point[0], middle[0]], [point[1], middle[1]], color="#7a8793", linewidth=1.0, zorder=1)
        if len(points) < 2 * len(ends):
            axis.plot([middle[0], middle[0]], [middle[1], lowest], color="#7a8793", linewidth=1.0, zorder=1)
        _box(axis, middle, element.name, _value(rig, element.values))
    axis.plot([-0.5, columns - 0.5], [lowest, lowest], color="#333333", linewidth=1.6)
    axis.text(columns - 0.5, lowest - 0.12, "ground", ha="right", va="top", fontsize=8, color="#333333")
    for name, (x, y) in place.items():
        axis.plot([x], [y], "o", color="#0b5cad", markersize=6, zorder=3)
        axis.text(x, y + 0.14, name, ha="center", va="bottom", fontsize=8, color="#0b5cad", zorder=4)
    for drive in rig.drives:
        if drive.port.first in place:
            x, y = place[drive.port.first]
            axis.annotate(
                drive.name, (x, y), (x - 0.1, y + 0.75), fontsize=8, color="#5b8c3a", ha="center",
                arrowprops={"arrowstyle": "->", "color": "#5b8c3a"},
            )  # fmt: skip
    axis.margins(0.08, 0.12)
    return svg(figure)


def _levels(rig: Rig, nodes: list[str]) -> dict[str, int]:
    """Steps of each node from the drives, breadth first."""
    starts = [d.port.first for d in rig.drives if d.port.first in nodes] or nodes[:1]
    level = {starts[0]: 0} if starts else {}
    waiting = list(level)
    while waiting or len(level) < len(nodes):
        if not waiting:
            rest = next(n for n in nodes if n not in level)
            level[rest] = max(level.values(), default=-1) + 1
            waiting = [rest]
        here = waiting.pop(0)
        for element in rig.elements:
            around = {n for p in element.ports for n in (p.first, p.second)} - {GROUND}
            if here in around:
                for other in sorted(around - level.keys()):
                    level[other] = level[here] + 1
                    waiting.append(other)
    return level


def _places(levels: dict[str, int]) -> dict[str, tuple[float, float]]:
    rows: dict[int, int] = {}
    out = {}
    for name, level in levels.items():
        row = rows.get(level, 0)
        rows[level] = row + 1
        out[name] = (1.6 * level, 1.4 * row)
    return out


def _stack(place: dict[str, tuple[float, float]]) -> int:
    return len({y for _, y in place.values()})


def _end(first: str, second: str, place: dict[str, tuple[float, float]]) -> list[Array]:
    return [np.array(place[n]) for n in (first, second) if n != GROUND and n in place]


def _value(rig: Rig, values: object) -> str:
    """The first values of an element, with units."""
    out = []
    for key, name in list(dict(values).items())[:2]:  # type: ignore[call-overload]
        if name in rig.values and key not in ("density", "viscosity", "bulk_modulus"):
            quantity = rig.values[name]
            if math.isfinite(quantity.value):
                out.append(engineering(quantity.value, quantity.unit))
    return ", ".join(out)


def _box(axis: object, middle: Array, name: str, value: str) -> None:
    width = 0.062 * max(len(name), len(value), 8) + 0.12
    axis.add_patch(  # type: ignore[attr-defined]
        FancyBboxPatch(
            (middle[0] - width / 2, middle[1] - 0.2), width, 0.4, boxstyle="round,pad=0.02", facecolor="white",
            edgecolor="#333333", linewidth=1.0, zorder=5,
        )
    )  # fmt: skip
    axis.text(middle[0], middle[1] + 0.075, name, ha="center", va="center", fontsize=8, zorder=6)  # type: ignore[attr-defined]
    axis.text(  # type: ignore[attr-defined]
        middle[0], middle[1] - 0.1, value, ha="center", va="center", fontsize=7, color="#555555", zorder=6
    )
