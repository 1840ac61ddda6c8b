"""Laminar lines and handbook geometry against their sources and limits."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import special

from rig_builder import RigBuilder, impulse_line
from rigtally.physics import geometry
from rigtally.physics.oscillating_line import factors, line_values, womersley_number
from rigtally.physics.prediction import predict

WATER = {"density": 998.207, "viscosity": 1.0016e-3}


def test_spring_rates_and_disk() -> None:
    """Handbook values (from memory, verified by energy integrals): coil, cantilever, torsion bar, disk."""
    assert geometry.coil_spring_rate(2e-3, 20e-3, 10, 79.3e9) == pytest.approx(1982.5, rel=1e-7)
    assert geometry.cantilever_rate(0.15, 20e-3, 2e-3, 200e9) == pytest.approx(2370.37037, rel=1e-7)
    assert geometry.torsion_bar_rate(10e-3, 0.5, 79.3e9) == pytest.approx(155.705186, rel=1e-7)
    assert geometry.disk_inertia(2.0, 0.2) == pytest.approx(0.01, rel=1e-12)


def test_a_torsion_bar_and_a_disk_make_a_resonance() -> None:
    """Disk of 2 kg and radius 0.1 m on a 10 mm bar of 0.5 m, G = 79.3 GPa: 124.781884 rad/s."""
    b = RigBuilder().element(
        "bar", "torsion-bar", ("clamp", "disk"), diameter=10e-3, length=0.5, shear_modulus=79.3e9
    )
    b.element("disk", "inertia", "disk", mass=2.0, diameter=0.2)
    b.element("air", "rotary-damper", "disk", damping=1e-3)
    b.drive("clamp", "angle", "clamp").reading("disk", "angle", "disk")
    found = predict(b.rig()).parameters
    assert found["natural_frequency"].value == pytest.approx(124.781884, rel=1e-7)


def test_hagen_poiseuille() -> None:
    """1 mm bore, 1 m, water at 20 °C: R = 128 μ l/(π d⁴) = 4.0808856e10 Pa s/m³ (law opened)."""
    r = geometry.poiseuille_resistance(1e-3, 1.0, WATER["viscosity"])
    assert r == pytest.approx(4.0808856e10, rel=1e-6)
    assert geometry.plug_inertance(1e-3, 1.0, WATER["density"]) == pytest.approx(1.2709566e9, rel=1e-6)


def test_oscillating_line_limits() -> None:
    """Low frequency: Poiseuille and 4/3 ρl/A; at Womersley 157.8: 28.28057 and 1.0089588 times."""
    assert womersley_number(1e-3, *WATER.values(), 1e5) == pytest.approx(157.8, abs=0.05)
    plug = geometry.plug_inertance(1e-3, 1.0, WATER["density"])
    steady = geometry.poiseuille_resistance(1e-3, 1.0, WATER["viscosity"])
    low = line_values("oscillating", 1e-3, 1.0, *WATER.values(), 1e-9)
    assert low.resistance == pytest.approx(steady, rel=1e-12)
    assert low.inertance == pytest.approx(4.0 / 3.0 * plug, rel=1e-12)
    high = line_values("oscillating", 1e-3, 1.0, *WATER.values(), 1e5)
    assert high.resistance / steady == pytest.approx(28.28057, rel=1e-6)
    assert high.inertance / plug == pytest.approx(1.0089588, rel=1e-6)


def test_oscillating_line_against_the_bessel_functions() -> None:
    """Plain evaluation of jω I/(1 − 2J1(z)/(z J0(z))), z² = −jωρa²/μ, on both sides of the series."""
    for alpha in (0.3, 0.499999, 0.500001, 1.0, 3.0, 10.0, 100.0):
        z = np.sqrt(-1j * alpha**2)
        whole = 1j * alpha**2 / 8.0 / (1.0 - 2.0 * special.jv(1, z) / (z * special.jv(0, z)))
        r, i, _, _ = factors(alpha**2)
        assert r == pytest.approx(whole.real, rel=1e-9)
        assert i == pytest.approx(whole.imag * 8.0 / alpha**2, rel=1e-9)


def test_oscillating_line_derivative_is_exact() -> None:
    """dR/dβ, dI/dβ against central differences of the plain function."""
    for beta in (0.05, 0.1, 0.24, 0.26, 4.0, 900.0):
        h = 1e-4 * beta
        up, down = factors(beta + h), factors(beta - h)
        _, _, dr, di = factors(beta)
        assert dr == pytest.approx((up[0] - down[0]) / (2 * h), rel=1e-4, abs=1e-11)
        assert di == pytest.approx((up[1] - down[1]) / (2 * h), rel=1e-4, abs=1e-11)


def test_gas_line_and_cavity() -> None:
    """Helmholtz: 2 mm by 50 mm neck, 1 cm³ of air: 432.9233 Hz, ζ 0.02222495; by 4/3: 374.9226 Hz."""
    rho, mu, p, gamma = 1.2046, 1.8206e-5, 101325.0, 1.4
    for friction, frequency in (("plug", 432.9233), ("steady", 374.9226)):
        b = RigBuilder().medium("air", density=rho, viscosity=mu, bulk_modulus=gamma * p)
        b.element(
            "neck", "laminar-line", ("out", "in"), medium="air", bore=2e-3, length=50e-3, friction=friction
        )
        b.element("cavity", "chamber", "in", medium="air", volume=1e-6)
        b.drive("sound", "pressure", "out").reading("inside", "pressure", "in")
        found = predict(b.rig())
        assert found.derived["natural_frequency_hz"].value == pytest.approx(frequency, rel=1e-6)
        if friction == "plug":
            assert found.parameters["damping_ratio"].value == pytest.approx(0.02222495, rel=1e-6)


def test_impulse_line_differs_from_the_textbook_by_13_percent() -> None:
    """The oil-filled line: plug flow is 13 % off in ωn and ζ; the prediction shows each model."""
    oscillating, plug = predict(impulse_line().rig()), predict(impulse_line("plug").rig())
    for name in ("natural_frequency", "damping_ratio"):
        ratio = oscillating.parameters[name].value / plug.parameters[name].value
        assert ratio == pytest.approx(0.87, abs=0.015)
    texts = " ".join(f.text for f in oscillating.limits)
    for word in ("Womersley", '"oscillating"', '"steady"', '"plug"', "38.14"):
        assert word in texts
    womersley = next(f for f in oscillating.limits if f.code == "womersley-number")
    w = oscillating.parameters["natural_frequency"].value
    assert womersley.value == pytest.approx(2e-3 * math.sqrt(w * 871.0 / 0.0296), rel=1e-9)


def test_the_lines_frequency_is_the_rigs_own() -> None:
    """ωn and ζ follow from R and I at ωn itself."""
    found = predict(impulse_line().rig()).parameters
    w = found["natural_frequency"].value
    line = line_values("oscillating", 4e-3, 3.2, 871.0, 0.0296, w)
    assert w == pytest.approx(1.0 / math.sqrt(line.inertance * 3.1e-12), rel=1e-11)
    z = 0.5 * line.resistance * math.sqrt(3.1e-12 / line.inertance)
    assert found["damping_ratio"].value == pytest.approx(z, rel=1e-11)


def test_friction_model_is_an_input_with_half_the_spread() -> None:
    """Rectangular, under the line's name, half the spread of the resistance between 0.5 and 2 times ωn."""
    found = predict(impulse_line().rig())
    k = found.input_names.index("impulse line.friction model")
    w = found.parameters["natural_frequency"].value
    r = [line_values("oscillating", 4e-3, 3.2, 871.0, 0.0296, f * w).resistance for f in (0.5, 1.0, 2.0)]
    half = 0.5 * (r[2] - r[0]) / r[1]
    assert found.inputs[k].value == 1.0 and found.inputs[k].distribution == "rectangular"
    assert found.inputs[k].u * math.sqrt(3.0) == pytest.approx(half, rel=1e-9)
    assert ("impulse line", "friction model") in {(o, key) for o, key, _ in found.budget["damping_ratio"]}


def test_overdamped_line_is_taken_at_its_slowest_pole() -> None:
    """A thick oil in a thin long line: all poles real, the frequency is the slow one's."""
    b = RigBuilder().medium("oil", density=900.0, viscosity=1.0)
    b.element("line", "laminar-line", ("a", "b"), medium="oil", bore=3e-3, length=5.0)
    b.element("chamber", "chamber", "b", compliance=5e-11)
    b.drive("u", "pressure", "a").reading("y", "pressure", "b")
    found = predict(b.rig())
    assert found.parameters["damping_ratio"].value > 1.0
    slow = 1.0 / found.derived["time_constant_1"].value
    assert found.provenance["line_frequency"] == pytest.approx(slow, rel=1e-10)
