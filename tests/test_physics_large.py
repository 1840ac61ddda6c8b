"""Large rigs: ladders against their closed form, the two roads against each other, the dominant pair."""

from __future__ import annotations

import json
import time

import numpy as np
import pytest

from rig_builder import RigBuilder
from rigtally.physics.large_model import LargeModel
from rigtally.physics.network import assemble
from rigtally.physics.pencil import Pencil, System
from rigtally.physics.prediction import open_model, predict
from rigtally.physics.rig_values import RigValues
from test_physics_random_networks import collect


def rc_ladder(sections: int, r: float = 1.3, c: float = 0.7) -> RigBuilder:
    b = RigBuilder()
    for k in range(sections):
        b.element(f"r{k}", "resistor", (f"n{k}", f"n{k + 1}"), resistance=(r, 0.01 * r))
        b.element(f"c{k}", "capacitor", f"n{k + 1}", capacitance=(c, 0.01 * c))
    return b.drive("u", "voltage", "n0").reading("y", "voltage", f"n{sections}")


def rc_poles(sections: int, r: float = 1.3, c: float = 0.7) -> np.ndarray:
    """−(2 − 2 cos((2k − 1)π/(2n + 1)))/(R C): the eigenvalues of the tridiagonal matrix, slowest first."""
    k = np.arange(1, sections + 1)
    return -(2.0 - 2.0 * np.cos((2 * k - 1) * np.pi / (2 * sections + 1))) / (r * c)


def rc_response(sections: int, s: complex, r: float = 1.3, c: float = 0.7) -> complex:
    """cosh(γ/2)/cosh((n + ½)γ), 4 sinh²(γ/2) = s R C: the recursion of the ladder solved."""
    g = 2.0 * np.arcsinh(0.5 * np.sqrt(s * r * c + 0j))
    return complex(np.cosh(0.5 * g) / np.cosh((sections + 0.5) * g))


def test_poles_and_response_of_a_50_section_ladder() -> None:
    """100 elements, order 50: every pole and the response over six decades to 1e-9 of the closed form."""
    network = assemble(rc_ladder(50).rig())
    values = RigValues(network.rig, network.symbols)
    pencil = Pencil(System(network), values.symbol_values(values.nominal, 1.0))
    np.testing.assert_allclose(pencil.modes().poles, rc_poles(50), rtol=1e-9)
    s = 1j * np.geomspace(1e-5, 10.0, 40)
    mine = pencil.response(s)[:, 0, 0]
    np.testing.assert_allclose(mine, [rc_response(50, x) for x in s], rtol=1e-9)
    assert pencil.zeros(0, 0).size == 0


def test_values_over_twenty_decades_in_a_ladder() -> None:
    """Resistances of 1e10 and capacitances of 1e-10: scaled first, the poles keep their digits."""
    network = assemble(rc_ladder(50, 1.3e10, 0.7e-10).rig())
    values = RigValues(network.rig, network.symbols)
    pencil = Pencil(System(network), values.symbol_values(values.nominal, 1.0))
    np.testing.assert_allclose(pencil.modes().poles, rc_poles(50), rtol=1e-9)


def test_dominant_pair_of_a_large_rig() -> None:
    """Order 25: the two slowest poles stand for it, with the share that they explain, and exact derivatives."""
    found = predict(rc_ladder(25).rig())
    p1, p2 = rc_poles(25)[:2]
    assert found.form.name == "second-order"
    assert found.parameters["gain"].value == pytest.approx(1.0, rel=1e-10)
    assert found.parameters["natural_frequency"].value == pytest.approx(np.sqrt(p1 * p2), rel=1e-9)
    assert found.parameters["damping_ratio"].value == pytest.approx(
        -(p1 + p2) / 2 / np.sqrt(p1 * p2), rel=1e-9
    )
    share = next(f.value for f in found.limits if f.code == "dominant-pair")
    assert 0.99 < share < 1.0
    # all time constants are proportional to every R: ωn's derivative by all R together is −ωn/R
    together = sum(
        s for n, s in zip(found.input_names, found.sensitivity[1], strict=True) if n.startswith("r")
    )
    assert together == pytest.approx(-found.parameters["natural_frequency"].value / 1.3, rel=1e-8)
    document = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert len(document["poles"]) == 25 and document["transfer"][0]["zeros"] == []
    assert found.derived["time_constant_1"].value == pytest.approx(-1.0 / p1, rel=1e-9)


