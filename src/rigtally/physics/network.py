"""Assembly: elements, drives and readings as one system of equations in s.

Unknowns z are the across variables of the nodes, the through variables of the elements'
ports and of the imposed across values. Rows are the elements' equations, the balance of
through variables at each node, and the imposed across values:

    M(s) z + B u = 0,      y = C z + D u

with entries that are sums of integer · symbols · s^k. With numbers in the symbols,
M(s) = s E − A is the descriptor pencil (E ẋ = A x + B u).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from rigtally.errors import RigError
from rigtally.physics.checks import check_structure
from rigtally.physics.elements import Lowered, Symbol, lower
from rigtally.physics.rig import GROUND, Drive, Element, Port, Reading, Rig
from rigtally.physics.spoken import Spoken, spoken

# a polynomial in s and the symbols: packed exponents -> integer coefficient
Polynomial = dict[int, int]
FIELD = 8  # bits of one exponent; field 0 is s, field k + 1 is symbol k
MASK = (1 << FIELD) - 1


def monomial(symbol: int | None, power: int) -> int:
    """Packed exponents of symbol · s^power."""
    key = power
    if symbol is not None:
        key += 1 << (FIELD * (symbol + 1))
    return key


@dataclass(frozen=True)
class Network:
    """The assembled equations.

    Attributes
    ----------
    symbols : tuple of Symbol
    columns : tuple of str
        What each unknown is, in words ("pressure at 'gauge'").
    rows : list of {column: Polynomial}
        M and, from column len(columns) on, B (one column for each drive).
    outputs : list of {column: Polynomial}
        C and D.
    row_owners : tuple of str
        The element, node or drive that each row speaks of.
    input_powers, output_powers : tuple of int
        s^power that multiplies the drive (displacement imposed: 1) and the reading.
    output_divisors : tuple of symbol index or None
        ρ g of a level that is read.
    """

    rig: Rig
    symbols: tuple[Symbol, ...]
    columns: tuple[str, ...]
    rows: list[dict[int, Polynomial]]
    outputs: list[dict[int, Polynomial]]
    row_owners: tuple[str, ...]
    input_powers: tuple[int, ...]
    output_powers: tuple[int, ...]
    output_divisors: tuple[int | None, ...]
    lowered: tuple[Lowered, ...]
    input_units: tuple[str, ...]
    output_units: tuple[str, ...]


class _Builder:
    """Collects symbols and columns while the rows are written."""

    def __init__(self) -> None:
        self.symbols: list[Symbol] = []
        self._index: dict[tuple[Any, ...], int] = {}
        self.columns: list[str] = []
        self._column: dict[tuple[str, ...], int] = {}

    def symbol(self, symbol: Symbol | None) -> int | None:
        if symbol is None:
            return None
        if symbol.identity not in self._index:
            self._index[symbol.identity] = len(self.symbols)
            self.symbols.append(symbol)
        return self._index[symbol.identity]

    def column(self, key: tuple[str, ...], words: str) -> int:
        if key not in self._column:
            self._column[key] = len(self.columns)
            self.columns.append(words)
        return self._column[key]

    def across(self, port: Port) -> list[tuple[int, int]]:
        """(column, sign) of first minus second."""
        out = []
        for node, sign in ((port.first, 1), (port.second, -1)):
            if node != GROUND:
                out.append((self.column(("v", node), f"the across variable of node {node!r}"), sign))
        return out

    def through(self, name: str, port: int) -> int:
        return self.column(("f", name, str(port)), f"the through variable of {name!r}")


def assemble(rig: Rig) -> Network:
    """The network of a rig, its structure checked before any number.

    Raises
    ------
    RigError
        Floating nodes, loops of imposed across values, cut sets of imposed through
        values, no drive, no reading, unknown names.
    """
    lowered = lower(rig)
    check_structure(rig, lowered)
    build = _Builder()
    rows: list[dict[int, Polynomial]] = []
    owners: list[str] = []
    balance: dict[str, dict[int, Polynomial]] = {}

    def into(node: str, column: int, sign: int) -> None:
        if node != GROUND:
            add(balance.setdefault(node, {}), column, {0: sign})

    for item in lowered:
        for number, port in enumerate(item.ports):
            build.across(port)
            column = build.through(item.name, number)
            into(port.first, column, 1)
            into(port.second, column, -1)
        for equation in item.equations:
            rows.append(_equation_row(build, item, equation))
            owners.append(item.name)

    drives = [(drive, spoken(drive.imposes, f"drive {drive.name!r}")) for drive in rig.drives]
    imposed = []
    for drive, word in drives:
        if word.across:
            column = build.column(("source", drive.name), f"the through variable of drive {drive.name!r}")
            into(drive.port.first, column, 1)
            into(drive.port.second, column, -1)
            imposed.append({c: {0: sign} for c, sign in build.across(drive.port)})
        else:
            imposed.append({})
    size = len(build.columns)
    for j, (drive, word) in enumerate(drives):
        if word.across:
            scale = build.symbol(_weight(rig, drive)) if word.level else None
            imposed[j][size + j] = {monomial(scale, 0): -1}
            rows.append(imposed[j])
            owners.append(drive.name)
        else:
            # a through value enters at `at`; between two nodes it goes from the first, through the drive,
            # to the second, as it would through an element
            sign = -1 if drive.at else 1
            into(drive.port.first, size + j, sign)
            into(drive.port.second, size + j, -sign)
    for node, row in balance.items():
        rows.append(row)
        owners.append(node)

    outputs, powers, divisors, units = [], [], [], []
    for reading in rig.readings:
        word = spoken(reading.of, f"reading {reading.name!r}")
        outputs.append(_reading_row(build, lowered, reading, word, rig))
        powers.append(word.power)
        divisors.append(build.symbol(_weight(rig, reading)) if word.level else None)
        units.append(word.unit)
    return Network(
        rig,
        tuple(build.symbols),
        tuple(build.columns),
        rows,
        outputs,
        tuple(owners),
        tuple(-word.power for _, word in drives),
        tuple(powers),
        tuple(divisors),
        lowered,
        tuple(word.unit for _, word in drives),
        tuple(units),
    )


def add(row: dict[int, Polynomial], column: int, term: Polynomial, factor: int = 1) -> None:
    """row[column] += factor · term; what cancels is gone."""
    entry = row.setdefault(column, {})
    for key, value in term.items():
        total = entry.get(key, 0) + factor * value
        if total:
            entry[key] = total
        else:
            entry.pop(key, None)
    if not entry:
        del row[column]


def _equation_row(build: _Builder, item: Lowered, equation: Sequence[Any]) -> dict[int, Polynomial]:
    row: dict[int, Polynomial] = {}
    for term in equation:
        key = monomial(build.symbol(term.symbol), term.power)
        port = int(term.quantity[1]) - 1
        if term.quantity[0] == "v":
            for column, sign in build.across(item.ports[port]):
                add(row, column, {key: sign * term.coefficient})
        else:
            add(row, build.through(item.name, port), {key: term.coefficient})
    return row


def _reading_row(
    build: _Builder, lowered: Sequence[Lowered], reading: Reading, word: Spoken, rig: Rig
) -> dict[int, Polynomial]:
    if not word.across or reading.through:
        if any(item.name == reading.through for item in lowered):
            return {build.through(reading.through, 0): {0: 1}}
        for drive in rig.drives:
            if drive.name == reading.through and ("source", drive.name) in build._column:
                return {build.column(("source", drive.name), ""): {0: 1}}
        raise RigError(
            f"reading {reading.name!r} names no element: through = {reading.through!r}",
            where=rig.file,
            do="the rig has: " + ", ".join(element.name for element in rig.elements),
            code="unknown-element",
        )
    if reading.port is None:
        raise RigError(
            f"reading {reading.name!r} has no node",
            where=rig.file,
            do="state at, or from and to",
            code="missing-node",
        )
    nodes = {node for item in lowered for port in item.ports for node in (port.first, port.second)}
    nodes |= {node for drive in rig.drives for node in (drive.port.first, drive.port.second)}
    for node in (reading.port.first, reading.port.second):
        if node not in nodes and node != GROUND:
            raise RigError(
                f"reading {reading.name!r} is at node {node!r}, which no element touches",
                where=rig.file,
                do="the rig has the nodes: " + ", ".join(sorted(nodes - {GROUND})),
                code="unknown-node",
            )
    return {column: {0: sign} for column, sign in build.across(reading.port)}


def _weight(rig: Rig, place: Drive | Reading) -> Symbol:
    """ρ g of the medium whose level is imposed or read."""
    tanks = [e for e in rig.elements if e.kind == "open-tank"]
    medium = place.medium
    if medium:
        tanks = [e for e in tanks if e.medium == medium]
    else:
        node = place.port.first if place.port is not None else ""
        tanks = [e for e in tanks if node in (e.ports[0].first, e.ports[0].second)]
        if not tanks:
            raise RigError(
                f"{place.name!r}: a level needs an open tank at its node, or a medium",
                where=rig.file,
                do='name the medium, for example medium = "water"',
                code="level-without-medium",
            )
        medium = tanks[0].medium
    density = {k: v for k, v in tanks[0].values.items() if k == "density"} if tanks else {}

    def weight(get: Callable[[str], Any], _: Any) -> Any:
        return get("density") * get("gravity")

    taken = Element(medium, "open-tank", (), density, medium=medium)
    return Symbol("w", medium, ("weight", medium), weight, taken)
