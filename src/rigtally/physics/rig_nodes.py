"""Nodes: each in one domain, none loose."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence

from rigtally.physics.kinds import DOMAIN_OF, KINDS, SAME
from rigtally.physics.rig import GROUND, Drive, Element, Reading
from rigtally.physics.rig_source import Source, nearest


def check_nodes(
    source: Source, elements: Sequence[Element], drives: Sequence[Drive], readings: Sequence[Reading]
) -> None:
    """Refuse a node of two domains, a drive or reading at a node that nothing else touches, a loose end.

    Raises
    ------
    RigError
        Codes "two-domains", "unknown-node", "loose-node".
    """
    domain: dict[str, tuple[str, str]] = {}

    def claim(node: str, of: str, who: str, table: str, number: int, name: str, key: str) -> None:
        if node == GROUND:
            return
        before = domain.setdefault(node, (of, who))
        if before[0] != of:
            raise source.fault(
                f"node {node!r} is {of} here, but {before[0]} at {before[1]}",
                table=table, number=number, name=name, key=key,
                do="a node belongs to one domain; join domains by a coupler", code="two-domains",
            )  # fmt: skip

    waiting: list[tuple[int, Element]] = []
    for number, element in enumerate(elements):
        kind = KINDS[element.kind]
        if SAME in kind.domains:
            waiting.append((number, element))
            continue
        for place, (port, of) in enumerate(zip(element.ports, kind.domains, strict=True)):
            for node in (port.first, port.second):
                key = _key(source, "element", number, place, node == port.second)
                claim(node, of, repr(element.name), "element", number, element.name, key)
    _follow_couplers(source, waiting, domain, claim)
    touched = Counter(
        node for e in elements for node in {n for port in e.ports for n in (port.first, port.second)}
    )
    places = [("drive", k, d.name, d.imposes, d.port) for k, d in enumerate(drives)]
    places += [("reading", k, r.name, r.of, r.port) for k, r in enumerate(readings) if r.port]
    for table, number, name, word, port in places:
        for node in (port.first, port.second):
            if node != GROUND and node not in touched:
                raise source.fault(
                    f"no element touches node {node!r}",
                    table=table, number=number, name=name,
                    key=_key(source, table, number, 0, node == port.second),
                    do=nearest(node, sorted(set(touched) - {GROUND})), code="unknown-node",
                )  # fmt: skip
            said = "imposes" if table == "drive" else "of"
            claim(node, DOMAIN_OF[word], f"{table} {name!r}", table, number, name, said)
    _check_levels(source, elements, drives, readings)
    ends = Counter(touched)
    for table, _, _, _, port in places:
        if table == "drive":
            ends.update({port.first, port.second} - {GROUND})
    for number, element in enumerate(elements):
        for place, port in enumerate(element.ports):
            for node in (port.first, port.second):
                key = _key(source, "element", number, place, node == port.second)
                if node == GROUND or ends[node] > 1:
                    continue
                read = any(r.port is not None and node in (r.port.first, r.port.second) for r in readings)
                if not read:
                    raise source.fault(
                        f"node {node!r} is a loose end: nothing else touches it",
                        table="element", number=number, name=element.name, key=key,
                        do=nearest(node, sorted(set(ends) - {GROUND, node})), code="loose-node",
                    )  # fmt: skip


def _check_levels(
    source: Source, elements: Sequence[Element], drives: Sequence[Drive], readings: Sequence[Reading]
) -> None:
    """A level is a pressure over ρ g: of the tank at its node, or of the medium that is named."""
    tanks = {
        node
        for element in elements
        if element.kind == "open-tank"
        for node in (element.ports[0].first, element.ports[0].second)
    }
    places = [("drive", k, d.name, d.imposes, d.port, d.medium) for k, d in enumerate(drives)]
    places += [("reading", k, r.name, r.of, r.port, r.medium) for k, r in enumerate(readings) if r.port]
    for table, number, name, word, port, medium in places:
        if word == "level" and not medium and port.first not in tanks:
            raise source.fault(
                f"no open tank stands at node {port.first!r}, and no medium is named",
                table=table, number=number, name=name, key=_key(source, table, number, 0, False),
                do='name the medium, for example medium = "water"', code="level-without-medium",
            )  # fmt: skip


def _key(source: Source, table: str, number: int, place: int, second: bool) -> str:
    """The key under which a node is written: at, from or to, or the port of a coupler."""
    written = source.tree[table][number]
    if "primary" in written or "secondary" in written:
        return ("primary", "secondary")[place]
    return "at" if "at" in written else ("to" if second else "from")


def _follow_couplers(
    source: Source,
    waiting: Sequence[tuple[int, Element]],
    domain: Mapping[str, tuple[str, str]],
    claim: Callable[[str, str, str, str, int, str, str], None],
) -> None:
    """Couplers of one domain, whichever it is, take it from their neighbours."""
    for _ in range(len(waiting)):
        for number, element in waiting:
            places = [
                (node, _key(source, "element", number, place, node == port.second))
                for place, port in enumerate(element.ports)
                for node in (port.first, port.second)
                if node != GROUND
            ]
            known = {domain[node][0] for node, _ in places if node in domain}
            for of in sorted(known):
                for node, key in places:
                    claim(node, of, repr(element.name), "element", number, element.name, key)
