"""The tally of a simulated fit and a prediction."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from rig_builder import RigBuilder
from rigtally.errors import UsageError
from rigtally.physics.prediction import predict
from rigtally.quantities.uncertain import Uncertain
from rigtally.tallying.agreement import en_number, metric
from rigtally.tallying.budget import budgets
from rigtally.tallying.decision import conformity_probability, decide
from rigtally.tallying.difference import difference
from rigtally.tallying.reconciliation import reconcile
from rigtally.tallying.tally import tally
from tally_cases import circuit, fit_of, impulse, motor, noise_of, nominal, units_of, value


def set_up(build: RigBuilder, relative: float = 0.003):
    p = predict(build.rig())
    theta = np.array([p.parameters[n].value for n in p.names])
    return p, theta, noise_of(theta, relative)


def test_en_number() -> None:
    """x = 10.12, U 0.06 against 10.05, U 0.05: E_n 0.8962582 (formula of two proficiency-test providers)."""
    assert en_number(10.12 - 10.05, 0.06, 0.05) == pytest.approx(0.8962582, rel=1e-6)
    assert math.isnan(en_number(0.1, 0.0, 0.0))
    assert math.isnan(en_number(0.1, math.inf, 0.1))


def test_conformity_probability() -> None:
    """13.6 with u 1.8 in 12.5 to 16.3: 0.66 (JCGM 106:2012, 7.4; from memory); guards 2u and 1.645u."""
    assert conformity_probability(Uncertain(13.6, 1.8), 12.5, 16.3) == pytest.approx(0.66, abs=0.005)
    assert 1 - conformity_probability(Uncertain(8.0, 1.0), None, 10.0) == pytest.approx(0.0228, abs=5e-5)
    assert 1 - conformity_probability(Uncertain(8.355, 1.0), None, 10.0) == pytest.approx(0.05, abs=5e-5)


def test_decision_rules() -> None:
    """Guarded by w = U rejects what the simple rule accepts; the risk is that of the decision taken."""
    x = Uncertain(9.0, 1.0)
    simple, guarded = decide("x", x, None, 10.0, "simple"), decide("x", x, None, 10.0, "guarded")
    assert simple.accepted and not guarded.accepted
    assert simple.risk == pytest.approx(stats.norm.sf(1.0))
    assert guarded.risk == pytest.approx(stats.norm.cdf(1.0))
    assert decide("x", Uncertain(9.0, math.nan), None, 10.0, "simple").accepted is None
    with pytest.raises(UsageError):
        decide("x", x, None, 10.0, "lenient")


def test_joint_coverage_factors() -> None:
    """√χ²_m(0.95): 1.96, 2.45, 2.80, 3.08 for m = 1 to 4 (JCGM 102:2011, table 1, from memory)."""
    for build, rank in ((circuit(), 3),):
        p, theta, noise = set_up(build)
        joint = tally(fit_of(p.form, theta, noise, units_of(p)), p).joint
        assert joint.dof == rank and joint.reference == "chi-squared"
        assert math.sqrt(joint.critical) == pytest.approx(2.80, abs=0.006)


def test_rank_deficient_metric() -> None:
    """A direction without uncertainty is not averaged away: no distance inside, infinite across it."""
    c = np.array([[1.0, 1.0], [1.0, 1.0]])
    m = metric(c, np.ones(2))
    assert m.rank == 1
    assert m.distance(np.array([2.0, 2.0])) == pytest.approx(4.0)
    assert math.isinf(m.distance(np.array([1.0, -1.0])))
    nothing = metric(np.zeros((1, 1)), np.ones(1))
    assert nothing.distance(np.zeros(1)) == 0.0 and math.isinf(nothing.distance(np.ones(1)))


@pytest.mark.parametrize("build", [impulse, circuit, motor], ids=lambda f: f.__name__)
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_six_u_names_the_value(build, sign: float) -> None:
    """Every value off by 6 u, either way: the first group holds it, with the change that was made."""
    p, _, noise = set_up(build())
    for k, name in enumerate(p.input_names):
        if not p.inputs[k].u > 0:
            continue
        x = nominal(p)
        x[k] += 6.0 * sign * p.inputs[k].u
        first = tally(fit_of(p.form, p.evaluate(x), noise, units_of(p)), p, monte_carlo=500).explanations[0]
        assert name in (*first.elements, *first.indistinguishable)
        if first.elements == (name,):
            assert first.in_u[0] == pytest.approx(6.0 * sign, rel=1e-4)
            assert first.chi2_left == pytest.approx(0.0, abs=1e-6)


def test_order_and_names_change_nothing() -> None:
    """The elements renamed and written in another order: the same verdict, numbers and groups."""
    b = circuit()
    other = RigBuilder("circuit")
    other.element("zz", "resistor", "b", resistance=value(200.0, 0.01))
    other.element("aa", "capacitor", "b", capacitance=value(1e-6, 0.01))
    other.element("mm", "inductor", ("a", "b"), inductance=value(1e-3, 0.01))
    other.element("bb", "resistor", ("in", "a"), resistance=value(10.0, 0.01))
    other.drive("u", "voltage", "in").reading("y", "voltage", "b")
    names = {"r": "bb", "l": "mm", "c": "aa", "leak": "zz"}
    p, theta, noise = set_up(b)
    q = predict(other.rig())
    fit = fit_of(p.form, theta * np.array([1.002, 0.95, 1.07]), noise, units_of(p))
    one, two = tally(fit, p), tally(fit, q)
    assert one.verdict == two.verdict == "differs"
    assert one.joint.chi2 == pytest.approx(two.joint.chi2, rel=1e-9)

    def renamed(name: str) -> str:
        owner, key = name.split(".")
        return f"{names[owner]}.{key}"

    assert len(one.explanations) == len(two.explanations)
    for a, c in zip(one.explanations, two.explanations, strict=True):
        assert {renamed(x) for x in a.elements} == set(c.elements)
        assert a.chi2_left == pytest.approx(c.chi2_left, abs=1e-6)


def test_two_shifts_are_not_passed_off_as_one() -> None:
    """Two values far off: a pair leads that leaves nothing, and says which two."""
    p, _, noise = set_up(motor(), 0.001)
    x = nominal(p)
    pair = {"coil.inductance", "rotor.inertia"}
    for name in pair:
        k = p.input_names.index(name)
        x[k] += 8.0 * p.inputs[k].u
    found = tally(fit_of(p.form, p.evaluate(x), noise, units_of(p)), p, monte_carlo=500)
    assert set(found.explanations[0].elements) == pair
    assert found.explanations[0].sufficient


def test_exact_values_are_tried() -> None:
    """A value taken as exact may be the one that is off: in_u is then null, the change is told."""
    b = circuit()
    b.values["l.inductance"] = Uncertain(1e-3, 0.0)
    p, _, noise = set_up(b)
    x = nominal(p)
    x[p.input_names.index("l.inductance")] *= 1.2
    first = tally(fit_of(p.form, p.evaluate(x), noise, units_of(p)), p).explanations[0].to_dict()
    assert first["elements"] == ["l.inductance"] and first["in_u"] == [None]
    assert first["change"][0] == pytest.approx(0.2, rel=1e-4)


def test_not_determined_is_undecided() -> None:
    """A parameter that the log does not determine: undecided, the others are compared; a difference stays one."""
    p, theta, noise = set_up(circuit())
    lost = noise.copy()
    lost[2, :] = lost[:, 2] = np.nan
    fit = fit_of(p.form, theta, lost, units_of(p))
    found = tally(fit, p)
    assert found.verdict == "undecided" and "damping_ratio" in found.reason
    assert found.parameters["damping_ratio"].agrees is None and found.joint.dof == 2
    assert tally(fit_of(p.form, theta * 1.3, lost, units_of(p)), p).verdict == "differs"


def test_within_needs_power() -> None:
    """A stated difference that the comparison could not have shown makes it undecided."""
    p, theta, noise = set_up(circuit())
    fit = fit_of(p.form, theta, noise, units_of(p))
    assert tally(fit, p, within={"gain": 0.2}).verdict == "agrees"
    weak = tally(fit, p, within={"gain": 0.0005})
    assert weak.verdict == "undecided" and weak.power["gain"] < 0.1


def test_would_find_has_its_power() -> None:
    """The smallest difference that would be found is found in 95 % of 4000 simulated fits (binomial 99.9 %)."""
    p, theta, noise = set_up(circuit())
    found = tally(fit_of(p.form, theta, noise, units_of(p)), p)
    d = difference(fit_of(p.form, theta, noise, units_of(p)), p, ())
    m = metric(d.covariance, d.scale)
    rng = np.random.default_rng(2)
    scatter = rng.standard_normal((4000, 3)) @ np.linalg.cholesky(d.covariance).T
    for k, name in enumerate(p.names):
        shifted = scatter + found.parameters[name].would_find * np.eye(3)[k]
        power = np.mean(np.sum((shifted @ m.root.T) ** 2, axis=1) > found.joint.critical)
        assert abs(power - 0.95) < 3.3 * math.sqrt(0.95 * 0.05 / 4000)


def test_other_units_are_refused() -> None:
    """A gain in another dimension is no comparison."""
    p, theta, noise = set_up(circuit())
    with pytest.raises(UsageError) as caught:
        tally(fit_of(p.form, theta, noise, ("V/Pa", "rad/s", "")), p)
    assert caught.value.code == "other-unit"


def test_systematic_part_widens_and_corrects() -> None:
    """A known gain error is taken out; its u joins the fit's by JCGM 100, through the one propagation."""
    p, theta, noise = set_up(circuit(), 0.001)
    fit = fit_of(p.form, theta * np.array([1.02, 1.0, 1.0]), noise, units_of(p))
    part = {"of": "gain", "channel": "y", "value": Uncertain(0.02, 0.01), "source": "certificate 117"}
    found = tally(fit, p, systematic=[part]).parameters["gain"]
    assert found.fitted.value == pytest.approx(theta[0])
    assert found.fitted.u == pytest.approx(math.hypot(0.001 * theta[0], 0.01 * theta[0] / 1.02), rel=1e-3)
    lines = budgets(fit, [part])["gain"].lines
    assert [x.evaluation for x in lines] == ["A", "B"] and sum(x.share for x in lines) == pytest.approx(1.0)
    clock = {"of": "time", "channel": "", "value": Uncertain(0.0, 0.01)}
    wider = budgets(fit, [clock])
    assert wider["natural_frequency"].quantity.u == pytest.approx(theta[1] * math.hypot(0.001, 0.01), rel=1e-3)
    assert wider["gain"].quantity.u == fit.parameters["gain"].u


