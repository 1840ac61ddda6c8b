"""Every sentence of the rig file's "Signs and meanings", one by one."""

from __future__ import annotations

import numpy as np
import pytest

from rig_builder import GROUND, RigBuilder
from rigtally.errors import RigError
from rigtally.physics.prediction import predict


def gain(build: RigBuilder, s: complex = 1.0) -> complex:
    """G(s) of the only entry at one s."""
    found = predict(build.rig()).transfer_function
    powers = s ** np.arange(found.denominator.size)
    return complex(found.numerators[0, 0] @ powers / (found.denominator @ powers))


def divider() -> RigBuilder:
    b = RigBuilder().element("r", "resistor", ("a", "b"), resistance=2.0)
    return b.element("c", "capacitor", "b", capacitance=3.0)


def test_an_imposed_across_value_is_from_minus_to() -> None:
    """Imposed from ground to a node it drives the node negative."""
    up = gain(divider().drive("u", "voltage", ("a", GROUND)).reading("y", "voltage", "b"))
    down = gain(divider().drive("u", "voltage", (GROUND, "a"), at=False).reading("y", "voltage", "b"))
    assert up == pytest.approx(1.0 / 7.0) and down == pytest.approx(-1.0 / 7.0)


def test_a_through_value_imposed_at_a_node_drives_it_positive() -> None:
    """A positive current at a node charges its capacitor; a positive force at a mass speeds it up."""
    b = RigBuilder().element("c", "capacitor", "a", capacitance=2.0)
    b.element("r", "resistor", "a", resistance=4.0).drive("i", "current", "a").reading("y", "voltage", "a")
    assert gain(b) == pytest.approx(1.0 / (2.0 + 0.25))
    m = (
        RigBuilder()
        .element("m", "mass", "x", mass=2.0)
        .drive("f", "force", "x")
        .reading("v", "velocity", "x")
    )
    assert gain(m) == pytest.approx(0.5)


def test_a_load_from_shaft_to_ground_opposes_motion() -> None:
    """A positive load from the shaft to ground slows the shaft."""
    b = RigBuilder().element("j", "inertia", "shaft", inertia=2.0)
    b.element("d", "rotary-damper", "shaft", damping=1.0)
    b.drive("load", "torque", ("shaft", GROUND), at=False).reading("speed", "angular velocity", "shaft")
    assert gain(b) == pytest.approx(-1.0 / 3.0)


def test_an_across_reading_is_from_minus_to() -> None:
    """Read backwards, the sign turns."""
    forward = gain(divider().drive("u", "voltage", "a").reading("y", "voltage", ("a", "b")))
    backward = gain(divider().drive("u", "voltage", "a").reading("y", "voltage", ("b", "a")))
    assert forward == pytest.approx(6.0 / 7.0) and backward == -forward


def test_a_through_reading_counts_from_the_elements_from_to_its_to() -> None:
    """Current flows from the supply through the resistor; a turned resistor reads it negative."""
    b = divider().drive("u", "voltage", "a").reading("y", "current", through="r")
    assert gain(b) == pytest.approx(3.0 / 7.0)
    t = RigBuilder().element("r", "resistor", ("b", "a"), resistance=2.0)
    t.element("c", "capacitor", "b", capacitance=3.0).drive("u", "voltage", "a")
    assert gain(t.reading("y", "current", through="r")) == pytest.approx(-3.0 / 7.0)


def test_a_couplers_through_reading_is_at_its_primary() -> None:
    """The current into a transformer's first node is n times that out of its secondary; a pair turns it."""
    for port, sign in (("a", 1.0), ((GROUND, "a"), -1.0)):
        b = RigBuilder().element("t", "transformer", port, "b", ratio=2.0)
        b.element("r", "resistor", ("b", "c"), resistance=8.0).element("l", "inductor", "c", inductance=3.0)
        b.drive("u", "voltage", "a").reading("i", "current", through="t")
        # secondary voltage ±2 u over 8 + 3 s, reflected by 2
        assert gain(b) == pytest.approx(4.0 / 11.0 * sign)


