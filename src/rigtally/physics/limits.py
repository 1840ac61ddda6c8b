"""What a prediction says of its own validity: the oscillating lines and what each friction model gives."""

from __future__ import annotations

from dataclasses import replace

from rigtally.errors import RigError
from rigtally.physics.expansion import TooLarge
from rigtally.physics.line_model import LineModel
from rigtally.physics.model import Model
from rigtally.physics.prediction_result import Finding
from rigtally.physics.rig import Rig


def line_limits(model: LineModel) -> tuple[Finding, ...]:
    """Womersley number of each laminar line, its model uncertainty, and ωn and ζ by the other models."""
    lines = [e for e in model.rig.elements if e.kind == "laminar-line"]
    if not lines:
        return ()
    out: list[Finding] = []
    for line in model.values.oscillating:
        alpha = model.womersley(line)
        friction = model.values.friction[line.name]
        spread = 100.0 * friction.half_width
        text = (
            f"{line.name}: Womersley number {alpha:.3g} at {model.omega:.4g} rad/s; over 0.5 to 2 times that "
            f"frequency its resistance spreads by ±{spread:.2g} % and its inertance by "
            f"±{spread * abs(friction.inertance_slope):.2g} % (carried as the line's friction model)"
        )
        out.append(Finding("womersley-number", text, alpha))
    for choice in ("oscillating", "steady", "plug"):
        found = _by_friction(model.rig, choice)
        if found:
            out.append(Finding("friction-alternative", f'with friction = "{choice}": {found[0]}', found[1]))
    return tuple(out)


def _by_friction(rig: Rig, choice: str) -> tuple[str, float] | None:
    """ωn and ζ (or time constants) with all lines of one friction model."""
    elements = tuple(
        replace(e, options={**e.options, "friction": choice}) if e.kind == "laminar-line" else e
        for e in rig.elements
    )
    try:
        model = Model(replace(rig, elements=elements))
        theta = model.solve().theta
    except (RigError, TooLarge):
        return None
    named = dict(zip(model.form.names, theta, strict=True))
    if "natural_frequency" in named:
        w, z = named["natural_frequency"], named["damping_ratio"]
        return f"natural frequency {w:.4g} rad/s, damping ratio {z:.4g}", float(w)
    if "time_constant" in named:
        return f"time constant {named['time_constant']:.4g} s", float(named["time_constant"])
    return None