def test_the_budget_calls_the_one_propagation(monkeypatch: pytest.MonkeyPatch) -> None:
    """The budget of a tally is combined by the function that returns the GUM's worked examples."""
    import rigtally.quantities.propagation as one
    import rigtally.tallying.budget as room

    assert room.propagate is one.propagate
    calls = []
    monkeypatch.setattr(room, "propagate", lambda *a, **k: calls.append(1) or one.propagate(*a, **k))
    p, theta, noise = set_up(circuit())
    tally(fit_of(p.form, theta, noise, units_of(p)), p)
    assert len(calls) == len(p.names)


def test_reconciled_values_cover_the_truth() -> None:
    """Values drawn as stated: the reconciled 95 % intervals hold them in 95 % of logs; u never grows."""
    p, _, noise = set_up(circuit())
    rng = np.random.default_rng(4)
    root = np.linalg.cholesky(noise)
    inside = np.zeros(4)
    count = 300
    for _ in range(count):
        x = nominal(p) + np.array([q.u for q in p.inputs]) * rng.standard_normal(4)
        found = p.evaluate(x) + root @ rng.standard_normal(3)
        after = reconcile(difference(fit_of(p.form, found, noise, units_of(p)), p, ()), p)
        assert after.converged
        for k, name in enumerate(after.names):
            low, high = after.values[name].posterior.interval()
            inside[k] += low <= x[k] <= high
            assert after.values[name].posterior.u <= p.inputs[k].u * (1 + 1e-9)
    assert np.all(np.abs(inside / count - 0.95) < 3.3 * math.sqrt(0.95 * 0.05 / count))


