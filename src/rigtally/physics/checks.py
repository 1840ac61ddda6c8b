"""The structure of a network, checked before any number: refusals by the names of the elements."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rigtally.errors import RigError
from rigtally.physics.elements import Lowered
from rigtally.physics.rig import GROUND, Rig
from rigtally.physics.spoken import spoken


class _Sets:
    """Which nodes are connected (union-find)."""

    def __init__(self) -> None:
        self.parent: dict[str, str] = {}

    def find(self, node: str) -> str:
        self.parent.setdefault(node, node)
        while self.parent[node] != node:
            self.parent[node] = self.parent[self.parent[node]]
            node = self.parent[node]
        return node

    def join(self, first: str, second: str) -> bool:
        """Connect two nodes; False where they were connected already."""
        a, b = self.find(first), self.find(second)
        self.parent[a] = b
        return a != b


def check_structure(rig: Rig, lowered: Sequence[Lowered]) -> None:
    """Drives and readings there are, every node is held, drives do not fight each other.

    Raises
    ------
    RigError
        codes "no-drive", "no-reading", "loop-of-drives", "cut-set-of-drives", "floating-node".
    """
    if not rig.drives:
        raise RigError(
            "the rig has no [[drive]]: nothing is imposed on it",
            where=rig.file,
            do="state what is imposed and where",
            code="no-drive",
        )
    if not rig.readings:
        raise RigError(
            "the rig has no [[reading]]: nothing is read off it",
            where=rig.file,
            do="state what is read and where",
            code="no-reading",
        )
    across = [d for d in rig.drives if spoken(d.imposes, f"drive {d.name!r}").across]
    through = [d for d in rig.drives if d not in across]
    _no_loop_of_drives(rig, [(d.name, d.port.first, d.port.second) for d in across])
    held = _Sets()
    held.find(GROUND)
    nodes: set[str] = set()
    for item in lowered:
        for port in item.ports:
            held.join(port.first, port.second)
            nodes |= {port.first, port.second}
    for drive in across:
        held.join(drive.port.first, drive.port.second)
        nodes |= {drive.port.first, drive.port.second}
    for drive in through:
        nodes |= {drive.port.first, drive.port.second}
    loose = sorted(node for node in nodes if held.find(node) != held.find(GROUND))
    if not loose:
        return
    feeding = [d.name for d in through if d.port.first in loose or d.port.second in loose]
    if feeding:
        raise RigError(
            f"only imposed through values reach {_named(loose, 'node')}: {_named(feeding, 'drive')} have "
            "nowhere to go",
            where=rig.file,
            do="connect these nodes to ground through an element",
            code="cut-set-of-drives",
        )
    touching = [
        i.element.name for i in lowered if any(p.first in loose or p.second in loose for p in i.ports)
    ]
    raise RigError(
        f"{_named(loose, 'node')} of {_named(dict.fromkeys(touching), 'element')} "
        f"{'floats' if len(loose) == 1 else 'float'}: nothing connects to ground",
        where=rig.file,
        do=f"connect {loose[0]!r} to ground, directly or through an element",
        code="floating-node",
    )


def _no_loop_of_drives(rig: Rig, edges: Iterable[tuple[str, str, str]]) -> None:
    joined = _Sets()
    kept: list[tuple[str, str, str]] = []
    for name, first, second in edges:
        if not joined.join(first, second):
            loop = [*_path(kept, first, second), name]
            raise RigError(
                f"the imposed across values of {_named(loop, 'drive')} close a loop",
                where=rig.file,
                do="impose one less, or put an element between",
                code="loop-of-drives",
            )
        kept.append((name, first, second))


def _path(edges: Sequence[tuple[str, str, str]], start: str, end: str) -> list[str]:
    """Names of the edges that lead from start to end."""
    trail: dict[str, list[str]] = {start: []}
    queue = [start]
    while queue:
        node = queue.pop(0)
        if node == end:
            break
        for name, first, second in edges:
            for here, there in ((first, second), (second, first)):
                if here == node and there not in trail:
                    trail[there] = [*trail[node], name]
                    queue.append(there)
    return trail.get(end, [])


def _named(names: Iterable[str], noun: str) -> str:
    quoted = [repr(name) for name in names]
    return f"{noun if len(quoted) == 1 else noun + 's'} {', '.join(quoted)}"
