"""Predictions: exact derivatives, budgets, Monte Carlo, units, JSON."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import signal

from rig_builder import RigBuilder, impulse_line, limits
from rigtally.physics.prediction import open_model, predict
from rigtally.quantities.uncertain import Uncertain
from test_physics_closed_forms import CASES
from test_physics_random_networks import collect


def series_circuit() -> RigBuilder:
    b = RigBuilder().element("r", "resistor", ("in", "a"), resistance=(10.0, 0.1))
    b.element("l", "inductor", ("a", "b"), inductance=(1e-3, 2e-5))
    b.element("c", "capacitor", "b", capacitance=(1e-6, 1e-8))
    return b.drive("u", "voltage", "in").reading("y", "voltage", "b")


def test_series_and_parallel_circuit() -> None:
    """R 10 Ω, L 1 mH, C 1 µF: ωn 31622.7766, ζ 0.15811388; with 100 Ω in parallel the same (textbook)."""
    found = predict(series_circuit().rig())
    assert found.parameters["natural_frequency"].value == pytest.approx(31622.7766, rel=1e-7)
    assert found.derived["natural_frequency_hz"].value == pytest.approx(5032.92121, rel=1e-7)
    assert found.parameters["damping_ratio"].value == pytest.approx(0.15811388, rel=1e-7)
    b = (
        RigBuilder()
        .element("r", "resistor", "a", resistance=100.0)
        .element("l", "inductor", "a", inductance=1e-3)
    )
    b.element("c", "capacitor", "a", capacitance=1e-6).drive("i", "current", "a").reading("y", "voltage", "a")
    assert predict(b.rig()).parameters["damping_ratio"].value == pytest.approx(0.15811388, rel=1e-7)


def test_motor() -> None:
    """R 2 Ω, L 1 mH, K 0.05, J 2e-5, b 1e-5 (textbook, from memory; verified by eigenvalues)."""
    case = next(c for c, _ in CASES if c.__name__ == "motor")
    found = predict(case([2.0, 1e-3, 0.05, 2e-5, 1e-5])[0].rig())
    p = found.parameters
    assert p["gain(speed, supply)"].value == pytest.approx(19.8412698, rel=1e-7)
    assert p["natural_frequency"].value == pytest.approx(354.964787, rel=1e-7)
    assert p["damping_ratio"].value == pytest.approx(2.81788514, rel=1e-7)
    assert found.derived["time_constant_1"].value == pytest.approx(1 / 65.1029193, rel=1e-7)
    assert found.derived["time_constant_2"].value == pytest.approx(1 / 1935.39708, rel=1e-7)


def two_masses() -> RigBuilder:
    b = RigBuilder()
    b.element("m1", "mass", "a", mass=1.0).element("m2", "mass", "b", mass=1.0)
    b.element("k1", "spring", "a", stiffness=1.0).element("c1", "damper", "a", damping=0.1)
    b.element("k2", "spring", ("a", "b"), stiffness=1.0).element("c2", "damper", ("a", "b"), damping=0.2)
    b.drive("f1", "force", "a").drive("f2", "force", "b")
    return b.reading("x1", "displacement", "a").reading("x2", "displacement", "b")


def test_two_mass_chain_against_scipy() -> None:
    """Whole 2 × 2 matrix against scipy.signal.ss2tf of hand-written A, B, C, D; reciprocity."""
    found = predict(two_masses().rig()).transfer_function
    a = [[0, 0, 1, 0], [0, 0, 0, 1], [-2.0, 1.0, -0.3, 0.2], [1.0, -1.0, 0.2, -0.2]]
    b = [[0, 0], [0, 0], [1, 0], [0, 1]]
    c, d = [[1, 0, 0, 0], [0, 1, 0, 0]], np.zeros((2, 2))
    for j in range(2):
        num, den = signal.ss2tf(a, b, c, d, input=j)
        np.testing.assert_allclose(found.denominator, den[::-1], rtol=1e-10)
        np.testing.assert_allclose(found.numerators[:, j], num[:, ::-1], atol=1e-12)
    np.testing.assert_array_equal(found.numerators[0, 1], found.numerators[1, 0])
    # M01: x1 per f1 has s² + 0.2 s + 1, x2 per f2 has s² + 0.3 s + 2
    np.testing.assert_allclose(found.numerators[0, 0], [1.0, 0.2, 1.0, 0.0, 0.0], atol=1e-14)
    np.testing.assert_allclose(found.numerators[1, 1], [2.0, 0.3, 1.0, 0.0, 0.0], atol=1e-14)


def test_two_mass_chain_known_poles() -> None:
    """Two-mass chain: 0.6183096 and 1.6173127 rad/s with ζ 0.0394107 and 0.1395104 (two libraries agree)."""
    derived = predict(two_masses().rig()).derived
    assert derived["natural_frequency_1"].value == pytest.approx(0.6183096, abs=1e-6)
    assert derived["natural_frequency_2"].value == pytest.approx(1.6173127, abs=1e-6)
    assert derived["damping_ratio_1"].value == pytest.approx(0.0394107, abs=1e-6)
    assert derived["damping_ratio_2"].value == pytest.approx(0.1395104, abs=1e-6)


def derivative_holds(build: RigBuilder) -> None:
    """Exact derivatives against fourth-order differences of the re-solved network."""
    model = open_model(build.rig())
    solved = model.solve()
    x = model.values.nominal
    for k in range(x.size):
        h = 2e-3 * (x[k] or 1.0)
        f = []
        for m in (-2, -1, 1, 2):
            v = x.copy()
            v[k] += m * h
            f.append(model.evaluate(v))
        slope = (f[0] - 8 * f[1] + 8 * f[2] - f[3]) / (12 * h)
        size = np.abs(solved.theta) / abs(x[k]) if x[k] else np.abs(slope)
        good = np.isfinite(slope)
        assert good.any()
        assert np.all(
            np.abs(slope - solved.sensitivity[:, k])[good] <= 1e-7 * size[good] + 1e-6 * np.abs(slope)[good]
        )


@pytest.mark.parametrize("case", [c for c, _ in CASES], ids=lambda c: c.__name__)
def test_derivatives_are_exact(case) -> None:
    """d parameter/d value of every closed-form rig."""
    count = dict(CASES)[case]
    derivative_holds(case(list(10.0 ** np.random.default_rng(4).uniform(-0.5, 0.5, count)))[0])


def test_derivatives_are_exact_through_an_oscillating_line_and_common_factors() -> None:
    """Through the line's own frequency (implicit), and through a divided common factor."""
    derivative_holds(impulse_line())
    hidden = 0
    for _, build in collect(60):
        if open_model(build.rig()).reduction.common:
            hidden += 1
            derivative_holds(build)
        if hidden == 5:
            break
    assert hidden == 5


