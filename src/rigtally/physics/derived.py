"""Quantities that follow from the parameters or the poles, with first-order uncertainty."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.line_model import LineModel, Solved
from rigtally.quantities import units
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
REAL_POLE = 1e-9  # |Im p| below this share of |p| is a real pole


def derived_quantities(model: LineModel, solved: Solved, u: Array) -> dict[str, Uncertain]:
    """Frequencies in Hz, overshoot, poles as ωn and ζ or time constants.

    Parameters
    ----------
    u : (v,) array
        Standard uncertainties of the rig's values.
    """
    out: dict[str, Uncertain] = {}

    def put(name: str, value: float, slope: Array, unit: str) -> None:
        spread = math.sqrt(float(np.sum(np.where(u > 0, slope * u, 0.0) ** 2)))
        out[name] = Uncertain(float(value), spread, unit)

    names = list(model.form.names)
    if "natural_frequency" in names:
        k = names.index("natural_frequency")
        w, dw = solved.theta[k], solved.sensitivity[k]
        z, dz = solved.theta[k + 1], solved.sensitivity[k + 1]
        put("natural_frequency_hz", w / (2 * math.pi), dw / (2 * math.pi), "Hz")
        if 0 <= z < 1:
            q = math.sqrt(1.0 - z * z)
            put("damped_frequency", w * q, dw * q - w * z / q * dz, "rad/s")
            if model.form.family == "second-order" and z > 0:
                over = math.exp(-math.pi * z / q)
                put("overshoot", over, -math.pi / q**3 * over * dz, "")
    form = model.form
    if form.family == "rational" and form.single and form.numerator_count:
        # b_p/a_0, the gain of the lowest free power
        p, low = form.powers[0][0][0], form.integrators
        b, a = solved.numerators[0, 0, p], solved.denominator[low]
        db, da = solved.by_numerators[:, 0, 0, p], solved.by_denominator[:, low]
        unit = units.ratio(model.network.output_units[0], model.network.input_units[0], p - low)
        put("gain", b / a, db / a - b * da / a**2, unit)
    pairs, real = split_poles(solved.poles)
    several = len(pairs) > 1 or (len(pairs) == 1 and len(real) > 1)
    if several or "natural_frequency" not in names:
        for number, k in enumerate(pairs, start=1):
            p, dp = solved.poles[k], solved.by_poles[k]
            w = abs(p)
            dw = (np.conj(p) * dp).real / w
            z = -p.real / w
            suffix = f"_{number}"
            put("natural_frequency" + suffix, w, dw, "rad/s")
            put("damping_ratio" + suffix, z, (-dp.real - z * dw) / w, "")
    if len(real) > 1 or (real and "time_constant" not in names):
        for number, k in enumerate(real, start=1):
            p = solved.poles[k].real
            put(f"time_constant_{number}", -1.0 / p, solved.by_poles[k].real / p**2, "s")
    return out


def split_poles(poles: NDArray[np.complex128]) -> tuple[list[int], list[int]]:
    """Indices of the pole pairs by rising frequency (upper half plane) and of the real poles, slowest first.

    Poles at zero are in neither.
    """
    pairs = [k for k, p in enumerate(poles) if p.imag > REAL_POLE * abs(p)]
    real = [k for k, p in enumerate(poles) if p != 0 and abs(p.imag) <= REAL_POLE * abs(p)]
    return sorted(pairs, key=lambda k: abs(poles[k])), sorted(real, key=lambda k: abs(poles[k]))