def test_integrals_may_be_read_and_imposed() -> None:
    """displacement = velocity/s, charge = current/s, volume = flow/s, at s = 2; imposed likewise."""
    b = RigBuilder().element("m", "mass", "x", mass=3.0).element("d", "damper", "x", damping=1.0)
    b.drive("f", "force", "x")
    v, x = (gain(_with(b, of), 2.0) for of in ("velocity", "displacement"))
    a = gain(_with(b, "acceleration"), 2.0)
    assert x == pytest.approx(v / 2.0) and a == pytest.approx(v * 2.0)
    c = divider().drive("u", "voltage", "a")
    i = gain(RigBuilder.reading(_copy(c), "i", "current", through="c"), 2.0)
    assert gain(RigBuilder.reading(_copy(c), "q", "charge", through="c"), 2.0) == pytest.approx(i / 2.0)
    f = RigBuilder().element("l", "fluid-resistance", ("a", "b"), resistance=2.0)
    f.element("t", "chamber", "b", compliance=3.0).drive("u", "pressure", "a")
    q = gain(RigBuilder.reading(_copy(f), "q", "volume flow", through="l"), 2.0)
    assert gain(RigBuilder.reading(_copy(f), "v", "volume", through="l"), 2.0) == pytest.approx(q / 2.0)
    base = (
        RigBuilder().element("k", "spring", ("base", "x"), stiffness=5.0).element("m", "mass", "x", mass=2.0)
    )
    base.reading("y", "displacement", "x")
    expected = 5.0 / (2.0 * 4.0 + 5.0)
    assert gain(_copy(base).drive("u", "displacement", "base"), 2.0) == pytest.approx(expected)
    assert gain(_copy(base).drive("u", "velocity", "base"), 2.0) == pytest.approx(expected / 2.0)
    assert gain(_copy(base).drive("u", "acceleration", "base"), 2.0) == pytest.approx(expected / 4.0)


def _copy(build: RigBuilder) -> RigBuilder:
    out = RigBuilder(build.title)
    for key, value in vars(build).items():
        setattr(out, key, value.copy() if isinstance(value, list | dict) else value)
    return out


def _with(build: RigBuilder, of: str) -> RigBuilder:
    return _copy(build).reading("y", of, "x")


def test_a_level_is_pressure_over_rho_g() -> None:
    """Level read at an open tank, imposed with a named medium; a stated gravity is used."""
    for gravity, settings in ((9.80665, {}), (9.7803, {"gravity": 9.7803})):
        b = RigBuilder().medium("brine", density=1150.0)
        b.settings = settings
        b.element("pipe", "fluid-resistance", ("a", "t"), resistance=1e6)
        b.element("tank", "open-tank", "t", medium="brine", diameter=0.3)
        b.drive("u", "pressure", "a").reading("y", "level", "t")
        c = np.pi * 0.3**2 / 4.0 / (1150.0 * gravity)
        assert gain(b, 1e-2) == pytest.approx(1.0 / (1150.0 * gravity * (1e6 * c * 1e-2 + 1.0)), rel=1e-12)
    b = RigBuilder().medium("brine", density=1150.0)
    b.element("pipe", "fluid-resistance", ("a", "t"), resistance=1e6).element(
        "c", "chamber", "t", compliance=1e-6
    )
    b.drive("u", "level", "a", medium="brine").reading("y", "pressure", "t")
    assert gain(b, 0.5) == pytest.approx(1150.0 * 9.80665 / 1.5, rel=1e-12)


def test_a_level_without_a_medium_is_refused() -> None:
    """No open tank there and no medium named: which ρ g is unknown."""
    b = RigBuilder().element("r", "fluid-resistance", ("a", "t"), resistance=1.0)
    b.element("c", "chamber", "t", compliance=1.0).drive("u", "level", "a").reading("y", "pressure", "t")
    with pytest.raises(RigError) as refused:
        predict(b.rig())
    assert refused.value.code == "level-without-medium" and "'u'" in refused.value.line()


