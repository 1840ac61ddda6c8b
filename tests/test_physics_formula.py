"""Formulas in the names of the elements, held against the numbers."""

from __future__ import annotations

import numpy as np
import pytest
import sympy

from rig_builder import RigBuilder, impulse_line
from rigtally.errors import RigError
from rigtally.physics.formula import formula
from rigtally.physics.prediction import open_model
from test_physics_closed_forms import CASES
from test_physics_random_networks import collect


def numbers(found, model, values: np.ndarray) -> dict:
    symbols = model.values.symbol_values(values, model.omega)
    return {sympy.Symbol(name): x for (name, _, _), x in zip(found.symbols, symbols, strict=True)}


def held(build: RigBuilder, rng: np.random.Generator) -> None:
    """G(s) at two points, the gains, ωn and ζ, from the formula and from the numbers."""
    rig = build.rig()
    model = open_model(rig)
    found = formula(rig)
    values = model.values.nominal * 10.0 ** rng.uniform(-0.5, 0.5, model.values.nominal.size)
    table = numbers(found, model, values)
    den, nums = model.coefficients(values, model.omega)
    for (i, j), line in zip(model.form.entries, found.entries, strict=True):
        for s in (0.37 + 0.9j, 2.1 - 0.2j):
            mine = complex(line.expression.subs({**table, sympy.Symbol("s"): s}))
            powers = s ** np.arange(den.size)
            assert mine == pytest.approx(nums[i, j] @ powers / (den @ powers), rel=1e-8), line.plain
    theta = dict(zip(model.form.names, model.evaluate(values), strict=True))
    for line in found.parameters:
        if line.name in theta and not line.expression.has(sympy.Symbol("tau")):
            got = complex(line.expression.subs(table))
            wanted = theta[line.name]
            assert abs(got) == pytest.approx(abs(wanted), rel=1e-8), line.plain


@pytest.mark.parametrize("case", [c for c, _ in CASES], ids=lambda c: c.__name__)
def test_formula_agrees_with_the_numbers(case) -> None:
    """Every closed-form rig: symbols replaced by random values give the numeric road's result."""
    rng = np.random.default_rng(2)
    count = dict(CASES)[case]
    build, _ = case(list(10.0 ** rng.uniform(-1.0, 1.0, count)))
    held(build, rng)


def test_formula_of_random_networks_agrees_with_the_numbers() -> None:
    """Seven random networks, those with a factor common to all entries among them."""
    rng = np.random.default_rng(3)
    for _, build in collect(7):
        held(build, rng)


def test_third_order_parameters_follow_from_the_printed_cubic() -> None:
    """τ is the largest root of the printed cubic; ωn and ζ follow from it by the printed formulas."""
    case, count = next((c, n) for c, n in CASES if c.__name__ == "pressure_rate_capsule")
    build, _ = case([1.3, 0.6, 0.9, 1.1, 0.7, 2.0][:count])
    model, found = open_model(build.rig()), formula(build.rig())
    table = numbers(found, model, model.values.nominal)
    tau = sympy.Symbol("tau")
    lines = {line.name: line.expression.subs(table) for line in found.parameters}
    cubic = next(e for name, e in lines.items() if name.startswith("0 "))
    roots = [complex(r) for r in sympy.Poly(cubic, tau).nroots()]
    real = max(r.real for r in roots if abs(r.imag) < 1e-9)
    theta = dict(zip(model.form.names, model.solve().theta, strict=True))
    assert real == pytest.approx(theta["time_constant"], rel=1e-9)
    for name in ("natural_frequency", "damping_ratio"):
        assert float(lines[name].subs({tau: real})) == pytest.approx(theta[name], rel=1e-9)


def test_formula_reads_as_a_person_would_write_it() -> None:
    """The impulse line: 1/(C I s² + C R s + 1), ωn = √(1/(C I)), ζ = R/2 √(C/I), in the elements' names."""
    found = formula(impulse_line().rig())
    assert found.entries[0].plain == (
        "1/(C_gauge_chamber*I_impulse_line*s^2 + C_gauge_chamber*R_impulse_line*s + 1)"
    )
    plain = {line.name: line.plain for line in found.parameters}
    assert plain["natural_frequency"] == "sqrt(1/(C_gauge_chamber*I_impulse_line))"
    assert plain["damping_ratio"] == "R_impulse_line*sqrt(C_gauge_chamber/I_impulse_line)/2"
    assert r"\frac{1}{C_{\mathrm{gauge\ chamber}} I_{\mathrm{impulse\ line}} s^{2}" in found.latex
    assert found.to_dict()["schema"] == "rigtally/formula/1"


def test_a_formula_that_nobody_could_read_is_refused() -> None:
    """A ladder of thirty sections has more terms than a reader has days."""
    b = RigBuilder()
    for k in range(30):
        b.element(f"r{k}", "resistor", (f"n{k}", f"n{k + 1}"), resistance=1.0)
        b.element(f"c{k}", "capacitor", f"n{k + 1}", capacitance=1.0)
    with pytest.raises(RigError) as refused:
        formula(b.drive("u", "voltage", "n0").reading("y", "voltage", "n30").rig())
    assert refused.value.code == "formula-too-large"
