"""Rigs and simulated fits for the tests of the tally: a fit is its parameters with a normal error."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from rig_builder import RigBuilder
from rigtally.estimation.result import Fit
from rigtally.forms.named import Form
from rigtally.physics.prediction_result import Prediction
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]


def value(x: float, relative: float, kind: str = "normal") -> Uncertain:
    """A value with a relative standard uncertainty."""
    return Uncertain(x, relative * abs(x), "", distribution=kind)


def impulse(kind: str = "rectangular", scale: float = 1.0) -> RigBuilder:
    """The impulse line with oil and its gauge chamber."""
    b = RigBuilder("impulse line")
    b.medium("oil", density=value(871.0, 0.003 * scale, kind), viscosity=value(0.0296, 0.02 * scale, kind),
             bulk_modulus=1.42e9)  # fmt: skip
    b.element("impulse line", "laminar-line", ("tapping", "gauge"), medium="oil", friction="steady",
              bore=value(4.00e-3, 0.007 * scale, kind), length=value(3.20, 0.002 * scale, kind))  # fmt: skip
    b.element("gauge chamber", "chamber", "gauge", compliance=value(3.1e-12, 0.03 * scale, kind))
    b.drive("line pressure", "pressure", "tapping")
    return b.reading("gauge pressure", "pressure", "gauge")


def circuit(kind: str = "normal", scale: float = 1.0) -> RigBuilder:
    """A resistor and an inductor in series into a capacitor with its leak."""
    b = RigBuilder("circuit")
    b.element("r", "resistor", ("in", "a"), resistance=value(10.0, 0.01 * scale, kind))
    b.element("l", "inductor", ("a", "b"), inductance=value(1e-3, 0.01 * scale, kind))
    b.element("c", "capacitor", "b", capacitance=value(1e-6, 0.01 * scale, kind))
    b.element("leak", "resistor", "b", resistance=value(200.0, 0.01 * scale, kind))
    return b.drive("u", "voltage", "in").reading("y", "voltage", "b")


def motor(kind: str = "normal", scale: float = 1.0) -> RigBuilder:
    """A small motor: supply and load in, current and speed out."""
    b = RigBuilder("motor")
    b.element("winding", "resistor", ("supply", "a"), resistance=value(2.0, 0.02 * scale, kind))
    b.element("coil", "inductor", ("a", "b"), inductance=value(1e-3, 0.03 * scale, kind))
    b.element("motor", "motor", ("b", "ground"), ("shaft", "ground"), constant=value(0.05, 0.01 * scale, kind))
    b.element("rotor", "inertia", "shaft", inertia=value(2e-5, 0.02 * scale, kind))
    b.element("bearing", "rotary-damper", "shaft", damping=value(1e-4, 0.05 * scale, kind))
    b.drive("supply voltage", "voltage", "supply").drive("load", "torque", ("shaft", "ground"), at=False)
    b.reading("current", "current", through="winding")
    return b.reading("speed", "angular velocity", "shaft")


def noise_of(theta: Array, relative: float = 0.003) -> Array:
    """A correlated covariance of a fit, relative to the parameters."""
    p = theta.size
    r = 0.8 * np.eye(p) + 0.2 * np.outer((-1.0) ** np.arange(p), (-1.0) ** np.arange(p))
    size = relative * np.abs(theta)
    out: Array = r * np.outer(size, size)
    return out


def fit_of(
    form: Form, theta: Array, covariance: Array, units: tuple[str, ...], *, dof: float = math.inf,
    held: tuple[str, ...] = (),
) -> Fit:
    """A fit that found `theta`."""  # fmt: skip
    spread = np.sqrt(np.diag(covariance))
    return Fit(
        form=form,
        road="frequency",
        names=form.names,
        parameters={
            n: Uncertain(float(x), float(u), unit, dof)
            for n, x, u, unit in zip(form.names, theta, spread, units, strict=True)
        },
        covariance=covariance,
        transfer_function=form.transfer_matrix(theta),
        derived={},
        output_units=(),
        input_units=(),
        interval=1e-6,
        samples=1000,
        between="ramped",
        held=held,
    )


def units_of(prediction: Prediction) -> tuple[str, ...]:
    return tuple(prediction.parameters[n].unit for n in prediction.names)


def nominal(prediction: Prediction) -> Array:
    return np.array([x.value for x in prediction.inputs])