def test_evaluate_at_the_nominal_values_is_the_prediction() -> None:
    """evaluate() re-solves; where no such rig is possible it gives NaN, and raises nothing."""
    found = predict(impulse_line().rig())
    nominal = np.array([x.value for x in found.inputs])
    theta = np.array([found.parameters[name].value for name in found.names])
    np.testing.assert_allclose(found.evaluate(nominal), theta, rtol=1e-11)
    for broken in (np.where(np.arange(nominal.size) == 0, -1.0, nominal), nominal * np.nan, nominal * 0.0):
        assert found.evaluate(broken).shape == theta.shape
        assert not np.all(np.isfinite(found.evaluate(broken)))


def test_draws_and_derivatives_elsewhere_are_those_of_the_rig() -> None:
    """evaluate_many is evaluate row by row; differentiate at another point is the derivative there."""
    build = impulse_line()
    build.values["gauge chamber.compliance"] = Uncertain(3.1e-12, 1e-12)
    found = predict(build.rig())
    nominal = np.array([x.value for x in found.inputs])
    rng = np.random.default_rng(8)
    rows = nominal * rng.uniform(0.8, 1.2, (20, nominal.size))
    assert found.evaluate_many is not None and found.differentiate is not None
    np.testing.assert_allclose(found.evaluate_many(rows), [found.evaluate(r) for r in rows], rtol=1e-10)
    x = rows[3]
    slope = found.differentiate(x)
    for k in range(x.size):
        step = np.where(np.arange(x.size) == k, 1e-5 * x, 0.0)
        by_difference = (found.evaluate(x + step) - found.evaluate(x - step)) / (2e-5 * x[k])
        np.testing.assert_allclose(slope[:, k], by_difference, rtol=1e-5, atol=1e-7 * abs(slope[:, k]).max())
    kinds = dict(zip(found.input_names, (d.distribution for d in found.drawn), strict=True))
    assert kinds["gauge chamber.compliance"] == "lognormal" and kinds["impulse line.bore"] == "rectangular"


