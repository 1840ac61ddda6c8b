"""A plan's uncertainty against closed forms and against fits of simulated records."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import optimize

from rig_builder import RigBuilder
from rigtally.errors import UsageError
from rigtally.forms.named import form
from rigtally.physics.prediction import predict
from rigtally.planning.plan import EXCITATIONS, excitation_samples, plan, record_covariance
from tally_cases import circuit


def test_first_order_step_information() -> None:
    """τ 1 s, K 1, noise 0.01, 1 ms, 10 s after the step: sd τ 7.3739e-4, sd K 1.2646e-4 (derived, offset known).

    The offset is made known by a long rest before the step.
    """
    n, dt = 210_000, 1e-3
    u = np.where(np.arange(n) < 200_000, 0.0, 1.0)
    c = record_covariance(form("first-order"), np.array([1.0, 1.0]), u, dt, 0.01)
    assert math.sqrt(c[1, 1]) == pytest.approx(7.3739e-4, rel=0.02)
    assert math.sqrt(c[0, 0]) == pytest.approx(1.2646e-4, rel=0.03)


@pytest.mark.parametrize("excitation", EXCITATIONS)
def test_planned_u_is_reached(excitation: str) -> None:
    """Least squares on 4000 simulated records scatters within 10 % of the planned u, for each excitation."""
    f, theta, noise = form("second-order"), np.array([2.0, 10.0, 0.4]), 0.02
    interval = 2 * math.pi / (30 * 10.0)
    u = excitation_samples(excitation, 300, interval, 10.0, 1.0)
    planned = np.sqrt(np.diag(record_covariance(f, theta, u, interval, noise)))

    def model(t: np.ndarray) -> np.ndarray:
        return f.transfer_matrix(t[:3]).simulate(u, interval, "held") + t[3]

    truth = np.append(theta, 0.0)
    clean = model(truth)
    rng = np.random.default_rng(7)
    # one Gauss-Newton step from the truth is the whole fit at this noise: the derivative is taken once
    j = optimize.approx_fprime(truth, model, 1e-6)
    solve = np.linalg.pinv(j)
    found = np.array([solve @ (noise * rng.standard_normal(clean.size)) for _ in range(4000)])[:, :3]
    assert found.std(axis=0) == pytest.approx(planned, rel=0.10)
    # and the step is the fit: a full least-squares solution of some records agrees with it
    for _ in range(3):
        y = clean + noise * rng.standard_normal(clean.size)
        full = optimize.least_squares(lambda t, y=y: model(t) - y, truth, x_scale=np.abs(truth) + 0.1).x
        assert np.all(np.abs(full - truth - solve @ (y - clean))[:3] < 0.15 * planned)


def test_repeats_reach_what_is_wanted() -> None:
    """The best option meets the wanted U with the least time; half the U needs about four times as long."""
    p = predict(circuit().rig())
    want = {"natural_frequency": 0.01, "damping_ratio": 0.02}
    found = plan(p, 0.3, want)
    assert found.best is not None
    for name, share in want.items():
        assert 1.96 * found.best.u[name] <= share * p.parameters[name].value * (1 + 1e-6)
    assert all(found.best.total <= x.total for x in found.options)
    twice = plan(p, 0.3, {k: v / 2 for k, v in want.items()})
    same = [x for x in twice.options if (x.excitation, x.length) == (found.best.excitation, found.best.length)]
    assert same[0].repeats is not None and found.best.repeats is not None
    assert same[0].repeats >= 2 * found.best.repeats


def test_refusals() -> None:
    """No noise, an unknown parameter, a rig that integrates: refused by name."""
    p = predict(circuit().rig())
    with pytest.raises(UsageError):
        plan(p, 0.0, {"gain": 0.01})
    with pytest.raises(UsageError) as unknown:
        plan(p, 0.1, {"time_constant": 0.01})
    assert unknown.value.code == "unknown-parameter"
    b = RigBuilder().element("m", "mass", "a", mass=1.0).element("d", "damper", "a", damping=1.0)
    b.drive("f", "force", "a").reading("x", "displacement", "a")
    with pytest.raises(UsageError) as loose:
        plan(predict(b.rig()), 0.1, {"time_constant": 0.01})
    assert loose.value.code == "integrates"
