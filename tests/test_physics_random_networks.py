"""Two hundred random networks against a nodal solution that shares nothing with the program."""

from __future__ import annotations

import numpy as np
import pytest

from rig_builder import GROUND, RigBuilder
from rigtally.errors import RigError
from rigtally.physics.prediction import predict

ONE_PORT = {
    "translation": {"mass": "mass", "spring": "stiffness", "damper": "damping"},
    "rotation": {"inertia": "inertia", "torsion-spring": "stiffness", "rotary-damper": "damping"},
    "electrical": {"resistor": "resistance", "capacitor": "capacitance", "inductor": "inductance"},
    "fluid": {"fluid-resistance": "resistance", "fluid-inertance": "inertance", "chamber": "compliance"},
    "thermal": {"thermal-resistance": "resistance", "heat-capacity": "capacity"},
}
GROUNDED = ("mass", "inertia", "heat-capacity")
COUPLERS = [
    ("lever", "translation", "translation", "ratio"),
    ("gear", "rotation", "rotation", "ratio"),
    ("transformer", "electrical", "electrical", "ratio"),
    ("rack", "rotation", "translation", "radius"),
    ("piston", "fluid", "translation", "area"),
    ("bellows", "fluid", "translation", "area"),
    ("motor", "electrical", "rotation", "constant"),
]
ACROSS = {
    "translation": "velocity",
    "rotation": "angular velocity",
    "electrical": "voltage",
    "fluid": "pressure",
    "thermal": "temperature",
}
THROUGH = {
    "translation": "force",
    "rotation": "torque",
    "electrical": "current",
    "fluid": "flow",
    "thermal": "heat flow",
}


def random_rig(rng: np.random.Generator) -> RigBuilder:
    """3 to 12 elements in random topology, one or two drives, one or two readings."""
    build = RigBuilder()
    nodes: dict[str, list[str]] = {}
    count = int(rng.integers(3, 13))
    domain = str(rng.choice(list(ONE_PORT)))
    nodes[domain] = ["n0"]
    number = 1

    def value() -> float:
        return float(10.0 ** rng.uniform(-1.0, 1.0))

    for k in range(count):
        here = str(rng.choice(list(nodes)))
        options = [c for c in COUPLERS if here in c[1:3]]
        if options and rng.random() < 0.2:
            kind, first, second, key = options[int(rng.integers(len(options)))]
            mine = str(rng.choice(nodes[here]))
            other = second if first == here else first
            fresh = f"n{number}"
            number += 1
            nodes.setdefault(other, []).append(fresh)
            ports = (mine, fresh) if first == here else (fresh, mine)
            values = {key: value() * (-1.0 if key == "ratio" and rng.random() < 0.3 else 1.0)}
            if kind == "bellows":
                values["stiffness"] = value()
            build.element(f"e{k}", kind, *ports, **values)
            continue
        kind = str(rng.choice(list(ONE_PORT[here])))
        first = str(rng.choice(nodes[here]))
        if kind not in GROUNDED and rng.random() < 0.45:
            second = f"n{number}"
            number += 1
            nodes[here].append(second)
        else:
            second = str(rng.choice([*nodes[here], GROUND]))
        if kind in GROUNDED or second == first:
            second = GROUND
        pair = (first, second) if rng.random() < 0.5 or kind in GROUNDED else (second, first)
        build.element(f"e{k}", kind, pair, **{ONE_PORT[here][kind]: value()})
    for j in range(int(rng.integers(1, 3))):
        here = str(rng.choice(list(nodes)))
        words = ACROSS if rng.random() < 0.6 else THROUGH
        first = str(rng.choice(nodes[here]))
        second = str(rng.choice([GROUND, *nodes[here]]))
        at = second in (first, GROUND)
        build.drive(f"u{j}", words[here], first if at else (first, second), at=at)
    for i in range(int(rng.integers(1, 3))):
        if rng.random() < 0.6:
            here = str(rng.choice(list(nodes)))
            build.reading(f"y{i}", ACROSS[here], str(rng.choice(nodes[here])))
        else:
            element = build.elements[int(rng.integers(len(build.elements)))]
            build.reading(f"y{i}", "current", through=element.name)
    return build


def solve_refined(matrix: np.ndarray, right: np.ndarray) -> np.ndarray:
    """Solution in double precision, refined with residuals in extended precision."""
    scale = np.abs(matrix).max(axis=1).astype(float)
    rough = np.linalg.inv((matrix / scale[:, None]).astype(complex))
    found = np.zeros_like(right)
    for _ in range(6):
        found = found + rough @ ((right - matrix @ found) / scale[:, None])
    return found