def mass_chain(masses: int) -> RigBuilder:
    """A chain of masses and springs, clamped at one end, shaken at the other end's mass."""
    b = RigBuilder()
    for k in range(masses):
        b.element(f"m{k}", "mass", f"x{k}", mass=1.0)
        pair = (f"x{k - 1}", f"x{k}") if k else f"x{k}"
        b.element(f"k{k}", "spring", pair, stiffness=4.0).element(f"d{k}", "damper", pair, damping=0.02)
    end = f"x{masses - 1}"
    return b.drive("f", "force", end).reading("travel", "displacement", end)


def test_dominant_pair_of_a_chain() -> None:
    """Twelve masses: the lowest mode 2√(k/m) sin(π/(2(2n + 1))), ζ = d ω/(2k), gain n/k; and its share."""
    found = predict(mass_chain(12).rig())
    w = 2.0 * 2.0 * np.sin(np.pi / (2 * 25))
    assert found.parameters["natural_frequency"].value == pytest.approx(w, rel=1e-9)
    assert found.parameters["damping_ratio"].value == pytest.approx(0.02 * w / 8.0, rel=1e-8)
    assert found.parameters["gain"].value == pytest.approx(12 / 4.0, rel=1e-9)
    assert found.derived["natural_frequency_12"].value == pytest.approx(
        4.0 * np.sin(23 * np.pi / 50), rel=1e-9
    )


def test_the_two_roads_agree() -> None:
    """Forty random networks, by expanded determinants and by the pencil: same form, parameters, derivatives."""
    compared = 0
    for seed, build in collect(40):
        rig = build.rig()
        first, second = open_model(rig), LargeModel(rig, assemble(rig))
        assert second.form.powers == first.form.powers, seed
        assert second.form.integrators == first.form.integrators, seed
        a, b = first.solve(), second.solve()
        size = np.maximum(np.abs(a.theta), 1e-6)
        assert np.all(np.abs(a.theta - b.theta) <= 1e-8 * size), seed
        scale = size[:, None] / np.abs(first.values.nominal)
        assert np.all(np.abs(a.sensitivity - b.sensitivity) <= 1e-6 * scale), seed
        compared += 1
    assert compared == 40


def test_many_elements_of_low_order_have_polynomials() -> None:
    """Fifty resistors in a mesh and three capacitors: order 3, by the pencil, held against its own response."""
    b = RigBuilder()
    for i in range(5):
        for j in range(5):
            if j < 4:
                b.element(
                    f"h{i}{j}", "resistor", (f"n{i}{j}", f"n{i}{j + 1}"), resistance=1.0 + 0.1 * i + 0.01 * j
                )
            if i < 4:
                b.element(f"v{i}{j}", "resistor", (f"n{i}{j}", f"n{i + 1}{j}"), resistance=1.5 + 0.1 * j)
    for k, node in enumerate(("n44", "n22", "n40")):
        b.element(f"c{k}", "capacitor", node, capacitance=1.0 + k)
    rig = b.drive("u", "voltage", "n00").reading("y", "voltage", "n44").rig()
    model = open_model(rig)
    assert model.form.order == 3 and isinstance(model, LargeModel)
    found = model.solve()
    s = 0.3j
    powers = s ** np.arange(4)
    network = assemble(rig)
    pencil = Pencil(System(network), model.values.symbol_values(model.values.nominal, 1.0))
    wanted = pencil.response(np.array([s]))[0, 0, 0]
    assert found.numerators[0, 0] @ powers / (found.denominator @ powers) == pytest.approx(wanted, rel=1e-8)
    assert found.numerators[0, 0, 0] / found.denominator[0] == pytest.approx(1.0, rel=1e-9)


def test_size_and_time() -> None:
    """500 elements are predicted within seconds (a generous bound: an accident, not a benchmark)."""
    start = time.process_time()
    found = predict(rc_ladder(250).rig())
    assert time.process_time() - start < 15.0
    p1, p2 = rc_poles(250)[:2]
    assert found.parameters["natural_frequency"].value == pytest.approx(np.sqrt(p1 * p2), rel=1e-7)