def test_a_positive_pressure_pushes_a_pistons_secondary_and_gives_flow() -> None:
    """Pressure moves the rod positive; area times velocity leaves the primary's first node."""
    b = RigBuilder().element("p", "piston", "oil", "rod", area=0.2).element("d", "damper", "rod", damping=4.0)
    b.element("m", "mass", "rod", mass=1.0).drive("u", "pressure", "oil")
    assert gain(_copy(b).reading("v", "velocity", "rod")) == pytest.approx(0.2 / 5.0)
    assert gain(_copy(b).reading("q", "flow", through="p")) == pytest.approx(0.04 / 5.0)


def test_a_bellows_stiffness_acts_at_its_secondary() -> None:
    """Force balance at the rod: (d s + k) x = A p."""
    b = RigBuilder().element("p", "bellows", "air", "rod", area=0.2, stiffness=6.0)
    b.element("d", "damper", "rod", damping=4.0).drive("u", "pressure", "air").reading(
        "x", "displacement", "rod"
    )
    assert gain(b) == pytest.approx(0.2 / 10.0)


def test_a_motors_positive_current_drives_its_secondary_forward() -> None:
    """(J s + d) ω = K i, and the back voltage K ω opposes."""
    b = RigBuilder().element("r", "resistor", ("s", "b"), resistance=2.0)
    b.element("m", "motor", "b", "shaft", constant=0.5).element("j", "inertia", "shaft", inertia=3.0)
    b.drive("u", "voltage", "s").reading("w", "angular velocity", "shaft")
    assert gain(b) == pytest.approx(0.5 / (2.0 * 3.0 + 0.25))


@pytest.mark.parametrize("ratio", [2.5, -2.5])
def test_ratio_is_across_of_secondary_per_primary(ratio: float) -> None:
    """Secondary speed = ratio × primary speed, negative ratios turn it."""
    b = RigBuilder().element("g", "gear", "a", "b", ratio=ratio).element("j", "inertia", "b", inertia=2.0)
    b.drive("t", "torque", "a")
    first = gain(_copy(b).reading("w", "angular velocity", "a"))
    second = gain(_copy(b).reading("w", "angular velocity", "b"))
    assert second == pytest.approx(ratio * first) and first == pytest.approx(1.0 / (2.0 * ratio**2))


def test_rack_velocity_is_radius_times_angular_velocity() -> None:
    """v = r ω, and the torque is r times the force."""
    b = RigBuilder().element("r", "rack", "a", "b", radius=0.1).element("m", "mass", "b", mass=2.0)
    b.drive("t", "torque", "a").reading("v", "velocity", "b")
    assert gain(b) == pytest.approx(0.1 / (2.0 * 0.01))


def test_a_springs_force_is_positive_when_it_pushes_its_to_forward() -> None:
    """A base that moves forward pushes the mass forward through the spring, and the reading is positive."""
    b = RigBuilder().element("k", "spring", ("base", "x"), stiffness=5.0).element("m", "mass", "x", mass=2.0)
    b.drive("u", "displacement", "base").reading("f", "force", through="k")
    assert gain(b, 0.1).real > 0.0
    assert gain(b, 0.1) == pytest.approx(5.0 * (1.0 - 5.0 / (0.02 + 5.0)), rel=1e-9)


def test_a_reading_that_needs_a_drives_derivative_is_refused_by_name() -> None:
    """A capacitor's current under an imposed voltage: named, with what to do."""
    b = RigBuilder().element("c", "capacitor", "a", capacitance=1.0).drive("supply", "voltage", "a")
    b.reading("inrush", "current", through="c")
    with pytest.raises(RigError) as refused:
        predict(b.rig())
    assert refused.value.code == "needs-derivative"
    for word in ("'inrush'", "'supply'", "put a resistance between", "drive"):
        assert word in refused.value.line()