def test_budget_shares_and_covariance() -> None:
    """√(1/(L C)): shares by ¼u²; they sum to 1; covariance and u agree; an exact gain has no budget."""
    found = predict(series_circuit().rig())
    shares = {(o, k): s for o, k, s in found.budget["natural_frequency"]}
    assert shares[("l", "inductance")] == pytest.approx(0.8) and shares[
        ("c", "capacitance")
    ] == pytest.approx(0.2)
    for name in ("natural_frequency", "damping_ratio"):
        assert sum(s for _, _, s in found.budget[name]) == pytest.approx(1.0, abs=1e-9)
    w = found.parameters["natural_frequency"]
    assert w.u / w.value == pytest.approx(0.5 * math.hypot(0.02, 0.01), rel=1e-12)
    k = found.names.index("natural_frequency")
    assert math.sqrt(found.covariance[k, k]) == pytest.approx(w.u, rel=1e-12)
    assert found.parameters["gain"].u == 0.0 and found.budget["gain"] == []


def test_a_shared_value_is_one_input() -> None:
    """One viscosity in two lines: its whole effect counts once, not as two independent halves."""
    b = RigBuilder().medium("oil", density=870.0, viscosity=(0.03, 0.003))
    for k in (0, 1):
        b.element(
            f"line {k}",
            "laminar-line",
            (f"n{k}", f"n{k + 1}"),
            medium="oil",
            bore=2e-3,
            length=1.0,
            friction="plug",
        )
    b.element("chamber", "chamber", "n2", compliance=1e-11).drive("u", "pressure", "n0").reading(
        "y", "pressure", "n2"
    )
    found = predict(b.rig())
    z = found.parameters["damping_ratio"]
    assert z.u / z.value == pytest.approx(0.1, rel=1e-9)
    assert found.budget["damping_ratio"] == [("oil", "viscosity", pytest.approx(1.0))]


def test_monte_carlo_agrees_with_closed_form_quantiles() -> None:
    """A wide rectangular capacitance: ωn's 95 % interval is that of 1/√(L C), and first order differs."""
    b = RigBuilder().element("r", "resistor", ("in", "a"), resistance=10.0)
    b.element("l", "inductor", ("a", "b"), inductance=1e-3)
    b.element("c", "capacitor", "b", capacitance=limits(1e-6, 0.3e-6))
    found = predict(
        b.drive("u", "voltage", "in").reading("y", "voltage", "b").rig(), monte_carlo=100_000, seed=2
    )
    low, high = found.parameters["natural_frequency"].interval()
    for end, c in ((low, 1.285e-6), (high, 0.715e-6)):
        assert end == pytest.approx(1.0 / math.sqrt(1e-3 * c), rel=2e-3)
    assert "first-order-differs" in [w.code for w in found.warnings]


def test_monte_carlo_says_nothing_where_first_order_holds() -> None:
    """Small normal tolerances: the two intervals agree to two digits, and no warning appears."""
    b = RigBuilder().element("r", "resistor", ("in", "a"), resistance=(10.0, 1e-3))
    b.element("c", "capacitor", "a", capacitance=1e-6).drive("u", "voltage", "in").reading(
        "y", "voltage", "a"
    )
    found = predict(b.rig(), monte_carlo=200_000)
    assert "first-order-differs" not in [w.code for w in found.warnings]


def test_wide_positive_values_are_drawn_log_normal_and_it_is_said() -> None:
    """u of 40 %: no draw is negative, none is lost, and the warning names the value."""
    b = RigBuilder().element("r", "resistor", ("in", "a"), resistance=(10.0, 4.0))
    b.element("c", "capacitor", "a", capacitance=1e-6).drive("u", "voltage", "in").reading(
        "y", "voltage", "a"
    )
    found = predict(b.rig(), monte_carlo=20_000)
    texts = {w.code: w.text for w in found.warnings}
    assert "r.resistance" in texts["drawn-log-normal"] and "draws-lost" not in texts
    assert found.parameters["time_constant"].interval()[0] > 0.0


def test_names_units_and_json() -> None:
    """The document follows the contract: schema, parameters, transfer with units, budget, finite numbers."""
    case = next(c for c, _ in CASES if c.__name__ == "motor")
    found = predict(case([2.0, 1e-3, 0.05, 2e-5, 1e-5])[0].rig())
    document = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert document["schema"] == "rigtally/prediction/1"
    assert set(document["parameters"]) == set(found.names)
    assert document["denominator"][-1]["value"] == 1.0
    entry = document["transfer"][0]
    assert (entry["output"], entry["input"], entry["numerator_from"], entry["integrators"]) == (
        "current", "supply", 0, 0,
    )  # fmt: skip
    assert entry["gain"]["value"] == pytest.approx(1e-5 / (2e-5 + 0.0025))
    assert len(document["derived"]["poles"]) == 2


