"""What follows from the parameters, with exact derivatives."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]


def derived_quantities(
    names: tuple[str, ...], theta: Array, covariance: Array, dof: float
) -> dict[str, Uncertain]:
    """Frequencies in Hz, damped frequency, overshoot, time constants of real poles.

    Overshoot of the standard second-order form's step response: exp(-πζ/√(1-ζ²)); handbook formula.
    """
    out: dict[str, Uncertain] = {}

    def put(name: str, value: float, slopes: dict[str, float], unit: str) -> None:
        row = np.zeros(theta.size)
        for key, slope in slopes.items():
            row[names.index(key)] = slope
        used = row != 0
        variance = float(row[used] @ covariance[np.ix_(used, used)] @ row[used])
        out[name] = Uncertain(value, math.sqrt(variance) if variance >= 0 else math.nan, unit, dof)

    if "natural_frequency" in names:
        w = float(theta[names.index("natural_frequency")])
        z = float(theta[names.index("damping_ratio")])
        put("natural_frequency_hz", w / (2 * math.pi), {"natural_frequency": 1 / (2 * math.pi)}, "Hz")
        if 0 < z < 1:
            root = math.sqrt(1 - z * z)
            put(
                "damped_frequency",
                w * root,
                {"natural_frequency": root, "damping_ratio": -w * z / root},
                "rad/s",
            )
            over = math.exp(-math.pi * z / root)
            put("overshoot", over, {"damping_ratio": -math.pi * over / root**3}, "")
        elif z > 1:
            root = math.sqrt(z * z - 1)
            for place, sign in (("slow", 1.0), ("fast", -1.0)):
                tau = (z + sign * root) / w
                put(
                    f"time_constant_{place}",
                    tau,
                    {"natural_frequency": -tau / w, "damping_ratio": (1 + sign * z / root) / w},
                    "s",
                )
    elif names and "time_constant" in names:
        tau = float(theta[names.index("time_constant")])
        put(
            "corner_frequency_hz",
            1 / (2 * math.pi * tau),
            {"time_constant": -1 / (2 * math.pi * tau**2)},
            "Hz",
        )
    return out
