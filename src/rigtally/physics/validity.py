"""Where a linear element has a limit, the log (or an amplitude) is held against it."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.physics.inner_response import InnerResponse
from rigtally.physics.network import assemble
from rigtally.physics.prediction_result import Finding, Prediction
from rigtally.physics.rig import GROUND, Element, Port, Reading, Rig
from rigtally.physics.rig_values import RigValues
from rigtally.quantities.uncertain import Uncertain

Array = NDArray[np.float64]
LAMINAR_UP_TO = 2300.0  # Reynolds number; common practice, no source (2000 to 2300 are in use)
ENTRANCE = 0.06  # entrance length = 0.06 Re d; common practice, no source
ENTRANCE_SHARE = 0.1  # of the line, from which the developing flow is worth a warning
SHORT_UP_TO = 0.1  # line over acoustic wavelength; common practice, no source
ORIFICE_RANGE = 0.2  # relative departure from the working flow


@dataclass(frozen=True)
class _Swing:
    """How far an inner quantity goes: lowest and highest value, and where in the record."""

    low: float
    high: float
    at_low: str
    at_high: str
    series: Array | None

    @property
    def size(self) -> float:
        return max(abs(self.low), abs(self.high))

    @property
    def at_size(self) -> str:
        return self.at_low if abs(self.low) > abs(self.high) else self.at_high


def check_validity(
    rig: Rig,
    prediction: Prediction,
    inputs: Array | None = None,
    interval: float = math.nan,
    *,
    start: float = 0.0,
    amplitude: Array | None = None,
) -> tuple[Finding, ...]:
    """Reynolds numbers, developing flow, acoustic length, absolute pressures, orifice range.

    Parameters
    ----------
    inputs : (drives, n) array, optional
        What the log says of the drives, SI, in the rig's order; the rig's inside is simulated
        (straight between samples, from the steady state of the first sample).
    interval, start : float
        Seconds between samples, and the time of the first on the log's own scale.
    amplitude : (drives,) array, optional
        Instead of a log: sinusoidal amplitudes, each at its worst frequency up to 10 times the
        fastest pole, all drives in step.

    Returns
    -------
    tuple of Finding
        Codes ending in "-exceeded" are warnings, the others say how far off the limit is.
    """
    model = RigValues(rig, assemble(rig).symbols)
    out = list(_acoustic_length(rig, model, prediction))
    if inputs is None and amplitude is None:
        return tuple(out)
    swing = _swing_by(rig, prediction, inputs, interval, start, amplitude)
    for element in rig.elements:
        if element.kind == "laminar-line":
            found = swing(Reading(element.name, "flow", through=element.name))
            if found:
                out.extend(_laminar(element, model, found))
        elif element.kind == "orifice":
            found = swing(Reading(element.name, "flow", through=element.name))
            if found:
                out.extend(_orifice(element, model, found))
    static = _static_pressure(rig)
    if static is not None:
        for node in _fluid_nodes(rig):
            reading = Reading(node, "pressure", port=Port(node))
            found = swing(reading)
            if found:
                out.extend(_cavitation(node, static, found))
    return tuple(out)


def _swing_by(
    rig: Rig,
    prediction: Prediction,
    inputs: Array | None,
    interval: float,
    start: float,
    amplitude: Array | None,
) -> Callable[[Reading], _Swing | None]:
    def swing(reading: Reading) -> _Swing | None:
        try:
            inner = InnerResponse(rig, reading)
        except RigError:
            return None
        if inputs is not None:
            series = inner.simulate(np.asarray(inputs, dtype=float), interval)
            low, high = int(np.argmin(series)), int(np.argmax(series))
            return _Swing(
                float(series[low]),
                float(series[high]),
                f"at {start + interval * low:.4g} s",
                f"at {start + interval * high:.4g} s",
                series,
            )
        sizes = np.abs(np.array([p for p in prediction.provenance.get("poles", ()) if p != 0]))
        fastest, slowest = (sizes.max(), sizes.min()) if sizes.size else (1.0, 1.0)
        gains = inner.largest_gain(np.geomspace(0.01 * slowest, 10.0 * fastest, 400))
        size = float(np.sum(gains * np.abs(np.asarray(amplitude, dtype=float))))
        return _Swing(-size, size, "at the worst frequency", "at the worst frequency", None)

    return swing


def _laminar(line: Element, model: RigValues, flow: _Swing) -> Iterator[Finding]:
    bore, density = model.element_value(line, "bore"), model.element_value(line, "density")
    viscosity, length = model.element_value(line, "viscosity"), model.element_value(line, "length")
    to_reynolds = 4.0 * density / (math.pi * bore * viscosity)
    reynolds = to_reynolds * flow.size
    if reynolds > LAMINAR_UP_TO:
        share = ""
        if flow.series is not None:
            over = float(np.mean(to_reynolds * np.abs(flow.series) > LAMINAR_UP_TO))
            share = f", above it in {100 * over:.2g} % of the record"
        yield Finding(
            "reynolds-exceeded",
            f"{line.name}: Reynolds number {reynolds:.0f} {flow.at_size}, laminar up to about "
            f"{LAMINAR_UP_TO:.0f}{share}: the resistance is too low there",
            reynolds,
        )
    else:
        yield Finding(
            "reynolds-number", f"{line.name}: Reynolds number at most {reynolds:.3g} {flow.at_size}", reynolds
        )
    entrance = ENTRANCE * reynolds * bore / length
    if entrance > ENTRANCE_SHARE:
        yield Finding(
            "development-length-exceeded",
            f"{line.name}: the flow develops over {100 * entrance:.2g} % of the line {flow.at_size}: "
            "the resistance is higher than that of developed flow",
            entrance,
        )


def _orifice(element: Element, model: RigValues, flow: _Swing) -> Iterator[Finding]:
    working = model.element_value(element, "flow")
    away = max(abs(flow.low), abs(flow.high)) / abs(working)
    code = "orifice-range-exceeded" if away > ORIFICE_RANGE else "orifice-range"
    yield Finding(
        code,
        f"{element.name}: the flow departs by {100 * away:.3g} % from its working flow {flow.at_size}; "
        "the slope of its pressure drop holds near that flow",
        away,
    )


def _cavitation(node: str, static: float, pressure: _Swing) -> Iterator[Finding]:
    lowest = static + pressure.low
    if lowest <= 0.0:
        yield Finding(
            "negative-absolute-pressure-exceeded",
            f"node {node!r}: the absolute pressure would fall to {lowest:.4g} Pa {pressure.at_low}: the "
            "fluid cavitates, and the linear model does not hold",
            lowest,
        )
    else:
        yield Finding(
            "lowest-pressure",
            f"node {node!r}: absolute pressure at least {lowest:.4g} Pa {pressure.at_low}",
            lowest,
        )


def _acoustic_length(rig: Rig, model: RigValues, prediction: Prediction) -> Iterator[Finding]:
    """Line length over the wavelength 2πc/ω at the rig's fastest oscillation, c = √(K/ρ)."""
    poles = [p for p in prediction.provenance.get("poles", ()) if p.imag != 0] or [
        p for p in prediction.provenance.get("poles", ()) if p != 0
    ]
    if not poles:
        return
    omega = max(abs(p) for p in poles) if poles[0].imag != 0 else min(abs(p) for p in poles)
    for line in rig.elements:
        if line.kind != "laminar-line":
            continue
        try:
            speed = math.sqrt(
                model.element_value(line, "bulk_modulus") / model.element_value(line, "density")
            )
        except (RigError, ImportError):
            continue
        waves = model.element_value(line, "length") * omega / (2.0 * math.pi * speed)
        code = "line-length-exceeded" if waves > SHORT_UP_TO else "line-length"
        yield Finding(
            code,
            f"{line.name}: {waves:.3g} acoustic wavelengths long at {omega:.4g} rad/s; as one lump it is "
            f"good to about {SHORT_UP_TO:g}",
            waves,
        )


def _static_pressure(rig: Rig) -> float | None:
    stated = rig.settings.get("static_pressure")
    if stated is None:
        return None
    return float(stated.value if isinstance(stated, Uncertain) else stated)


_FLUID = ("fluid-resistance", "fluid-inertance", "chamber", "open-tank", "laminar-line", "orifice")


def _fluid_nodes(rig: Rig) -> list[str]:
    found: dict[str, None] = {}
    for element in rig.elements:
        ports = element.ports if element.kind in _FLUID else ()
        if element.kind in ("piston", "bellows"):
            ports = element.ports[:1]
        for port in ports:
            for node in (port.first, port.second):
                if node != GROUND:
                    found[node] = None
    return list(found)
