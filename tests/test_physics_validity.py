"""Limits of linear elements, held against a log or an amplitude."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import signal

from rig_builder import RigBuilder, impulse_line
from rigtally.physics.inner_response import InnerResponse
from rigtally.physics.prediction import predict
from rigtally.physics.rig import Port, Reading
from rigtally.physics.validity import check_validity


def water_line(static: float | None = None) -> RigBuilder:
    b = RigBuilder().medium("water", density=998.2, viscosity=1.0e-3, bulk_modulus=2.18e9)
    b.element("line", "laminar-line", ("a", "b"), medium="water", bore=4e-3, length=2.0, friction="steady")
    b.element("chamber", "chamber", "b", compliance=1e-9)
    b.drive("pump", "pressure", "a").reading("gauge", "pressure", "b")
    if static is not None:
        b.settings["static_pressure"] = static
    return b


def findings(build: RigBuilder, *args, **kwargs) -> dict[str, list]:
    out: dict[str, list] = {}
    for f in check_validity(build.rig(), predict(build.rig()), *args, **kwargs):
        out.setdefault(f.code, []).append(f)
    return out


def test_inner_response_against_an_independent_simulation() -> None:
    """Flow through the line for a ramped input: scipy's lsim of hand-written equations, to 1e-6 of its peak."""
    rig = water_line().rig()
    inner = InnerResponse(rig, Reading("q", "flow", through="line"))
    t = np.arange(2000) * 2e-3
    u = np.interp(t, [0.0, 0.5, 0.6, 4.0], [3.0e4, 3.0e4, 9.0e4, 9.0e4])
    r = 128 * 1e-3 * 2.0 / (math.pi * 4e-3**4)
    i = 4.0 / 3.0 * 998.2 * 2.0 / (math.pi / 4 * 4e-3**2)
    system = signal.StateSpace([[-r / i, -1 / i], [1e9, 0.0]], [[1 / i], [0.0]], [[1.0, 0.0]], [[0.0]])
    _, flow, _ = signal.lsim(system, u, t, X0=[0.0, 3.0e4])
    mine = inner.simulate(u[None], 2e-3)
    assert np.abs(mine - flow).max() < 1e-6 * np.abs(flow).max()


def test_reynolds_number_is_found_with_its_place() -> None:
    """A step of pressure: the Reynolds number's largest value and time are those of the simulated flow."""
    t = np.arange(4000) * 1e-3
    u = np.where(t < 1.0, 0.0, 1.0e5)
    found = findings(water_line(), u[None], 1e-3)["reynolds-exceeded"][0]
    flow = InnerResponse(water_line().rig(), Reading("q", "flow", through="line")).simulate(u[None], 1e-3)
    reynolds = 4 * 998.2 * np.abs(flow) / (math.pi * 4e-3 * 1e-3)
    assert found.value == pytest.approx(reynolds.max(), rel=1e-9) and found.value > 2300.0
    assert f"at {t[np.argmax(reynolds)]:.4g} s" in found.text and "% of the record" in found.text


def test_a_gentle_log_is_within_every_limit() -> None:
    """Nothing is exceeded; the numbers are still given."""
    u = 100.0 * np.sin(np.arange(3000) * 1e-3)
    codes = findings(water_line(2e5), u[None], 1e-3)
    assert not [c for c in codes if c.endswith("-exceeded")]
    assert {"reynolds-number", "lowest-pressure", "line-length"} <= set(codes)


def test_cavitation_is_found_where_a_static_pressure_is_given() -> None:
    """A fall of 1.2 bar below 1 bar absolute: negative absolute pressure at both nodes that see it."""
    u = np.where(np.arange(3000) * 1e-3 < 0.5, 0.0, -1.2e5)
    codes = findings(water_line(1.0e5), u[None], 1e-3, start=10.0)
    texts = " ".join(f.text for f in codes["negative-absolute-pressure-exceeded"])
    assert "'b'" in texts and "at 10." in texts
    assert "negative-absolute-pressure-exceeded" not in findings(water_line(), u[None], 1e-3)


def test_a_line_that_is_long_against_the_wave_is_named() -> None:
    """Air, 3 m, resonating at some 20 Hz: more than a tenth of a wavelength; no log needed."""
    b = RigBuilder().medium("air", density=1.2, viscosity=1.8e-5, bulk_modulus=1.42e5)
    b.element("hose", "laminar-line", ("a", "b"), medium="air", bore=5e-3, length=3.0)
    b.element("cavity", "chamber", "b", medium="air", volume=2e-5)
    found = findings(b.drive("u", "pressure", "a").reading("y", "pressure", "b"))["line-length-exceeded"][0]
    w = predict(b.rig()).parameters["natural_frequency"].value
    assert found.value == pytest.approx(3.0 * w / (2 * math.pi * math.sqrt(1.42e5 / 1.2)), rel=1e-9)


def test_an_amplitude_stands_for_a_log() -> None:
    """The worst frequency counts: the flow's largest gain times the amplitude."""
    found = findings(impulse_line(), amplitude=np.array([1e5]))["reynolds-number"][0]
    inner = InnerResponse(impulse_line().rig(), Reading("q", "flow", through="impulse line"))
    gain = inner.largest_gain(np.geomspace(1.0, 300.0, 4000))[0]
    assert found.value == pytest.approx(4 * 871.0 * gain * 1e5 / (math.pi * 4e-3 * 0.0296), rel=1e-3)


def test_an_orifice_is_checked_about_its_working_flow() -> None:
    """The slope of Δp(Q) is ρ Q/(Cd A)²; a flow that departs by more than 20 % is a warning."""
    b = RigBuilder().medium("oil", density=870.0)
    b.element("jet", "orifice", ("a", "b"), medium="oil", area=1e-6, discharge_coefficient=0.6, flow=1e-5)
    b.element("chamber", "chamber", "b", compliance=1e-12)
    b.drive("u", "pressure", "a").reading("y", "pressure", "b")
    r = 870.0 * 1e-5 / (0.6e-6) ** 2
    assert predict(b.rig()).parameters["time_constant"].value == pytest.approx(r * 1e-12, rel=1e-12)
    tau = r * 1e-12
    step = np.where(np.arange(400) < 10, 0.0, 0.5 * r * 1e-5)
    exceeded = findings(b, step[None], tau / 20)["orifice-range-exceeded"][0]
    assert 0.2 < exceeded.value <= 0.5
    assert "orifice-range" in findings(b, 0.1 * step[None], tau / 20)


def test_node_pressures_are_those_of_the_rig() -> None:
    """A reading at a node inside the network needs nothing but the network."""
    inner = InnerResponse(water_line().rig(), Reading("p", "pressure", port=Port("b")))
    u = np.full((1, 50), 7.0)
    np.testing.assert_allclose(inner.simulate(u, 0.01), 7.0, rtol=1e-12)