def nodal(build: RigBuilder, omega: float) -> np.ndarray:
    """Complex gains by a modified nodal matrix, written stamp by stamp."""
    s = np.clongdouble(1j) * np.longdouble(omega)
    nodes = sorted({n for e in build.elements for p in e.ports for n in (p.first, p.second)} - {GROUND})
    place = {n: k for k, n in enumerate(nodes)}
    size = len(nodes)
    through: dict[str, int] = {}
    rows: list[tuple[list[tuple[int, complex]], list[tuple[int, complex]]]] = []

    def across(p):
        return [(place[n], sign) for n, sign in ((p.first, 1.0), (p.second, -1.0)) if n != GROUND]

    balance: dict[int, list[tuple[int, complex]]] = {}

    def flows(p, column, sign=1.0):
        for node, direction in across(p):
            balance.setdefault(node, []).append((column, sign * direction))

    columns = size
    for e in build.elements:
        v = [np.longdouble(build.values[name].value) for name in e.values.values()]
        p = e.ports[0]
        f = columns
        through[e.name] = f
        columns += 1
        flows(p, f)
        if len(e.ports) == 1:
            store_across = e.kind in ("mass", "inertia", "capacitor", "chamber", "heat-capacity")
            stiff = e.kind in ("spring", "torsion-spring")
            admittance = {True: s * v[0]}.get(store_across)
            if stiff:
                admittance = v[0] / s
            elif e.kind in ("damper", "rotary-damper"):
                admittance = v[0]
            elif e.kind in ("resistor", "fluid-resistance", "thermal-resistance"):
                admittance = 1.0 / v[0]
            elif e.kind in ("inductor", "fluid-inertance"):
                admittance = 1.0 / (s * v[0])
            rows.append(([(c, admittance * a) for c, a in across(p)] + [(f, -1.0)], []))
            continue
        q = e.ports[1]
        g = columns
        columns += 1
        flows(q, g)
        if e.kind == "motor":  # torque constant · current drives the shaft
            rows.append(([*across(p), *((c, -v[0] * a) for c, a in across(q))], []))
            rows.append(([(g, 1.0), (f, v[0])], []))
        elif e.kind in ("piston", "bellows"):  # flow taken = area · velocity, force = area · pressure
            rows.append(([(f, 1.0), *((c, -v[0] * a) for c, a in across(q))], []))
            rows.append(([(g, 1.0), *((c, v[0] * a) for c, a in across(p))], []))
            if e.kind == "bellows":
                h = columns
                columns += 1
                flows(q, h)
                rows.append(([*((c, v[1] / s * a) for c, a in across(q)), (h, -1.0)], []))
        else:
            rows.append(([*across(q), *((c, -v[0] * a) for c, a in across(p))], []))
            rows.append(([(f, 1.0), (g, v[0])], []))
    for j, d in enumerate(build.drives):
        if d.imposes in ACROSS.values():
            f = columns
            columns += 1
            flows(d.port, f)
            rows.append((list(across(d.port)), [(j, -1.0)]))
    matrix = np.zeros((columns, columns), dtype=np.clongdouble)
    right = np.zeros((columns, len(build.drives)), dtype=np.clongdouble)
    for k, (left, imposed) in enumerate(rows):
        for c, a in left:
            matrix[k, c] += a
        for j, a in imposed:
            right[k, j] -= a
    for node in range(size):
        k = len(rows) + node
        for c, a in balance.get(node, []):
            matrix[k, c] += a
    for j, d in enumerate(build.drives):
        if d.imposes not in ACROSS.values():
            # `at` pushes the node; from–to runs through the drive, out of the first node
            for node, direction in across(d.port):
                right[len(rows) + node, j] += direction if d.at else -direction
    solved = solve_refined(matrix, right)
    picked = []
    for r in build.readings:
        if r.through:
            picked.append(solved[through[r.through]])
        else:
            picked.append(sum(a * solved[c] for c, a in across(r.port)))
    return np.array(picked)


def collect(count: int) -> list[tuple[int, RigBuilder]]:
    """Random rigs that have an answer that is not static, with the number of their seed."""
    out = []
    seed = 0
    while len(out) < count:
        build = random_rig(np.random.default_rng(seed))
        try:
            if predict(build.rig()).form.degree:
                out.append((seed, build))
        except RigError:
            pass
        seed += 1
    return out


def test_200_random_networks_agree_with_a_nodal_solution() -> None:
    """Every entry of the transfer matrix, at 20 frequencies over four decades, to 1e-9."""
    worst = 0.0
    kinds: set[str] = set()
    orders: list[int] = []
    for seed, build in collect(200):
        found = predict(build.rig()).transfer_function
        kinds |= {e.kind for e in build.elements}
        frequencies = np.logspace(-2, 2, 20)
        gains = np.array([nodal(build, w) for w in frequencies])
        mine = found(frequencies).reshape(gains.shape)
        # an entry below 1e-12 of the largest is a zero entry with the reference's rounding
        size = np.abs(gains).max(axis=(1, 2), keepdims=True)
        there = np.abs(gains) > 1e-12 * size
        assert np.all(np.abs(mine)[~there] <= (1e-12 * size + 0 * np.abs(gains))[~there]), seed
        error = float((np.abs(mine - gains)[there] / np.abs(gains)[there]).max())
        worst = max(worst, error)
        assert error < 1e-9, (seed, error)
        orders.append(found.denominator.size - 1)
    assert worst > 0.0
    assert len(kinds) == len(COUPLERS) + sum(len(group) for group in ONE_PORT.values())
    assert max(orders) >= 5


@pytest.mark.parametrize("seed", range(5))
def test_the_nodal_solution_itself_is_checked(seed: int) -> None:
    """The reference is not trusted blindly: it agrees with the closed form of a filter."""
    rng = np.random.default_rng(seed)
    r, c = 10.0 ** rng.uniform(-1, 1, 2)
    build = RigBuilder().element("r", "resistor", ("a", "b"), resistance=r)
    build.element("c", "capacitor", "b", capacitance=c).drive("u", "voltage", "a").reading(
        "y", "voltage", "b"
    )
    assert complex(nodal(build, 0.7)[0, 0]) == pytest.approx(1.0 / (1.0 + 0.7j * r * c), rel=1e-14)