REFUSED = {
    "floating-node": (
        lambda b: b.element("r1", "resistor", ("a", "b"), resistance=1.0)
        .element("c", "capacitor", "a", capacitance=1.0)
        .element("lost coil", "inductor", ("x", "y"), inductance=1.0)
        .drive("u", "voltage", "b"),
        ("'x'", "'y'", "'lost coil'"),
    ),
    "loop-of-drives": (
        lambda b: b.element("r1", "resistor", "a", resistance=1.0)
        .drive("first", "voltage", "a").drive("second", "voltage", ("a", "b")).drive("third", "voltage", "b"),
        ("'first'", "'second'", "'third'"),
    ),
    "cut-set-of-drives": (
        lambda b: b.element("r1", "resistor", "a", resistance=1.0)
        .element("c", "capacitor", ("x", "y"), capacitance=1.0)
        .drive("feed", "current", ("x", "a")).drive("u", "voltage", "a"),
        ("'feed'", "'x'", "'y'"),
    ),
    "singular-network": (
        lambda b: b.element("g1", "gear", "a", "b", ratio=2.0)
        .element("g2", "gear", "a", "b", shared={"ratio": "g1.ratio"})
        .element("j", "inertia", "b", inertia=1.0).drive("u", "torque", "a"),
        ("'g",),
    ),
    "no-drive": (lambda b: b.element("r", "resistor", "a", resistance=1.0), ("[[drive]]",)),
    "unmoved-reading": (
        lambda b: b.element("c", "capacitor", "a", capacitance=1.0)
        .element("r", "resistor", "a", resistance=1.0)
        .element("d", "resistor", "b", resistance=1.0).drive("u", "voltage", "b"),
        ("'y'",),
    ),
}  # fmt: skip


@pytest.mark.parametrize("code", REFUSED)
def test_a_faulty_structure_is_refused_by_the_names_concerned(code: str) -> None:
    """Before any number: which elements, drives or nodes are at fault."""
    make, words = REFUSED[code]
    build = make(RigBuilder())
    of = "angular velocity" if code == "singular-network" else "voltage"
    with pytest.raises(RigError) as refused:
        predict(build.reading("y", of, "a").rig())
    assert refused.value.code == code
    for word in words:
        assert word in refused.value.line(), refused.value.line()


def test_tied_states_are_one() -> None:
    """Two capacitors in parallel, masses on a rigid lever: one state, both values in it."""
    b = RigBuilder().element("r", "resistor", ("a", "b"), resistance=2.0)
    b.element("c1", "capacitor", "b", capacitance=3.0).element("c2", "capacitor", "b", capacitance=4.0)
    b.drive("u", "voltage", "a").reading("y", "voltage", "b")
    found = predict(b.rig())
    assert found.form.name == "first-order"
    assert found.parameters["time_constant"].value == pytest.approx(14.0, rel=1e-14)


def test_common_factors_are_removed_and_named() -> None:
    """Two equal branches with shared values move together: the pole of their difference is in no entry."""
    b = RigBuilder().element("r", "resistor", ("a", "b"), resistance=2.0)
    b.element("c", "capacitor", "b", capacitance=3.0)
    b.element("twin r", "resistor", ("a", "d"), shared={"resistance": "r.resistance"})
    b.element("twin c", "capacitor", "d", shared={"capacitance": "c.capacitance"})
    b.element("bridge", "resistor", ("b", "d"), resistance=1.0)
    b.drive("u", "voltage", "a").reading("y", "voltage", "b")
    found = predict(b.rig())
    # the two equal branches move together; the bridge between them carries nothing
    assert found.form.name == "first-order"
    assert found.parameters["time_constant"].value == pytest.approx(6.0, rel=1e-12)
    assert found.removed_poles == (pytest.approx(-(0.5 + 2.0) / 3.0),)
    assert [w.code for w in found.warnings if w.code == "removed-pole"]


def test_a_chance_cancellation_is_told_apart_from_structure() -> None:
    """Equal values that are stated apart: the order is that of the nominal values, and it is said."""
    b = RigBuilder().element("r", "resistor", ("a", "b"), resistance=2.0)
    b.element("c", "capacitor", "b", capacitance=(3.0, 0.1))
    b.element("twin r", "resistor", ("a", "d"), resistance=2.0)
    b.element("twin c", "capacitor", "d", capacitance=3.0).element(
        "bridge", "resistor", ("b", "d"), resistance=1.0
    )
    b.drive("u", "voltage", "a").reading("y", "voltage", "b")
    found = predict(b.rig())
    assert found.form.name == "first-order"
    assert found.parameters["time_constant"].value == pytest.approx(6.0, rel=1e-9)
    assert "cancelled-by-chance" in [w.code for w in found.warnings]