def test_a_pole_at_zero_integrates() -> None:
    """Angle of a motor's shaft: one integrator, a gain per second, and a warning."""
    b = RigBuilder().element("j", "inertia", "s", inertia=2.0).element("d", "rotary-damper", "s", damping=4.0)
    found = predict(b.drive("t", "torque", "s").reading("angle", "angle", "s").rig())
    assert found.form.integrators == 1 and found.form.order == 1
    assert found.parameters["gain"].value == pytest.approx(0.25)
    assert found.parameters["time_constant"].value == pytest.approx(0.5)
    assert "integrates" in [w.code for w in found.warnings]


def test_names_and_order_change_nothing() -> None:
    """Renamed and reordered, the same rig gives the same numbers to the last digit but rounding."""
    first = predict(series_circuit().rig()).parameters
    b = RigBuilder().element("zeta pot", "capacitor", "node 9", capacitance=(1e-6, 1e-8))
    b.element("a choke", "inductor", ("x", "node 9"), inductance=(1e-3, 2e-5))
    b.element("m load", "resistor", ("start", "x"), resistance=(10.0, 0.1))
    second = predict(b.drive("q", "voltage", "start").reading("w", "voltage", "node 9").rig()).parameters
    for name in first:
        assert second[name].value == pytest.approx(first[name].value, rel=1e-14)
        assert second[name].u == pytest.approx(first[name].u, rel=1e-12)


def test_exact_values_are_said_to_be_exact() -> None:
    """A value without a tolerance is named in a warning."""
    b = RigBuilder().element("r", "resistor", ("in", "a"), resistance=10.0)
    b.element("c", "capacitor", "a", capacitance=Uncertain(1e-6, 1e-8))
    found = predict(b.drive("u", "voltage", "in").reading("y", "voltage", "a").rig())
    text = next(w.text for w in found.warnings if w.code == "taken-as-exact")
    assert "r.resistance" in text and "c.capacitance" not in text


def with_form(build: RigBuilder, name: str):
    """The prediction where [fit] states a form."""
    return predict(replace(build.rig(), fit={"form": name}))


def test_a_stated_form_that_holds_the_network_is_used() -> None:
    """rational-0/2 has the coefficients and second-order-zero a zero time of 0; the physics is the same."""
    own = predict(series_circuit().rig())
    rational, zero = (
        with_form(series_circuit(), "rational-1/2"),
        with_form(series_circuit(), "second-order-zero"),
    )
    w, z = (own.parameters[n].value for n in ("natural_frequency", "damping_ratio"))
    assert rational.names == ("b0", "b1", "a0", "a1")
    values = [rational.parameters[n].value for n in rational.names]
    np.testing.assert_allclose(values, [w * w, 0.0, w * w, 2 * z * w], rtol=1e-12)
    assert rational.derived["gain"].value == pytest.approx(1.0) and rational.derived["gain"].u < 1e-12
    assert rational.parameters["a0"].u == pytest.approx(2 * w * own.parameters["natural_frequency"].u)
    assert zero.parameters["zero_time"].value == 0.0
    assert zero.parameters["natural_frequency"].u == pytest.approx(own.parameters["natural_frequency"].u)


def test_a_stated_form_that_cannot_hold_the_network_is_said() -> None:
    """A second order asked to be a first: predicted as what it is, with a warning."""
    found = with_form(series_circuit(), "first-order")
    assert found.form.name == "second-order"
    assert "form-differs" in [w.code for w in found.warnings]


def test_few_degrees_of_freedom_widen_the_interval() -> None:
    """A resistance measured five times (dof 4) is all of τ's uncertainty: t for 4, not the normal 1.96."""
    b = RigBuilder().element("r", "resistor", ("in", "a"), resistance=Uncertain(10.0, 0.1, dof=4.0))
    b.element("c", "capacitor", "a", capacitance=1e-6).drive("u", "voltage", "in").reading(
        "y", "voltage", "a"
    )
    tau = predict(b.rig()).parameters["time_constant"]
    assert tau.dof == pytest.approx(4.0)
    assert tau.expanded() == pytest.approx(2.776 * 1e-7, rel=1e-3)


def test_a_rig_without_losses_is_told_so() -> None:
    """A mass on a spring: ζ is 0 by the file, and the warning says that no real rig is so."""
    b = RigBuilder().element("m", "mass", "x", mass=(1.0, 0.01)).element("k", "spring", "x", stiffness=4.0)
    found = predict(b.drive("f", "force", "x").reading("x", "displacement", "x").rig())
    assert found.parameters["damping_ratio"].value == 0.0
    assert "undamped" in [w.code for w in found.warnings]
    assert "undamped" not in [w.code for w in predict(series_circuit().rig()).warnings]
