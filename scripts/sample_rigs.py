"""The sample rigs as non-linear differential equations, integrated with scipy. Invented, all of them.

Nothing here uses rigtally: the logs have to come from somewhere else than the model that they are tallied with.
Each rig is a function of its element values (keys as in the rig file) and gives time, inputs and outputs in SI.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.special import j0, jn_zeros

Array = NDArray[np.float64]
Values = Mapping[str, float]


@dataclass(frozen=True)
class Test:
    """What a rig shows in a test: time (n,), inputs and outputs by channel name, SI."""

    time: Array
    channels: dict[str, Array] = field(default_factory=dict)


def smooth_step(t: Array | float, at: float, over: float) -> Array:
    """0 to 1 over a time, with continuous slope: a valve or a supply, not an ideal step."""
    x = np.clip((np.asarray(t, dtype=float) - at) / over, 0.0, 1.0)
    return x * x * (3.0 - 2.0 * x)


def integrate(
    slope: Callable[[float, Array], Array],
    initial: Array,
    time: Array,
    step: float,
    matrix: Array | None = None,
) -> Array:
    """States at the sample times (n_states, n), tightly."""
    found = solve_ivp(
        slope, (float(time[0]), float(time[-1])), initial, method="LSODA", t_eval=time,
        rtol=1e-9, atol=1e-9 * np.maximum(np.abs(initial).max(), 1.0) * 1e-3, max_step=step,
        **({"jac": lambda t, y: matrix} if matrix is not None else {}),
    )  # fmt: skip
    if not found.success:
        raise RuntimeError(found.message)
    return np.asarray(found.y)


# ---------------------------------------------------------------------------------------------------------------
IMPULSE_LINE: dict[str, float] = {
    "oil.density": 872.6,
    "oil.viscosity": 0.02985,
    "impulse line.bore": 4.012e-3,
    "impulse line.length": 3.2035,
    "gauge chamber.compliance": 3.02e-12,
}


def impulse_line(
    values: Values, *, air: float = 0.0, at: float = 0.5, height: float = 80e3, rise: float = 0.03
) -> Test:
    """An oil-filled impulse line into a gauge chamber; a valve lets the pump's pressure on to the tapping.

    The flow is the exact series of oscillating laminar pipe flow over the zeros α_n of J0,

        dq_n/dt = -(ν α_n²/R²) q_n + (4 A/(α_n² ρ l)) Δp,   Q = Σ q_n,

    with an entrance and exit loss ξ ρ Q|Q|/(2 A²), ξ = 1.5 (small). `air` is a trapped bubble (m³ at 6 bar
    absolute) that is squeezed adiabatically.
    """
    rho, mu = values["oil.density"], values["oil.viscosity"]
    bore, length = values["impulse line.bore"], values["impulse line.length"]
    compliance = values["gauge chamber.compliance"]
    radius, area = bore / 2, math.pi * bore**2 / 4
    alpha = jn_zeros(0, 30)
    decay = mu / rho * alpha**2 / radius**2
    push = 4.0 * area / (alpha**2 * rho * length)
    # what the series leaves out (its terms sum to 1) belongs to layers too thin to store momentum: to the last term
    push[-1] += area / (rho * length) * (1.0 - float(np.sum(4.0 / alpha**2)))
    static = 6.0e5
    time = np.arange(3000) * 1e-3

    def line_pressure(t: Array | float) -> Array:
        return height * smooth_step(t, at, rise) * (1.0 + 0.01 * np.sin(2 * np.pi * 1.7 * np.asarray(t)))

    def slope(t: float, y: Array) -> Array:
        q, p = y[:-1], y[-1]
        flow = float(q.sum())
        loss = 1.5 * rho * flow * abs(flow) / (2.0 * area**2)
        dp = float(line_pressure(t)) - p - loss
        soft = compliance + air / (1.4 * static) * (static / (static + p)) ** (1.0 + 1.0 / 1.4)
        return np.append(-decay * q + push * dp, flow / soft)

    states = integrate(slope, np.zeros(alpha.size + 1), time, 2e-3)
    return Test(time, {"p_line": line_pressure(time), "p_gauge": states[-1]})


# ---------------------------------------------------------------------------------------------------------------
RATE_CAPSULE: dict[str, float] = {
    "capillary.resistance": 2.53e9,
    "capsule.volume": 150.6e-6,
    "rig.static_pressure": 10.04e5,
    "bellows.area": 3.012e-4,
    "bellows.stiffness": 2012.0,
    "moving part.mass": 0.02006,
    "oil damper.damping": 5.06,
}


def rate_capsule(values: Values) -> Test:
    """A gas capsule behind a capillary: a bellows feels outside against inside, its tip follows the pressure's rate.

    The gas is compressed adiabatically (not linearly), and the capillary's loss has a small turbulent part.
    """
    r, volume = values["capillary.resistance"], values["capsule.volume"]
    static, gamma = values["rig.static_pressure"], 1.401
    area, k = values["bellows.area"], values["bellows.stiffness"]
    m, d = values["moving part.mass"], values["oil damper.damping"]
    time = np.arange(12_000) / 4000.0

    def outside(t: Array | float) -> Array:
        """Ramps of a regulated vessel: corners rounded over 4 ms, never quite straight."""
        t = np.asarray(t, dtype=float)
        out = np.zeros_like(t)
        for begin, rate in (
            (0.25, 32e3),
            (0.65, -32e3),
            (1.05, -40e3),
            (1.4, 40e3),
            (1.9, 25e3),
            (2.5, -25e3),
        ):
            x = np.clip(t - begin, 0.0, None)
            ramp = np.where(x < 4e-3, x * x / 8e-3, x - 2e-3)
            out = out + rate * ramp
        return out * (1.0 + 0.004 * np.sin(2 * np.pi * 2.3 * t))

    def slope(t: float, y: Array) -> Array:
        x, v, p = y
        across = float(outside(t)) - p
        flow = across / r / (1.0 + 0.01 * abs(across) / 10e3)
        gas = volume / (gamma * static) * (static / (static + p)) ** (1.0 + 1.0 / gamma)
        return np.array([v, (area * across - k * x - d * v) / m, (flow + area * v) / gas])

    states = integrate(slope, np.zeros(3), time, 5e-4)
    return Test(time, {"p_out": outside(time), "x_tip": states[0]})


# ---------------------------------------------------------------------------------------------------------------
WINCH_MOTOR: dict[str, float] = {
    "winding.resistance": 0.812,
    "winding inductance.inductance": 6.05e-3,
    "armature.constant": 0.0502,
    "drum and rotor.inertia": 2.42e-4,
    "bearings.damping": 4.1e-4,
}


def winch_motor(values: Values) -> Test:
    """A small winch motor: supply voltage and load torque both move; current and speed are read.

    Coulomb friction of the seals (the drum never stops) and a slight saturation of the winding.
    """
    r, inductance = values["winding.resistance"], values["winding inductance.inductance"]
    constant = values["armature.constant"]
    inertia, damping = values["drum and rotor.inertia"], values["bearings.damping"]
    time = np.arange(12_000) / 4000.0

    def supply(t: Array | float) -> Array:
        out = 12.0 * np.ones_like(np.asarray(t, dtype=float))
        for at, size in ((0.2, 6.0), (0.7, -4.0), (1.15, 7.0), (1.5, -5.0), (2.1, 4.0), (2.6, -6.0)):
            out = out + size * smooth_step(t, at, 8e-3)
        return out

    def load(t: Array | float) -> Array:
        out = 0.08 * np.ones_like(np.asarray(t, dtype=float))
        for at, size in ((0.45, 0.10), (0.95, -0.06), (1.3, 0.08), (1.85, -0.10), (2.35, 0.09)):
            out = out + size * smooth_step(t, at, 10e-3)
        return out

    def slope(t: float, y: Array) -> Array:
        i, w = y
        own = inductance * (1.0 - 0.01 * (i / 10.0) ** 2)
        friction = 0.004 * math.tanh(w / 2.0)
        return np.array(
            [
                (float(supply(t)) - r * i - constant * w) / own,
                (constant * i - damping * w - friction - float(load(t))) / inertia,
            ]
        )

    i0 = (0.08 + 0.004 + damping * 200.0) / constant
    for _ in range(50):
        w0 = (12.0 - r * i0) / constant
        i0 = (0.084 + damping * w0) / constant
    states = integrate(slope, np.array([i0, w0]), time, 5e-4)
    return Test(
        time, {"u_supply": supply(time), "m_load": load(time), "i_motor": states[0], "w_drum": states[1]}
    )


def check_series() -> float:
    """Largest value of J0 at the zeros used: the series is what it says."""
    return float(np.max(np.abs(j0(jn_zeros(0, 30)))))
