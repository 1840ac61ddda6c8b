"""Transfer functions of a dozen rigs against closed forms written by hand, over six decades of values.

Every coefficient of every entry to 1e-10, with the elements in random order, the nodes renamed
and the ends of elements exchanged (a through reading then changes its sign).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from rig_builder import RigBuilder
from rigtally.physics.prediction import open_model
from rigtally.physics.rig import GROUND, Port

Polynomials = tuple[list[float], list[list[list[float]]]]
G = 9.80665


def line_into_open_tank(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Level out per level in: 1/(I C s² + R C s + 1), C = A/(ρ g)."""
    r, i, area, rho = x
    b = RigBuilder().medium("water", density=rho)
    b.element("pipe resistance", "fluid-resistance", ("header", "mid"), resistance=r)
    b.element("pipe inertance", "fluid-inertance", ("mid", "day tank"), inertance=i)
    b.element("day tank", "open-tank", "day tank", medium="water", area=area)
    b.drive("header level", "level", "header", medium="water").reading("day tank level", "level", "day tank")
    c = area / (rho * G)
    return b, ([1.0, r * c, i * c], [[[1.0]]])


def line_into_chamber(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Two resistances in series are one: 1/(I C s² + (R1 + R2) C s + 1)."""
    r, r2, i, c = x
    b = RigBuilder()
    b.element("valve", "fluid-resistance", ("a", "b"), resistance=r)
    b.element("bend", "fluid-resistance", ("b", "c"), resistance=r2)
    b.element("pipe", "fluid-inertance", ("c", "d"), inertance=i)
    b.element("chamber", "chamber", "d", compliance=c)
    b.drive("p in", "pressure", "a").reading("p out", "pressure", "d")
    return b, ([1.0, (r + r2) * c, i * c], [[[1.0]]])


def current_and_voltage_source(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """A coil from a supply to a shunted node that is also fed by a current; coil current and node voltage.

    L s i = u − v, i + j = C s v + v/R: the denominator is R L C s² + L s + R.
    """
    ell, c, r = x
    b = RigBuilder()
    b.element("coil", "inductor", ("supply", "node"), inductance=ell)
    b.element("smoothing", "capacitor", "node", capacitance=c)
    b.element("burden", "resistor", "node", resistance=r)
    b.drive("supply", "voltage", "supply").drive("feed", "current", "node")
    b.reading("coil current", "current", through="coil").reading("node voltage", "voltage", "node")
    den = [r, ell, r * ell * c]
    return b, (den, [[[1.0, r * c], [-r]], [[r], [0.0, r * ell]]])


def pressure_rate_capsule(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """A bellows in a leaky case: displacement per pressure, with a derivative in the numerator.

    Inside p1, outside p; the leak feeds the case volume C and the bellows: C s p1 = (p − p1)/R − A v.
    The bellows is pushed by p − p1 against spring k, damper d and mass m: (m s² + d s + k) x = A (p − p1).
    With the port pair (outside, inside): A v flows out of the outside and into the inside.
    """
    r, c, a, m, d, k = x
    b = RigBuilder()
    b.element("leak", "fluid-resistance", ("outside", "inside"), resistance=r)
    b.element("case", "chamber", "inside", compliance=c)
    b.element("capsule", "bellows", ("outside", "inside"), "rod", area=a, stiffness=k)
    b.element("rod", "mass", "rod", mass=m).element("dashpot", "damper", "rod", damping=d)
    b.drive("static pressure", "pressure", "outside").reading("travel", "displacement", "rod")
    # e = p − p1: C s (p − e) = e/R + A v  ->  (R C s + 1) e = R C s p − R A s x
    # (m s² + d s + k) x = A e
    den = [k, d + k * r * c + r * a * a, m + d * r * c, m * r * c]
    return b, (den, [[[0.0, a * r * c]]])


def motor(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Supply voltage and opposing load in, current and speed out."""
    r, ell, k, j, d = x
    b = RigBuilder()
    b.element("winding", "resistor", ("supply", "w"), resistance=r)
    b.element("coil", "inductor", ("w", "brush"), inductance=ell)
    b.element("motor", "motor", "brush", "shaft", constant=k)
    b.element("rotor", "inertia", "shaft", inertia=j).element("bearing", "rotary-damper", "shaft", damping=d)
    b.drive("supply", "voltage", "supply").drive("load", "torque", ("shaft", GROUND), at=False)
    b.reading("current", "current", through="winding").reading("speed", "angular velocity", "shaft")
    den = [r * d + k * k, r * j + ell * d, ell * j]
    return b, (den, [[[d, j], [k]], [[k], [-r, -ell]]])


def rlc(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Capacitor voltage and resistor voltage of a series circuit."""
    r, ell, c = x
    b = RigBuilder()
    b.element("r", "resistor", ("in", "a"), resistance=r).element("l", "inductor", ("a", "b"), inductance=ell)
    b.element("c", "capacitor", "b", capacitance=c)
    b.drive("u", "voltage", "in").reading("uc", "voltage", "b").reading("ur", "voltage", ("in", "a"))
    return b, ([1.0, r * c, ell * c], [[[1.0]], [[0.0, r * c]]])


def seismic_pickup(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Travel of the mass against its case per displacement of the case: −m s²/(m s² + d s + k)."""
    m, d, k = x
    b = RigBuilder()
    b.element("mass", "mass", "bob", mass=m).element("spring", "spring", ("case", "bob"), stiffness=k)
    b.element("dashpot", "damper", ("case", "bob"), damping=d)
    b.drive("ground", "displacement", "case").reading("travel", "displacement", ("bob", "case"))
    return b, ([k, d, m], [[[0.0, 0.0, -m]]])


def geared_inertia(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Two inertias tied by a gear are one: (J1 + n² J2) s + d1 + n² d2; the second turns −n times."""
    j1, j2, d1, d2, n = x
    b = RigBuilder()
    b.element("motor rotor", "inertia", "fast", inertia=j1).element("b1", "rotary-damper", "fast", damping=d1)
    b.element("gear", "gear", "fast", "slow", ratio=-n)
    b.element("drum", "inertia", "slow", inertia=j2).element("b2", "rotary-damper", "slow", damping=d2)
    b.drive("torque", "torque", "fast").reading("drum speed", "angular velocity", "slow")
    return b, ([d1 + n * n * d2, j1 + n * n * j2], [[[-n]]])


def lever_balance(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """A force on one arm, a mass, spring and dashpot on the other, seen through the ratio n."""
    m, d, k, n = x
    b = RigBuilder()
    b.element("beam", "lever", "pan", "arm", ratio=n)
    b.element("counterweight", "mass", "arm", mass=m).element("spring", "spring", "arm", stiffness=k)
    b.element("dashpot", "damper", "arm", damping=d)
    b.drive("force", "force", "pan").reading("arm travel", "displacement", "arm")
    return b, ([n * k, n * d, n * m], [[[1.0]]])


def rack_drive(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """A pinion of inertia J and radius r moves mass m on a dashpot: (J + r² m) s + r² d, v = r ω."""
    j, m, d, r = x
    b = RigBuilder()
    b.element("pinion", "inertia", "shaft", inertia=j).element("rack", "rack", "shaft", "slide", radius=r)
    b.element("slide", "mass", "slide", mass=m).element("guide", "damper", "slide", damping=d)
    b.drive("torque", "torque", "shaft").reading("slide speed", "velocity", "slide")
    return b, ([r * r * d, j + r * r * m], [[[r]]])


def hydraulic_piston(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Oil through a resistance into a cylinder of compliance C that pushes m and d.

    C s p = (u − p)/R − A v, (m s + d) v = A p.
    """
    r, c, a, m, d = x
    b = RigBuilder()
    b.element("port", "fluid-resistance", ("pump", "cylinder"), resistance=r)
    b.element("oil", "chamber", "cylinder", compliance=c).element(
        "piston", "piston", "cylinder", "rod", area=a
    )
    b.element("load", "mass", "rod", mass=m).element("seal", "damper", "rod", damping=d)
    b.drive("pump", "pressure", "pump").reading("rod speed", "velocity", "rod")
    b.reading("oil into piston", "flow", through="piston")
    den = [d + r * a * a, m + d * r * c, m * r * c]
    return b, (den, [[[a]], [[a * a]]])


def thermal_pair(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """A heated plate joined to a block that loses heat to ambient."""
    c1, c2, r1, r2 = x
    b = RigBuilder()
    b.element("plate", "heat-capacity", "plate", capacity=c1)
    b.element("block", "heat-capacity", "block", capacity=c2)
    b.element("joint", "thermal-resistance", ("plate", "block"), resistance=r1)
    b.element("loss", "thermal-resistance", "block", resistance=r2)
    b.drive("heater", "heat flow", "plate").reading("plate", "temperature", "plate")
    b.reading("block", "temperature", "block")
    den = [1.0, r2 * c1 + r2 * c2 + r1 * c1, r1 * r2 * c1 * c2]
    return b, (den, [[[r1 + r2, r1 * r2 * c2]], [[r2]]])


def rc_ladder(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """Three RC sections, each loading the one before."""
    r1, c1, r2, c2, r3, c3 = x
    b = RigBuilder()
    for k, (r, c) in enumerate(((r1, c1), (r2, c2), (r3, c3))):
        b.element(f"r{k}", "resistor", (f"n{k}", f"n{k + 1}"), resistance=r)
        b.element(f"c{k}", "capacitor", f"n{k + 1}", capacitance=c)
    b.drive("u", "voltage", "n0").reading("y", "voltage", "n3")
    a1 = r1 * (c1 + c2 + c3) + r2 * (c2 + c3) + r3 * c3
    a2 = r1 * c1 * (r2 * c2 + r2 * c3 + r3 * c3) + r2 * c2 * r3 * c3 + r1 * c2 * r3 * c3
    return b, ([1.0, a1, a2, r1 * c1 * r2 * c2 * r3 * c3], [[[1.0]]])


def two_lines_two_chambers(x: list[float]) -> tuple[RigBuilder, Polynomials]:
    """With Z = R + I s and Y = C s: 1/(Z1 Y1 + Z1 Y2 + Z2 Y2 + Z1 Y1 Z2 Y2 + 1), fourth order."""
    r1, i1, c1, r2, i2, c2 = x
    b = RigBuilder()
    for k, (r, i, c) in enumerate(((r1, i1, c1), (r2, i2, c2))):
        b.element(f"loss {k}", "fluid-resistance", (f"n{k}", f"m{k}"), resistance=r)
        b.element(f"pipe {k}", "fluid-inertance", (f"m{k}", f"n{k + 1}"), inertance=i)
        b.element(f"chamber {k}", "chamber", f"n{k + 1}", compliance=c)
    b.drive("u", "pressure", "n0").reading("y", "pressure", "n2")
    den = [
        1.0,
        r1 * c1 + r1 * c2 + r2 * c2,
        i1 * c1 + i1 * c2 + i2 * c2 + r1 * c1 * r2 * c2,
        c1 * c2 * (r1 * i2 + r2 * i1),
        i1 * c1 * i2 * c2,
    ]
    return b, (den, [[[1.0]]])


CASES: list[tuple[Callable[[list[float]], tuple[RigBuilder, Polynomials]], int]] = [
    (line_into_open_tank, 4), (line_into_chamber, 4), (current_and_voltage_source, 3),
    (pressure_rate_capsule, 6), (motor, 5), (rlc, 3), (seismic_pickup, 3), (geared_inertia, 5),
    (lever_balance, 4), (rack_drive, 4), (hydraulic_piston, 5), (thermal_pair, 4), (rc_ladder, 6),
    (two_lines_two_chambers, 6),
]  # fmt: skip


def shuffled(build: RigBuilder, rng: np.random.Generator) -> tuple[RigBuilder, dict[str, float]]:
    """Elements in random order, nodes renamed, ends exchanged; the sign of each through reading."""
    nodes = {n for e in build.elements for p in e.ports for n in (p.first, p.second)}
    nodes |= {n for d in build.drives for n in (d.port.first, d.port.second)}
    names = {n: n if n == GROUND else f"node {k} of {rng.integers(999)}" for k, n in enumerate(sorted(nodes))}

    def moved(port: Port) -> Port:
        return Port(names[port.first], names[port.second])

    signs: dict[str, float] = {}
    elements = []
    for e in build.elements:
        ports = tuple(moved(p) for p in e.ports)
        if len(ports) == 1 and ports[0].second != GROUND and rng.random() < 0.5:
            ports = (Port(ports[0].second, ports[0].first),)
            signs[e.name] = -1.0
        elements.append(replace(e, ports=ports))
    rng.shuffle(elements)
    out = RigBuilder()
    out.elements, out.values, out.media = elements, build.values, build.media
    out.drives = [replace(d, port=moved(d.port)) for d in build.drives]
    out.readings = [replace(r, port=moved(r.port) if r.port else None) for r in build.readings]
    return out, signs


@pytest.mark.parametrize(("case", "count"), CASES, ids=lambda c: getattr(c, "__name__", str(c)))
def test_coefficients_agree_with_the_closed_form(case: Callable, count: int) -> None:
    """100 random sets over six decades: every coefficient of every entry to 1e-10, absent ones absent."""
    rng = np.random.default_rng(count)
    for _ in range(100):
        build, (den, nums) = case(list(10.0 ** rng.uniform(-3.0, 3.0, count)))
        build, signs = shuffled(build, rng)
        model = open_model(build.rig())
        found = model.solve()
        assert found.denominator.size == len(den)
        lead = den[-1]
        np.testing.assert_allclose(found.denominator, np.array(den) / lead, rtol=1e-10)
        for i, row in enumerate(nums):
            sign = signs.get(build.readings[i].through, 1.0)
            for j, wanted in enumerate(row):
                full = np.zeros(len(den))
                full[: len(wanted)] = np.array(wanted) * sign / lead
                np.testing.assert_allclose(found.numerators[i, j], full, rtol=1e-10, atol=0.0)
                assert model.form.powers[i][j] == tuple(np.flatnonzero(full))


def test_values_over_twenty_decades() -> None:
    """The closed form holds to 1e-12 where resistances and compliances lie twenty decades apart."""
    build, (den, _) = two_lines_two_chambers([1e10, 1e9, 1e-10, 3e9, 2e7, 4e-12])
    found = open_model(build.rig()).solve()
    np.testing.assert_allclose(found.denominator, np.array(den) / den[-1], rtol=1e-12)


def test_pressure_rate_capsule_reads_the_rate() -> None:
    """At low frequency the capsule's travel is A R C/k times the rate of the outside pressure."""
    r, c, a, m, d, k = 3e9, 2e-11, 4e-4, 0.02, 1.5, 900.0
    build, _ = pressure_rate_capsule([r, c, a, m, d, k])
    model = open_model(build.rig())
    assert model.form.name == "third-order-rate"
    assert model.solve().theta[0] == pytest.approx(a * r * c / k, rel=1e-12)