def test_response_ranges() -> None:
    """The same model tallies over the whole range; with another ωn but the same 2ζ/ωn only far below it."""
    p, theta, noise = set_up(circuit())
    same = tally(fit_of(p.form, theta, noise, units_of(p)), p).response
    assert same is not None and same.tallies.all() and same.whole.all()
    other = tally(fit_of(p.form, theta * np.array([1, 1.2, 1.2]), noise, units_of(p)), p).response
    assert other is not None
    first = next(iter(other.ranges.values()))[0]
    assert first[0] == pytest.approx(other.frequency[0]) and first[1] < theta[1]


def test_limits_without_agreement_of_the_model() -> None:
    """[limits] of a rig file are decided beside the verdict; an unknown quantity is refused by name."""
    p, theta, noise = set_up(circuit())
    rig = replace(circuit().rig(), limits={"natural_frequency": (30000.0, None, "rad/s")})
    found = tally(fit_of(p.form, theta, noise, units_of(p)), p, rig=rig)
    assert found.limits[0].accepted and found.limits[0].conformity > 0.99
    bad = replace(rig, limits={"time_constant": (1.0, None, "s")})
    with pytest.raises(UsageError) as caught:
        tally(fit_of(p.form, theta, noise, units_of(p)), p, rig=bad)
    assert caught.value.code == "unknown-parameter"
