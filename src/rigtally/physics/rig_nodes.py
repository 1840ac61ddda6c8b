"""Nodes: each in one domain, none loose."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

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

    def claim(node: str, of: str, who: str, table: str, number: int, name: str) -> None:
        if node == GROUND:
            return
        before = domain.setdefault(node, (of, who))
        if before[0] != of:
            raise source.fault(
                f"node {node!r} is {of} here, but {before[0]} at {before[1]}",
                table=table, number=number, name=name,
                do="a node belongs to one domain; join domains by a coupler", code="two-domains",
            )  # fmt: skip

    waiting = []
    for number, element in enumerate(elements):
        kind = KINDS[element.kind]
        for port, of in zip(element.ports, kind.domains, strict=True):
            for node in (port.first, port.second):
                if of == SAME:
                    waiting.append((number, element))
                else:
                    claim(node, of, repr(element.name), "element", number, element.name)
    _follow_couplers(waiting, domain, claim)
    touched = Counter(
        node for e in elements for node in {n for port in e.ports for n in (port.first, port.second)}
    )
    places = [("drive", k, d.name, d.imposes, d.port) for k, d in enumerate(drives)]
    places += [("reading", k, r.name, r.of, r.port) for k, r in enumerate(readings) if r.port is not None]
    for table, number, name, word, port in places:
        if port is None:
            continue
        for node in (port.first, port.second):
            if node != GROUND and node not in touched:
                raise source.fault(
                    f"no element touches node {node!r}",
                    table=table, number=number, name=name, key="at" if node == port.first else "to",
                    do=nearest(node, sorted(set(touched) - {GROUND})), code="unknown-node",
                )  # fmt: skip
            claim(node, DOMAIN_OF[word], f"{table} {name!r}", table, number, name)
    ends = Counter(touched)
    for table, _, _, _, port in places:
        if table == "drive" and port is not None:
            ends.update({port.first, port.second} - {GROUND})
    for number, element in enumerate(elements):
        for port in element.ports:
            for key, node in (("from", port.first), ("to", port.second)):
                if node == GROUND or ends[node] > 1:
                    continue
                read = any(r.port is not None and node in (r.port.first, r.port.second) for r in readings)
                if not read:
                    raise source.fault(
                        f"node {node!r} is a loose end: nothing else touches it",
                        table="element", number=number, name=element.name, key=key,
                        do=nearest(node, sorted(set(ends) - {GROUND, node})), code="loose-node",
                    )  # fmt: skip


def _follow_couplers(waiting: list, domain: dict, claim: object) -> None:  # type: ignore[type-arg]
    """Couplers of one domain, whichever it is, take it from their neighbours."""
    for _ in range(len(waiting)):
        for number, element in waiting:
            nodes = [n for port in element.ports for n in (port.first, port.second) if n != GROUND]
            known = {domain[n][0] for n in nodes if n in domain}
            for of in known:
                for node in nodes:
                    claim(node, of, repr(element.name), "element", number, element.name)  # type: ignore[operator]
